"""The box: queue, arming, keep-alive, limits, journal. It never pulses unless armed.

Ticks are plain integers that never wrap in here and are cut to 32 bits on the wire.
"""

from __future__ import annotations

import heapq
from typing import NamedTuple

from msgspec import Struct

from rigctl.box.journal import JournalKeeper
from rigctl.box.limits import LimitKeeper, LineLimits
from rigctl.link import messages as msg
from rigctl.link.frames import FrameReader, encode_frame

_HALF = 1 << 31
_FARTHEST = 1 << 30
_MOST_KEEP_ALIVE_MS = 250
_CONFIRM_WITHIN_S = 2


class Edge(NamedTuple):
    """An output line changed at a tick."""

    line: str
    level: bool
    tick: int


class BoxConfig(Struct, frozen=True):
    """What a box is built with: lines, clock, and limits of its own that no host can loosen."""

    outputs: tuple[str, ...]
    inputs: tuple[str, ...] = ()
    firmware: str = "rigctl-box 1"
    tick_num: int = 500
    tick_den: int = 1
    boot: int = 1
    queue_slots: int = 32
    journal_slots: int = 64
    min_width_ticks: int = 60
    max_width_ticks: int = 2_000_000
    min_spacing_ticks: int = 200
    max_per_s: int = 1_000
    max_duty_permille: int = 900
    seed: int = 1


class _Queued(NamedTuple):
    tick: int
    id: int
    line: int
    width: int


