"""The box's journal: what happened, numbered, kept until the host has acknowledged it."""

from __future__ import annotations

from collections import deque

from rigctl.link import messages as msg

# A resend repeats at most this many frames, so that a slow line is not flooded.
_MOST_FRAMES = 6


class JournalKeeper:
    """A ring of entries. When it is full, new entries are counted instead, and that is said.

    Parameters
    ----------
    slots : int
        How many unacknowledged entries are kept.
    resend_ticks : int
        Unacknowledged entries are sent again after this.
    """

    def __init__(self, slots: int, resend_ticks: int) -> None:
        self._slots = slots
        self._resend_ticks = resend_ticks
        self._entries: deque[msg.Entry] = deque()
        self._first_seq = 0
        self._sent_seq = 0
        self._sent_tick = 0
        self._lost = 0

    @property
    def next_seq(self) -> int:
        """The number that the next entry will have."""
        return self._first_seq + len(self._entries)

    def add(self, kind: str, trigger: int, line: int, tick: int, width: int) -> None:
        """Log something that happened at ``tick``."""
        # One slot is kept free to say how many were lost.
        if len(self._entries) >= self._slots - 1:
            self._lost += 1
            return
        self._tell_lost(tick)
        self._entries.append(
            msg.Entry(msg.JOURNAL_CODES[kind], trigger, line, tick & msg.TICK_MASK, width)
        )

    def _tell_lost(self, tick: int) -> None:
        if self._lost:
            code = msg.JOURNAL_CODES["lost"]
            self._entries.append(msg.Entry(code, self._lost, 0, tick & msg.TICK_MASK, 0))
            self._lost = 0

    def acknowledged(self, next_seq: int) -> None:
        """Forget what the host has; an old or impossible number changes nothing."""
        if next_seq > self.next_seq:
            return
        while self._first_seq < next_seq:
            self._entries.popleft()
            self._first_seq += 1
        self._sent_seq = max(self._sent_seq, self._first_seq)

    def resend_tick(self) -> int | None:
        """Return when something has to be sent again, or None."""
        if not self._entries or self._sent_seq <= self._first_seq:
            return None
        return self._sent_tick + self._resend_ticks

    def waiting(self, tick: int) -> bool:
        """Tell whether :meth:`to_send` has something at ``tick``."""
        if self._sent_seq < self.next_seq or self._lost:
            return True
        resend = self.resend_tick()
        return resend is not None and tick >= resend

    def to_send(self, tick: int, credits: int) -> list[msg.Journal]:
        """Return the frames to send at ``tick``: what is new, or all again when overdue.

        Each says how many slots of the queue are free, since what fired has freed one.
        """
        resend = self.resend_tick()
        if resend is not None and tick >= resend:
            self._sent_seq = self._first_seq
        if self._lost and len(self._entries) < self._slots - 1:
            self._tell_lost(tick)
        frames: list[msg.Journal] = []
        while self._sent_seq < self.next_seq and len(frames) < _MOST_FRAMES:
            at = self._sent_seq - self._first_seq
            part = tuple(
                self._entries[i] for i in range(at, min(at + msg.MOST_ENTRIES, len(self._entries)))
            )
            frames.append(msg.Journal(self._sent_seq, credits, part))
            self._sent_seq += len(part)
            self._sent_tick = tick
        return frames
