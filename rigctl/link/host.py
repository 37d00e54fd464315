"""The host's end of the link: a state machine, bytes in → events out. It has no clock of its own.

One request is outstanding at a time and repeated until it is answered; the box remembers its last
answer, so repeating is harmless. Journal entries come out exactly once and in order.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable
from typing import Protocol

from msgspec import Struct

from rigctl.link import messages as msg
from rigctl.link.frames import FrameReader, encode_frame

RETRY_NS = 40_000_000
GIVE_UP_NS = 2_000_000_000
_WRAP = 1 << 32
_KEEP_ALIVE = encode_frame(msg.encode(msg.KeepAlive()))
_STOP = encode_frame(msg.encode(msg.Stop()))
_KEEP_ALIVE_MS = 250


class LinkEvent(Struct, frozen=True):
    """Base of all that the link tells."""


class BoxHello(LinkEvent, frozen=True):
    """The box said who it is, all of its lines included."""

    wire: int
    firmware: str
    tick_num: int
    tick_den: int
    boot: int
    queue_slots: int
    min_width_ticks: int
    max_width_ticks: int
    min_spacing_ticks: int
    outputs: list[str]
    inputs: list[str]


class Armed(LinkEvent, frozen=True):
    """Both arming steps are done."""


class ArmRefused(LinkEvent, frozen=True):
    """The box would not be armed."""

    reason: str


class Uploaded(LinkEvent, frozen=True):
    """The box has taken these triggers, or journals why not."""

    ids: list[int]


class UploadRefused(LinkEvent, frozen=True):
    """A trigger was not taken at all."""

    id: int
    reason: str


class CancelTooLate(LinkEvent, frozen=True):
    """A trigger could not be taken back: it fired, or never came."""

    id: int


class Journal(LinkEvent, frozen=True):
    """One journal entry; ``tick`` is unwrapped, ``line`` is a name."""

    seq: int
    kind: str
    id: int
    line: str
    tick: int
    width_ticks: int
    reason: str
    boot: int


class Pong(LinkEvent, frozen=True):
    """A clock exchange: host time out, box ticks in and out (unwrapped), host time back."""

    t1_ns: int
    t2_tick: int
    t3_tick: int
    t4_ns: int


class Complete(LinkEvent, frozen=True):
    """Everything the box saw up to ``through_tick`` has been delivered as journal entries.

    ``asked_ns`` is the host time of the ping that was answered so.
    """

    through_tick: int
    asked_ns: int


class Damaged(LinkEvent, frozen=True):
    """Frames from the box that were thrown away."""

    count: int
    what: str


class Retried(LinkEvent, frozen=True):
    """A request had to be repeated."""

    what: str
    times: int


class Disarmed(LinkEvent, frozen=True):
    """The box disarmed, and why."""

    reason: str


class BootSeen(LinkEvent, frozen=True):
    """The box started anew."""

    boot: int


class LinkLost(LinkEvent, frozen=True):
    """The box does not answer any more."""

    what: str


class HostTrigger(Protocol):
    """What an upload needs to know of a trigger (ticks unwrapped)."""

    @property
    def id(self) -> int: ...
    @property
    def line(self) -> str: ...
    @property
    def tick(self) -> int: ...
    @property
    def width_ticks(self) -> int: ...


class _Request(Struct):
    what: str
    message: msg.Message
    ids: list[int]
    since_ns: int = 0
    sent_ns: int = 0
    times: int = 0


class HostLink:
    """The host's end.

    Parameters
    ----------
    retry_ns : int
        A request (or ping) without an answer is repeated after this.
    give_up_ns : int
        … and given up after this: the link is lost.
    """

    def __init__(self, retry_ns: int = RETRY_NS, give_up_ns: int = GIVE_UP_NS) -> None:
        self.armed = False
        self.credits = 0
        self.last_sent_ns = 0
        self.lost = False
        self._retry_ns = retry_ns
        self._give_up_ns = give_up_ns
        self._reader = FrameReader()
        self._damage_told = 0
        self._out: list[bytes] = []
        self._requests: deque[_Request] = deque()
        self._current: _Request | None = None
        self._seq = 0
        self._plan_hash = b""
        self._hello: msg.HelloAnswer | None = None
        self._outputs: dict[int, str] = {}
        self._inputs: dict[int, str] = {}
        self._boot: int | None = None
        self._hello_told = False
        self._tick = 0
        self._tick_heard = False
        self._next_entry = 0
        self._ack_owed = False
        self._cookie = 0
        self._ping_open: dict[int, int] = {}
        self._ping_since_ns: int | None = None
        self._ping_sent_ns = 0
        self._ping_times = 0
        self._completes: deque[tuple[int, int, int]] = deque()
        self._handlers = {
            msg.HelloAnswer: self._on_hello,
            msg.LineName: self._on_line,
            msg.Challenge: self._on_challenge,
            msg.Ack: self._on_ack,
            msg.Nak: self._on_nak,
            msg.Pong: self._on_pong,
            msg.Journal: self._on_journal,
            msg.Boot: self._on_boot,
        }

    # --- what the host asks -----------------------------------------------------------------

    def hello(self, now_ns: int) -> None:
        """Ask the box who it is."""
        self._hello_told = False
        self._request("hello", msg.Hello(self._new_seq()), now_ns)

    def arm_request(
        self, now_ns: int, plan_hash_hex: str, expiry_ms: int, limits: dict[str, int]
    ) -> None:
        """Ask for arming; the second step follows by itself when the box has challenged.

        Parameters
        ----------
        limits : dict
            ``min_width_ns``, ``max_width_ns``, ``min_spacing_ns``, ``max_pulses_per_s``,
            ``max_duty_permille``, ``max_pulses``.
        """
        assert self._hello is not None
        num, den = self._hello.tick_num, self._hello.tick_den

        def ticks(key: str) -> int:
            return min(limits[key] * den // num, msg.TICK_MASK)

        self._plan_hash = bytes.fromhex(plan_hash_hex)
        self._request(
            "arm request",
            msg.ArmRequest(
                self._new_seq(), self._plan_hash, min(expiry_ms, msg.TICK_MASK),
                ticks("min_width_ns"), ticks("max_width_ns"), ticks("min_spacing_ns"),
                min(limits["max_pulses_per_s"], 0xFFFF), min(limits["max_duty_permille"], 0xFFFF),
                min(limits["max_pulses"], msg.TICK_MASK), _KEEP_ALIVE_MS,
            ),
            now_ns,
        )  # fmt: skip

    def upload(self, now_ns: int, triggers: Iterable[HostTrigger]) -> None:
        """Send triggers to the box's queue, as many frames as that takes."""
        line_of = {name: index for index, name in self._outputs.items()}
        batch = [
            msg.Trigger(t.id, line_of[t.line], t.tick & msg.TICK_MASK, t.width_ticks)
            for t in triggers
        ]
        for first in range(0, len(batch), msg.MOST_TRIGGERS):
            part = tuple(batch[first : first + msg.MOST_TRIGGERS])
            self.credits -= len(part)
            self._request("upload", msg.Upload(self._new_seq(), part), now_ns, [t.id for t in part])

    def cancel(self, now_ns: int, trigger: int) -> None:
        """Take a trigger back."""
        self._request("cancel", msg.Cancel(self._new_seq(), trigger), now_ns, [trigger])

    def disarm(self, now_ns: int) -> None:
        """Ask for outputs low and an empty queue."""
        self._request("disarm", msg.Disarm(self._new_seq()), now_ns)

    def stop(self, now_ns: int) -> None:
        """Stop the box at once, past everything that waits."""
        self._requests.clear()
        self._current = None
        self._out.insert(0, _STOP)
        self.last_sent_ns = now_ns

    def ping(self, now_ns: int) -> None:
        """Start a clock exchange; also asks for the journal up to now."""
        if self._ping_since_ns is None:
            self._ping_since_ns, self._ping_times = now_ns, 0
        self._send_ping(now_ns)

    def keep_alive(self, now_ns: int) -> None:
        """Say that the host is there."""
        self._out.append(_KEEP_ALIVE)
        self.last_sent_ns = now_ns

    # --- bytes and time ---------------------------------------------------------------------

    def take_output(self) -> bytes:
        """Return the bytes to send now."""
        if self._ack_owed:
            self._ack_owed = False
            self._out.append(encode_frame(msg.encode(msg.JournalAck(self._next_entry))))
        if not self._out:
            return b""
        out = b"".join(self._out)
        self._out.clear()
        return out

    def deadline_ns(self) -> int | None:
        """Return when :meth:`tick` has something to do."""
        due = []
        if self._current is not None:
            due.append(self._current.sent_ns + self._retry_ns)
        if self._ping_since_ns is not None:
            due.append(self._ping_sent_ns + self._retry_ns)
        return min(due) if due else None

    def tick(self, now_ns: int) -> list[LinkEvent]:
        """Repeat what has not been answered; give up after long enough."""
        events: list[LinkEvent] = []
        request = self._current
        if request is not None and now_ns >= request.sent_ns + self._retry_ns:
            if now_ns - request.since_ns >= self._give_up_ns:
                return self._give_up(request.what)
            events.append(Retried(request.what, request.times))
            self._send_request(request, now_ns)
        if self._ping_since_ns is not None and now_ns >= self._ping_sent_ns + self._retry_ns:
            if now_ns - self._ping_since_ns >= self._give_up_ns:
                return self._give_up("ping")
            self._ping_times += 1
            events.append(Retried("ping", self._ping_times))
            self._send_ping(now_ns)
        return events

    def feed(self, data: bytes, now_ns: int) -> list[LinkEvent]:
        """Take bytes from the box; return what they tell."""
        events: list[LinkEvent] = []
        for payload in self._reader.feed(data):
            try:
                message = msg.decode(payload)
            except msg.MessageError as error:
                events.append(Damaged(1, str(error)))
                continue
            handler = self._handlers.get(type(message))
            if handler is None:
                events.append(Damaged(1, f"{type(message).__name__} is not for the host"))
            else:
                handler(message, now_ns, events)  # type: ignore[operator]
        damaged = self._reader.damage.total - self._damage_told
        if damaged:
            self._damage_told += damaged
            events.append(Damaged(damaged, self._reader.last_damage))
        return events

    # --- inside -----------------------------------------------------------------------------

    def _new_seq(self) -> int:
        # 0 is never used, so that a box that has just booted remembers no answer to it.
        self._seq = self._seq % 255 + 1
        return self._seq

    def _request(
        self, what: str, message: msg.Message, now_ns: int, ids: list[int] | None = None
    ) -> None:
        if self.lost:
            return
        self._requests.append(_Request(what, message, ids or []))
        self._next_request(now_ns)

    def _next_request(self, now_ns: int) -> None:
        if self._current is None and self._requests:
            self._current = self._requests.popleft()
            self._current.since_ns = now_ns
            self._send_request(self._current, now_ns)

    def _send_request(self, request: _Request, now_ns: int) -> None:
        request.sent_ns = now_ns
        request.times += 1
        self._out.append(encode_frame(msg.encode(request.message)))
        self.last_sent_ns = now_ns

    def _send_ping(self, now_ns: int) -> None:
        self._cookie = self._cookie + 1 & msg.TICK_MASK
        self._ping_open[self._cookie] = now_ns
        self._ping_sent_ns = now_ns
        self._out.append(encode_frame(msg.encode(msg.Ping(self._cookie))))
        self.last_sent_ns = now_ns

    def _give_up(self, what: str) -> list[LinkEvent]:
        self.lost = True
        self.armed = False
        self._current = None
        self._requests.clear()
        self._ping_since_ns = None
        return [LinkLost(f"no answer to {what} for {self._give_up_ns / 1e9:g} s")]

    def _unwrap(self, tick: int) -> int:
        """Return the full tick nearest to the last one heard; the first is taken as it comes."""
        if not self._tick_heard:
            self._tick_heard = True
            self._tick = tick
        ahead = (tick - self._tick) & msg.TICK_MASK
        if ahead >= _WRAP // 2:
            ahead -= _WRAP
        return self._tick + ahead

    def _answered(self, seq: int, now_ns: int) -> _Request | None:
        request = self._current
        if request is None or getattr(request.message, "seq", 0) != seq:
            return None
        self._current = None
        self._next_request(now_ns)
        return request

    def _on_hello(self, answer: msg.HelloAnswer, now_ns: int, events: list[LinkEvent]) -> None:
        if self._boot is not None and answer.boot != self._boot:
            self._rebooted(answer.boot, events)
        self._boot = answer.boot
        self._hello = answer
        self.credits = answer.slots
        self._tell_hello(now_ns, events)

    def _on_line(self, line: msg.LineName, now_ns: int, events: list[LinkEvent]) -> None:
        names = self._outputs if line.is_output else self._inputs
        names[line.index] = msg.text(line.name)
        self._tell_hello(now_ns, events)

    def _tell_hello(self, now_ns: int, events: list[LinkEvent]) -> None:
        """Hello is answered when every line has been named; else it is asked again."""
        hello = self._hello
        if hello is None or self._hello_told:
            return
        if len(self._outputs) + len(self._inputs) < hello.lines:
            return
        if self._answered(hello.seq, now_ns) is None:
            return
        self._hello_told = True
        events.append(
            BoxHello(
                hello.wire, msg.text(hello.firmware), hello.tick_num, hello.tick_den, hello.boot,
                hello.slots, hello.min_width, hello.max_width, hello.min_spacing,
                [self._outputs[i] for i in sorted(self._outputs)],
                [self._inputs[i] for i in sorted(self._inputs)],
            )
        )  # fmt: skip

    def _on_challenge(self, message: msg.Challenge, now_ns: int, events: list[LinkEvent]) -> None:
        if self._answered(message.seq, now_ns) is not None:
            confirm = msg.ArmConfirm(self._new_seq(), message.nonce, self._plan_hash[:8])
            self._request("arm confirm", confirm, now_ns)

    def _on_ack(self, message: msg.Ack, now_ns: int, events: list[LinkEvent]) -> None:
        request = self._answered(message.seq, now_ns)
        if request is None:
            return
        self._credit(message.credits)
        if request.what == "arm confirm":
            self.armed = True
            events.append(Armed())
        elif request.what == "upload":
            events.append(Uploaded(request.ids))
        elif request.what == "disarm":
            self.armed = False

    def _credit(self, free: int) -> None:
        """Note what the box has free, less what is on its way there (perhaps counted twice)."""
        waiting = sum(len(r.ids) for r in self._requests if r.what == "upload")
        if self._current is not None and self._current.what == "upload":
            waiting += len(self._current.ids)
        self.credits = free - waiting

    def _on_nak(self, message: msg.Nak, now_ns: int, events: list[LinkEvent]) -> None:
        request = self._answered(message.seq, now_ns)
        if request is None:
            return
        reason = msg.REASONS.get(message.reason, f"reason {message.reason}")
        if request.what == "upload":
            events.extend(UploadRefused(i, reason) for i in request.ids)
        elif request.what == "cancel":
            events.append(CancelTooLate(request.ids[0]))
        elif request.what in ("arm request", "arm confirm"):
            events.append(ArmRefused(reason))

    def _on_pong(self, message: msg.Pong, now_ns: int, events: list[LinkEvent]) -> None:
        sent_ns = self._ping_open.pop(message.cookie, None)
        if sent_ns is None:
            return
        # Earlier pings are answered by this one too: the journal is complete up to here.
        self._ping_open = {c: t for c, t in self._ping_open.items() if t > sent_ns}
        if not self._ping_open:
            self._ping_since_ns = None
        self._tick = self._unwrap(message.tx_tick)
        t2_tick = self._unwrap(message.rx_tick)
        self._credit(message.credits)
        events.append(Pong(sent_ns, t2_tick, self._tick, now_ns))
        self._completes.append((message.next_seq, self._tick, sent_ns))
        self._tell_complete(events)

    def _tell_complete(self, events: list[LinkEvent]) -> None:
        last = None
        while self._completes and self._next_entry >= self._completes[0][0]:
            last = self._completes.popleft()
        if last is not None:
            events.append(Complete(last[1], last[2]))

    def _on_journal(self, message: msg.Journal, now_ns: int, events: list[LinkEvent]) -> None:
        self._ack_owed = True
        self._credit(message.credits)
        for n, entry in enumerate(message.entries):
            # What came before is known; what comes after a gap will be sent again.
            if message.seq + n == self._next_entry:
                self._next_entry += 1
                self._tell_entry(message.seq + n, entry, events)
        self._tell_complete(events)

    def _tell_entry(self, seq: int, entry: msg.Entry, events: list[LinkEvent]) -> None:
        kind = msg.JOURNAL_KINDS.get(entry.kind, f"kind {entry.kind}")
        names = self._inputs if kind == "edge" else self._outputs
        tick = self._unwrap(entry.tick)
        self._tick = max(self._tick, tick)
        reason = msg.REASONS.get(entry.width, "") if kind == "refused" else ""
        events.append(
            Journal(
                seq, kind, entry.id, names.get(entry.line, ""), tick, entry.width, reason,
                self._boot or 0,
            )
        )  # fmt: skip
        if kind == "disarmed":
            self.armed = False
            events.append(Disarmed(msg.DISARMED.get(entry.id, f"reason {entry.id}")))

    def _on_boot(self, message: msg.Boot, now_ns: int, events: list[LinkEvent]) -> None:
        if self._boot is not None and message.boot != self._boot:
            self._rebooted(message.boot, events)

    def _rebooted(self, boot: int, events: list[LinkEvent]) -> None:
        """A box that starts anew has forgotten everything: queue, arming, journal, ticks."""
        self._boot = boot
        self.armed = False
        self._current = None
        self._requests.clear()
        self._next_entry = 0
        self._completes.clear()
        self._tick_heard = False
        events.append(BootSeen(boot))