class Box:
    """One boot of a box.

    Bytes go in by :meth:`receive`, input edges by :meth:`input_edge`, time by :meth:`advance`;
    bytes come out of :meth:`take_output`, output edges of :meth:`advance`.
    """

    def __init__(self, config: BoxConfig) -> None:
        self.config = config
        self.armed = False
        self._tick = 0
        self._per_s = 1_000_000_000 * config.tick_den // config.tick_num
        self._reader = FrameReader()
        self._out: list[bytes] = []
        self._journal = JournalKeeper(config.journal_slots, resend_ticks=self._per_s // 20)
        self._queue: list[_Queued] = []
        self._falling: list[tuple[int, int]] = []
        self._edges: list[Edge] = []
        self._own = LineLimits(
            config.min_width_ticks,
            config.max_width_ticks,
            config.min_spacing_ticks,
            config.max_per_s,
            config.max_duty_permille,
            msg.TICK_MASK,
        )
        self._limits: LimitKeeper | None = None
        self._last_answer: tuple[int, list[bytes]] | None = None
        self._challenge: tuple[int, msg.ArmRequest, int] | None = None
        self._nonce = config.seed & msg.TICK_MASK
        self._heard_tick = 0
        self._keep_alive_ticks = 0
        self._expiry_tick = 0
        self._handlers = {
            msg.Hello: self._on_hello,
            msg.ArmRequest: self._on_arm_request,
            msg.ArmConfirm: self._on_arm_confirm,
            msg.Upload: self._on_upload,
            msg.Cancel: self._on_cancel,
            msg.Disarm: self._on_disarm,
        }
        self._out.append(encode_frame(msg.encode(msg.Boot(config.boot))))

    # --- bytes and ticks --------------------------------------------------------------------

    def receive(self, data: bytes, tick: int) -> None:
        """Take bytes that arrived at ``tick``; call :meth:`advance` up to there first."""
        self._tick = max(self._tick, tick)
        for payload in self._reader.feed(data):
            try:
                message = msg.decode(payload)
            except msg.MessageError:
                continue
            self._heard_tick = self._tick
            if isinstance(message, msg.KeepAlive):
                continue
            if isinstance(message, msg.JournalAck):
                self._journal.acknowledged(message.next_seq)
            elif isinstance(message, msg.Ping):
                self._on_ping(message)
            elif isinstance(message, msg.Stop):
                self._disarm("stopped")
            else:
                self._on_request(message)

    def take_output(self) -> bytes:
        """Return the bytes to send now."""
        if self._journal.waiting(self._tick):
            self._send_journal()
        if not self._out:
            return b""
        out = b"".join(self._out)
        self._out.clear()
        return out

    def _send_journal(self) -> None:
        for frame in self._journal.to_send(self._tick, self._credits):
            self._out.append(encode_frame(msg.encode(frame)))

    @property
    def edges_waiting(self) -> bool:
        """Whether :meth:`advance` has edges to return at once (outputs that were set low)."""
        return bool(self._edges)

    def next_event_tick(self) -> int | None:
        """Return when :meth:`advance` or :meth:`take_output` has something to do."""
        due = self._journal.resend_tick()
        if self._queue and (due is None or self._queue[0].tick < due):
            due = self._queue[0].tick
        if self._falling and (due is None or self._falling[0][0] < due):
            due = self._falling[0][0]
        if self.armed:
            silent = min(self._heard_tick + self._keep_alive_ticks, self._expiry_tick)
            if due is None or silent < due:
                due = silent
        return due

    def advance(self, tick: int) -> list[Edge]:
        """Let time pass up to ``tick``; return the output edges, in order."""
        while True:
            due = self.next_event_tick()
            if due is None or due > tick:
                break
            self._tick = max(self._tick, due)
            if self._falling and self._falling[0][0] <= due:
                when, line = heapq.heappop(self._falling)
                self._edges.append(Edge(self.config.outputs[line], False, when))
            elif self.armed and due >= self._heard_tick + self._keep_alive_ticks:
                self._disarm("keep-alive lost")
            elif self.armed and due >= self._expiry_tick:
                self._disarm("expired")
            elif self._queue and self._queue[0].tick <= due:
                self._fire(heapq.heappop(self._queue))
            else:
                break  # only the journal's resend is due: take_output does that
        self._tick = max(self._tick, tick)
        edges, self._edges = self._edges, []
        return edges

    def input_edge(self, line: str, level: bool, tick: int) -> None:
        """Log a rising edge on an input line."""
        self._tick = max(self._tick, tick)
        if level:
            self._journal.add("edge", 0, self.config.inputs.index(line), tick, 0)

    # --- firing -----------------------------------------------------------------------------

    def _fire(self, trigger: _Queued) -> None:
        self._edges.append(Edge(self.config.outputs[trigger.line], True, trigger.tick))
        heapq.heappush(self._falling, (trigger.tick + trigger.width, trigger.line))
        self._journal.add("fired", trigger.id, trigger.line, trigger.tick, trigger.width)

    def _disarm(self, reason: str) -> None:
        """Outputs low at once, queue emptied, each trigger accounted for."""
        for _, line in self._falling:
            self._edges.append(Edge(self.config.outputs[line], False, self._tick))
        self._falling.clear()
        for trigger in sorted(self._queue):
            self._journal.add("cancelled", trigger.id, trigger.line, self._tick, 0)
        self._queue.clear()
        was_armed, self.armed = self.armed, False
        self._challenge = None
        if was_armed or reason == "stopped":
            self._journal.add("disarmed", msg.DISARMED_CODES[reason], 0, self._tick, 0)

    @property
    def _credits(self) -> int:
        return self.config.queue_slots - len(self._queue)

    # --- requests ---------------------------------------------------------------------------

    def _on_request(self, message: msg.Message) -> None:
        """Carry a request out once; a repeated one gets the same answer again."""
        handler = self._handlers.get(type(message))
        if handler is None:
            return
        seq: int = message.seq  # type: ignore[attr-defined]
        if self._last_answer is None or self._last_answer[0] != seq:
            answers = handler(message)  # type: ignore[operator]
            self._last_answer = seq, [encode_frame(msg.encode(a)) for a in answers]
        self._out.extend(self._last_answer[1])

    def _nak(self, seq: int, reason: str, trigger: int = 0) -> list[msg.Message]:
        return [msg.Nak(seq, msg.REASON_CODES[reason], trigger, self._credits)]

    def _ack(self, seq: int) -> list[msg.Message]:
        return [msg.Ack(seq, self._credits)]

    def _on_hello(self, message: msg.Hello) -> list[msg.Message]:
        c = self.config
        answers: list[msg.Message] = [
            msg.HelloAnswer(
                message.seq, msg.WIRE_VERSION, c.firmware.encode("ascii"), c.tick_num, c.tick_den,
                c.boot, c.queue_slots, c.min_width_ticks, c.max_width_ticks, c.min_spacing_ticks,
                len(c.outputs) + len(c.inputs),
            )
        ]  # fmt: skip
        for is_output, names in ((1, c.outputs), (0, c.inputs)):
            answers += [
                msg.LineName(is_output, i, name.encode("ascii")) for i, name in enumerate(names)
            ]
        return answers

    def _on_arm_request(self, message: msg.ArmRequest) -> list[msg.Message]:
        if self.armed:
            return self._nak(message.seq, "not possible now")
        if not 0 < message.keep_alive_ms <= _MOST_KEEP_ALIVE_MS:
            return self._nak(message.seq, "limits looser than the box's")
        # A linear congruential step: the nonce guards against replayed bytes, not against people.
        self._nonce = (self._nonce * 1_664_525 + 1_013_904_223) & msg.TICK_MASK
        self._challenge = (self._nonce, message, self._tick)
        return [msg.Challenge(message.seq, self._nonce)]

    def _on_arm_confirm(self, message: msg.ArmConfirm) -> list[msg.Message]:
        if self._challenge is None:
            return self._nak(message.seq, "not possible now")
        nonce, request, asked_tick = self._challenge
        self._challenge = None
        if message.nonce != nonce or message.hash_start != request.plan_hash[:8]:
            return self._nak(message.seq, "wrong hash or nonce")
        if self._tick - asked_tick > _CONFIRM_WITHIN_S * self._per_s:
            return self._nak(message.seq, "too late")
        plan = LineLimits(
            request.min_width,
            request.max_width,
            request.min_spacing,
            request.max_per_s,
            request.max_duty_permille,
            request.max_pulses,
        )
        self._limits = LimitKeeper(self._own.tighter(plan), self._per_s, len(self.config.outputs))
        self._keep_alive_ticks = request.keep_alive_ms * self._per_s // 1000
        self._expiry_tick = self._tick + request.expiry_ms * self._per_s // 1000
        self._heard_tick = self._tick
        self.armed = True
        return self._ack(message.seq)

    def _on_upload(self, message: msg.Upload) -> list[msg.Message]:
        if not self.armed or self._limits is None:
            return self._nak(message.seq, "not armed", message.triggers[0].id)
        if len(message.triggers) > self._credits:
            return self._nak(message.seq, "queue full", message.triggers[0].id)
        for trigger in message.triggers:
            ahead = (trigger.tick - self._tick) & msg.TICK_MASK
            if ahead >= _HALF:
                ahead -= 2 * _HALF
            tick = self._tick + ahead
            if ahead <= 0:
                self._journal.add("dropped_late", trigger.id, trigger.line, self._tick, 0)
                continue
            if ahead > _FARTHEST:
                reason = "too far ahead"
            elif trigger.line >= len(self.config.outputs):
                reason = "no such output line"
            else:
                reason = self._limits.take(trigger.line, tick, trigger.width)
            if reason:
                code = msg.REASON_CODES[reason]
                self._journal.add("refused", trigger.id, trigger.line, self._tick, code)
            else:
                queued = _Queued(tick, trigger.id, trigger.line, trigger.width)
                heapq.heappush(self._queue, queued)
        return self._ack(message.seq)

    def _on_cancel(self, message: msg.Cancel) -> list[msg.Message]:
        for trigger in self._queue:
            if trigger.id == message.id:
                self._queue.remove(trigger)
                heapq.heapify(self._queue)
                if self._limits is not None:
                    self._limits.give_back(trigger.line, trigger.tick)
                self._journal.add("cancelled", trigger.id, trigger.line, self._tick, 0)
                return self._ack(message.seq)
        return self._nak(message.seq, "too late", message.id)

    def _on_disarm(self, message: msg.Disarm) -> list[msg.Message]:
        self._disarm("asked")
        return self._ack(message.seq)

    def _on_ping(self, message: msg.Ping) -> None:
        """Everything journaled so far goes out before the answer does."""
        self._send_journal()
        pong = msg.Pong(
            message.cookie,
            self._tick & msg.TICK_MASK,
            self._tick & msg.TICK_MASK,
            self._journal.next_seq,
            self._credits,
        )
        self._out.append(encode_frame(msg.encode(pong)))
