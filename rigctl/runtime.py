"""The session process's one loop: link, session core and record under a clock.

Everything here is plumbing: the core decides, the host's end of the link talks, the feeder keeps
the box's queue full. Nothing in this file knows whether a real box or a simulated one answers.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Sequence
from typing import Protocol

from rigctl.backends.base import Connection
from rigctl.errors import LinkError
from rigctl.link import host as link
from rigctl.protocol.plan import Plan
from rigctl.record.sink import RecordSink
from rigctl.session import actions as act
from rigctl.session import inputs as inp
from rigctl.session.core import SessionCore, ticks_to_ns
from rigctl.session.sweeps import Sweep
from rigctl.timing.feeder import Feeder
from rigctl.timing.sync import ClockSync

# The box allows 250 ms of silence: one frame may be lost and the next still comes in time.
KEEP_ALIVE_NS = 100_000_000
SYNC_EVERY_NS = 4_000_000_000
UPLOAD_HORIZON_NS = 2_000_000_000
UPLOAD_GUARD_NS = 15_000_000
PROGRESS_EVERY_NS = 1_000_000_000
FAR = 1 << 62


class OperatorSeat(Protocol):
    """Where commands come from, and where gates ask."""

    def asked(self, phase: str, text: str, now_ns: int) -> None:
        """A gate waits for ``go``."""
        ...

    def take(self, now_ns: int) -> Sequence[tuple[str, str]]:
        """Return the commands given since the last call, as (command, text)."""
        ...

    def next_ns(self) -> int | None:
        """Return the session time to ask again at, or None for whenever the loop turns."""
        ...


class Runtime:
    """Runs one session to its end.

    Parameters
    ----------
    plan : Plan
    header : dict of str
        The record's header.
    connection : Connection
    sink : RecordSink
    operator : OperatorSeat
    progress : callable, optional
        Told the session time in ns about once a second of session time.
    """

    def __init__(
        self,
        plan: Plan,
        header: dict[str, str],
        connection: Connection,
        sink: RecordSink,
        operator: OperatorSeat,
        progress: Callable[[int], None] | None = None,
    ) -> None:
        self.core = SessionCore(plan)
        self._header = header
        self._clock = connection.clock
        self._link = connection.link
        self._acquisition = connection.acquisition
        self._sink = sink
        self._operator = operator
        self._progress = progress
        self._host = link.HostLink()
        self._sync = ClockSync()
        self._feeder: Feeder | None = None
        self._tick_num, self._tick_den = plan.tick_ns, 1
        self._inbox: deque[tuple[inp.AnyInput, Sweep | None]] = deque()
        self._hello: link.BoxHello | None = None
        self._last_sync_ns = -FAR
        self._keep_alive_due_ns = FAR
        self._next_progress_ns = 0
        self._done = False
        self._opened_host_ns = 0
        self._link_gone = False
        self._probe_asked_ns: int | None = None

    # --- the loop ---------------------------------------------------------------------------

    def run(self) -> None:
        """Run until the session is closed."""
        self._opened_host_ns = self._clock.now_ns()
        self._take(inp.Header(0, self._header))
        while not self._done:
            now_ns = self._clock.now_ns()
            self._turn(now_ns)
            data = self._idle(self._next_deadline_ns(now_ns))
            now_ns = self._clock.now_ns()
            if data:
                self._hear(self._host.feed(data, now_ns))
            if self._acquisition is not None:
                for sweep in self._acquisition.take():
                    self._take_sweep(sweep)
        self._link.close()

    def _idle(self, until_ns: int) -> bytes:
        """Wait for bytes or for something to be due; meanwhile only keep the box alive."""
        while True:
            due_ns = self._keep_alive_due_ns
            data = self._wait(min(until_ns, due_ns))
            now_ns = self._clock.now_ns()
            if data or now_ns < due_ns or now_ns >= until_ns:
                return data
            self._host.keep_alive(now_ns)
            self._send(now_ns)

    def _turn(self, now_ns: int) -> None:
        """Do everything that is due now, then send what it led to."""
        deadline_ns = self._host.deadline_ns()
        if deadline_ns is not None and deadline_ns <= now_ns:
            self._hear(self._host.tick(now_ns))
        if self._sync.ready:
            session_ns = self._sync.session_ns(now_ns)
            wake_ns = self.core.wake_ns
            if wake_ns is not None and session_ns >= wake_ns:
                self._take(inp.Woke(session_ns))
            asked_ns = self._operator.next_ns()
            if asked_ns is None or session_ns >= asked_ns:
                for command, text in self._operator.take(session_ns):
                    self._take(inp.Operator(session_ns, command, text))  # type: ignore[arg-type]
            if self._progress is not None and session_ns >= self._next_progress_ns:
                self._next_progress_ns = session_ns + PROGRESS_EVERY_NS
                self._progress(session_ns)
            self._feed(now_ns)
            if now_ns - self._last_sync_ns >= SYNC_EVERY_NS and not self._link_gone:
                self._ping(now_ns)
        if now_ns >= self._keep_alive_due_ns:
            self._host.keep_alive(now_ns)
        self._send(now_ns)

    def _send(self, now_ns: int) -> None:
        out = self._host.take_output()
        if out and not self._link_gone:
            try:
                self._link.write(out)
            except LinkError as error:
                self._gone(str(error))
            if self._host.armed:
                self._keep_alive_due_ns = now_ns + KEEP_ALIVE_NS
        if not self._host.armed:
            self._keep_alive_due_ns = FAR
        elif self._keep_alive_due_ns == FAR:
            self._keep_alive_due_ns = now_ns + KEEP_ALIVE_NS

    def _wait(self, until_ns: int) -> bytes:
        try:
            return self._link.wait(until_ns)
        except LinkError as error:
            self._gone(str(error))
            return b""

    def _gone(self, what: str) -> None:
        if not self._link_gone:
            self._link_gone = True
            self._take(inp.LinkLost(self._session_now(), what))

    def _next_deadline_ns(self, now_ns: int) -> int:
        due = [now_ns + 1_000_000_000]
        link_ns = self._host.deadline_ns()
        if link_ns is not None:
            due.append(link_ns)
        if self._sync.ready:
            due.append(self._last_sync_ns + SYNC_EVERY_NS)
            if self.core.wake_ns is not None:
                due.append(self._sync.host_ns(self.core.wake_ns) + 1)
            asked_ns = self._operator.next_ns()
            if asked_ns is not None:
                due.append(self._sync.host_ns(asked_ns) + 1)
            if self._feeder is not None:
                tick = self._feeder.next_tick()
                if tick is not None and self._host.credits > 0:
                    due.append(self._sync.host_ns(self._ns(tick)) + 1)
        return max(min(due), now_ns)

    # --- into the core ----------------------------------------------------------------------

    def _take(self, item: inp.AnyInput, sweep: Sweep | None = None) -> None:
        """Feed the core; carry out what it asks; inputs that this causes wait their turn."""
        self._inbox.append((item, sweep))
        if len(self._inbox) > 1:
            return
        while self._inbox:
            item, sweep = self._inbox[0]
            outcome = self.core.handle(item, sweep)
            self._sink.write(outcome.rows)
            for action in outcome.actions:
                self._carry_out(action)
            self._inbox.popleft()

    def _take_sweep(self, sweep: Sweep) -> None:
        if self.core.finished:
            return
        item = inp.SweepTaken(
            self._session_now(),
            sweep.at_ns,
            sweep.cell,
            sweep.clamp,
            sweep.rate_hz,
            sweep.unit,
            sweep.scale,
            len(sweep.samples) // 2,
            sweep.sha256(),
        )
        self._take(item, sweep)

    def _session_now(self) -> int:
        now_ns = self._clock.now_ns()
        if self._sync.ready:
            return self._sync.session_ns(now_ns)
        return 0

    def _ns(self, tick: int) -> int:
        return ticks_to_ns(tick, self._tick_num, self._tick_den)

    def _hear(self, events: Sequence[link.LinkEvent]) -> None:
        """Turn what the link says into inputs of the core."""
        for event in events:
            self._hear_one(event)

    def _hear_one(self, event: link.LinkEvent) -> None:
        at_ns = self._session_now()
        match event:
            case link.Journal():
                self._hear_journal(event, at_ns)
            case link.Pong():
                self._hear_pong(event)
            case link.Complete():
                # An answer to an earlier ping does not hold what was asked for since.
                if self._probe_asked_ns is not None and event.asked_ns >= self._probe_asked_ns:
                    self._probe_asked_ns = None
                    self._take(inp.Complete(at_ns, event.through_tick))
            case link.BoxHello():
                self._hear_hello(event)
            case link.Armed():
                self._take(inp.Armed(at_ns, self._hello.boot if self._hello else 0))
            case link.UploadRefused():
                self._take(inp.TriggerRefused(at_ns, event.id, event.reason))
            case link.Damaged():
                self._take(inp.LinkFault(at_ns, f"damaged frame ({event.what})", event.count))
            case link.Retried():
                self._take(inp.LinkFault(at_ns, f"repeated {event.what}", event.times))
            case link.Disarmed():
                self._take(inp.BoxDisarmed(at_ns, event.reason))
            case link.BootSeen():
                self._take(inp.BoxReset(at_ns, event.boot))
            case link.LinkLost():
                self._gone(event.what)
            case _:
                pass

    def _hear_hello(self, hello: link.BoxHello) -> None:
        """Take the box's word for what it is; its clock must be known before it is used."""
        self._hello = hello
        self._tick_num, self._tick_den = hello.tick_num, hello.tick_den
        per_ns = hello.tick_den / hello.tick_num
        self._feeder = Feeder(round(UPLOAD_HORIZON_NS * per_ns), round(UPLOAD_GUARD_NS * per_ns))
        self._ping(self._clock.now_ns())

    def _connected(self) -> None:
        hello = self._hello
        assert hello is not None
        self._take(
            inp.Connected(
                self._session_now(),
                hello.firmware,
                hello.boot,
                hello.tick_num,
                hello.tick_den,
                hello.queue_slots,
                tuple(hello.outputs),
                tuple(hello.inputs),
                hello.min_width_ticks,
                hello.max_width_ticks,
                hello.min_spacing_ticks,
            )
        )

    def _hear_pong(self, pong: link.Pong) -> None:
        first = not self._sync.ready
        exchange = self._sync.exchange(
            pong.t1_ns, self._ns(pong.t2_tick), self._ns(pong.t3_tick), pong.t4_ns
        )
        self._take(
            inp.Synced(
                self._session_now(),
                exchange.offset_ns,
                exchange.bound_ns,
                exchange.skew_ppm,
                exchange.round_trip_ns,
            )
        )
        if first:
            self._connected()

    def _hear_journal(self, entry: link.Journal, at_ns: int) -> None:
        match entry.kind:
            case "fired":
                self._take(inp.Fired(at_ns, entry.id, entry.tick, entry.boot))
            case "dropped_late":
                self._take(inp.DroppedLate(at_ns, entry.id, "box"))
            case "refused":
                self._take(inp.TriggerRefused(at_ns, entry.id, "the box's own limit"))
            case "cancelled":
                self._take(inp.Cancelled(at_ns, entry.id))
            case "edge":
                self._take(inp.Edge(at_ns, entry.line, entry.tick, entry.boot))
            case "lost":
                self._take(inp.LinkFault(at_ns, "the box's journal overflowed", entry.id))

    # --- out of the core --------------------------------------------------------------------

    def _carry_out(self, action: act.Action) -> None:
        now_ns = self._clock.now_ns()
        match action:
            case act.SayHello():
                self._host.hello(now_ns)
            case act.Arm():
                # What arms the box must be in the record before it can take effect.
                self._sink.flush()
                self._host.arm_request(now_ns, action.plan_hash, action.expiry_ms, action.limits)
            case act.Schedule():
                assert self._feeder is not None
                self._feeder.add(action.triggers)
            case act.Withdraw():
                self._withdraw(action.ids, now_ns)
            case act.Probe():
                self._probe_asked_ns = now_ns
                self._ping(now_ns)
            case act.AskOperator():
                self._operator.asked(action.phase, action.text, self._session_now())
            case act.Disarm():
                self._host.disarm(now_ns)
            case act.Finish():
                self._done = True

    def _ping(self, now_ns: int) -> None:
        self._last_sync_ns = now_ns
        self._host.ping(now_ns)

    def _withdraw(self, ids: tuple[int, ...], now_ns: int) -> None:
        assert self._feeder is not None
        here = self._feeder.withdraw(ids)
        for trigger in here:
            self._take(inp.Cancelled(self._session_now(), trigger))
        waiting = set(here)
        for trigger in ids:
            if trigger not in waiting:
                self._host.cancel(now_ns, trigger)

    def _feed(self, now_ns: int) -> None:
        if self._feeder is None or not self._host.armed or self._link_gone:
            return
        now_tick = ticks_to_ns(self._sync.session_ns(now_ns), self._tick_den, self._tick_num)
        feed = self._feeder.feed(now_tick, self._host.credits)
        for trigger in feed.too_late:
            self._take(inp.DroppedLate(self._session_now(), trigger.id, "feeder"))
        if feed.upload:
            self._host.upload(now_ns, feed.upload)
