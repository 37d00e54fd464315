"""The session core: one run as a deterministic state machine, event in → actions and rows out.

No I/O, no clock: time comes with each input, on the session clock. Every input and every decision
becomes a row of the event table, chained; feeding the recorded inputs to a fresh core gives the
same rows again (:mod:`rigctl.record.verify` does).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any, NamedTuple

import msgspec

from rigctl.protocol.plan import Plan, PlanPhase, PlanTrigger
from rigctl.session import actions as act
from rigctl.session import inputs as inp
from rigctl.session.chain import CHAIN_START, link
from rigctl.session.gates import evaluate_stable
from rigctl.session.rows import EventRow, HeaderRow, Row, SweepRow, SyncRow
from rigctl.session.states import RUNNING, State, allowed, follow
from rigctl.session.sweeps import Sweep
from rigctl.session.tally import Tally

# From the decision to start a phase to its zero: time enough to fill the box's queue.
PHASE_LEAD_NS = 300_000_000
# A pulse nearer than this is left alone by a pause: the boundary is the one after it.
PAUSE_GUARD_NS = 250_000_000
# The box's longest silence before its outputs go low, and what the clocks may differ by.
BOX_ALONE_NS = 250_000_000 + 10_000_000
# How often a phase that was ended early asks whether the last withdrawn pulse is settled.
STOP_POLL_NS = 50_000_000
# The arming outlives the plan by this much; pauses and gates use it up.
ARM_MARGIN_MS = 3_600_000


class Outcome(NamedTuple):
    """What one input led to."""

    rows: list[Row]
    actions: list[act.Action]


def ticks_to_ns(tick: int, num: int, den: int) -> int:
    """Return ``tick · num / den`` ns, rounded half to even."""
    whole, rest = divmod(tick * num, den)
    if 2 * rest > den or (2 * rest == den and whole % 2):
        whole += 1
    return whole


class SessionCore:
    """One session.

    Parameters
    ----------
    plan : Plan
        Checked: it compiled and passed its limits.
    """

    def __init__(self, plan: Plan) -> None:
        self.state: State = "idle"
        self.wake_ns: int | None = None
        self.ended: str | None = None
        self._plan = plan
        self._plan_hash = plan.hash()
        self._tick_num, self._tick_den = plan.tick_ns, 1
        self._rows: list[Row] = []
        self._actions: list[act.Action] = []
        self._seq = 0
        self._chain = CHAIN_START
        self._now_ns = 0
        self._through_ns = 0
        self._tally = Tally(plan)
        self._next_phase = 0
        self._phase: PlanPhase | None = None
        self._phase_end_ns: int | None = None
        self._paused_state: State | None = None
        self._probing = False
        self._stop_phase = False
        self._ended_induction_early = False
        self._handlers: dict[type[inp.Input], Callable[[Any], None]] = {
            inp.Header: self._on_header,
            inp.Connected: self._on_connected,
            inp.Armed: self._on_armed,
            inp.Fired: self._on_fired,
            inp.DroppedLate: self._on_dropped_late,
            inp.TriggerRefused: self._on_refused,
            inp.Cancelled: self._on_cancelled,
            inp.Edge: self._on_edge,
            inp.Complete: self._on_complete,
            inp.Synced: self._on_synced,
            inp.Woke: self._on_woke,
            inp.LinkFault: self._on_link_fault,
            inp.LinkLost: self._on_link_lost,
            inp.BoxReset: self._on_box_reset,
            inp.BoxDisarmed: self._on_box_disarmed,
            inp.Operator: self._on_operator,
        }

    # --- the one door -----------------------------------------------------------------------

    def handle(self, item: inp.AnyInput, sweep: Sweep | None = None) -> Outcome:
        """Take in one input; ``sweep`` carries the samples of a ``SweepTaken``."""
        self._now_ns = item.at_ns
        kind, body = inp.encode(item)
        self._event(kind, body)
        if isinstance(item, inp.SweepTaken):
            if sweep is None:
                raise ValueError("a sweep enters with its samples")
            self._on_sweep(item, sweep)
        else:
            self._handlers[type(item)](item)
        for name, text in self._tally.take_alarms():
            self._alarm(name, text)
        outcome = Outcome(self._rows, self._actions)
        self._rows, self._actions = [], []
        self._plan_wake()
        return outcome

    @property
    def finished(self) -> bool:
        """Whether the session is closed."""
        return self.state == "closed"

    @property
    def chain(self) -> str:
        """The chain value of the last event."""
        return self._chain

    @property
    def phase(self) -> PlanPhase | None:
        """The phase that is going on."""
        return self._phase

    def _event(self, kind: str, body: str) -> None:
        self._chain = link(self._chain, self._seq, self._now_ns, kind, body)
        self._rows.append(EventRow(self._seq, self._now_ns, kind, body, self._chain))
        self._seq += 1

    def _decide(self, kind: str, /, **body: object) -> None:
        self._event(kind, msgspec.json.encode(body, order="deterministic").decode())

    def _alarm(self, name: str, text: str) -> None:
        self._decide("alarm", name=name, text=text)

    def _move(self, cause: str) -> None:
        before = self.state
        self.state = follow(before, cause, self._paused_state)
        self._decide("state", **{"from": before, "to": self.state, "cause": cause})

    def _ns(self, tick: int) -> int:
        return ticks_to_ns(tick, self._tick_num, self._tick_den)

    def _tick(self, at_ns: int) -> int:
        return ticks_to_ns(at_ns, self._tick_den, self._tick_num)

    # --- connecting and arming --------------------------------------------------------------

    def _on_header(self, item: inp.Header) -> None:
        self._rows += [HeaderRow(key, value) for key, value in item.header.items()]
        self._move("plan_checked")
        self._actions.append(act.SayHello())

    def _on_connected(self, item: inp.Connected) -> None:
        self._tick_num, self._tick_den = item.tick_num, item.tick_den
        missing = [line.name for line in self._plan.lines if line.name not in item.outputs]
        missing += [i.name for i in self._plan.inputs if i.name not in item.inputs]
        tick_ns = item.tick_num / item.tick_den
        disagrees = ""
        if missing:
            disagrees = f"the box has no line {', '.join(missing)}"
        elif tick_ns != self._plan.tick_ns:
            disagrees = f"the box ticks {tick_ns:g} ns, the plan {self._plan.tick_ns} ns"
        else:
            limits = self._plan.box_limits
            for ticks, key in (
                (item.min_width_ticks, "min_width_ns"),
                (item.min_spacing_ticks, "min_spacing_ns"),
            ):
                if ticks * tick_ns > limits[key]:
                    disagrees = (
                        f"the box's {key[:-3]} is {ticks * tick_ns:g} ns, "
                        f"the rig file counts on {limits[key]} ns"
                    )
        if disagrees:
            self._end("box_disagrees", "refused", disagrees)
            return
        self._move("box_answered")
        expiry_ms = self._plan.duration_ns // 1_000_000 + ARM_MARGIN_MS
        self._actions.append(act.Arm(self._plan_hash, expiry_ms, dict(self._plan.box_limits)))

    def _on_armed(self, item: inp.Armed) -> None:
        self._move("box_armed")
        self._open_gate()

    # --- phases -----------------------------------------------------------------------------

    def _open_gate(self) -> None:
        """Come to the start gate of the next phase, or to the end of the plan."""
        if self._next_phase >= len(self._plan.phases):
            if self._ended_induction_early:
                self._end("plan_done", "induction_ended_early", "the operator ended the induction")
            else:
                self._end("plan_done", "as_planned", "every phase reached its declared end")
            return
        phase = self._plan.phases[self._next_phase]
        if phase.gate == "operator":
            text = f"ready for {phase.name}?"
            self._decide("gate", phase=phase.name, gate="operator", verdict="asked", text=text)
            self._actions.append(act.AskOperator(phase.name, text))
        elif phase.gate == "stable":
            verdict = evaluate_stable(self._plan, self._tally.responses())
            self._decide(
                "gate", phase=phase.name, gate="stable", verdict=verdict.verdict, text=verdict.text
            )
            if verdict.verdict == "fail":
                self._end("gate_failed", "gate_failed", verdict.text)
            else:
                if verdict.verdict == "undecidable":
                    self._alarm("gate_undecidable", verdict.text)
                self._begin_phase(phase)
        else:
            self._begin_phase(phase)

    def _begin_phase(self, phase: PlanPhase) -> None:
        start_ns = self._ns(self._tick(self._now_ns + PHASE_LEAD_NS))
        self._phase = phase
        self._next_phase += 1
        self._phase_end_ns = start_ns + phase.duration_ns
        self._stop_phase = False
        self._move(f"{phase.kind}_begins")
        self._decide(
            "phase_start", phase=phase.index, name=phase.name, kind=phase.kind, start_ns=start_ns
        )
        self._tally.begin_phase(phase, start_ns)
        self._schedule(start_ns, phase.triggers)

    def _schedule(self, start_ns: int, triggers: Iterable[PlanTrigger]) -> None:
        self._actions.append(act.Schedule(self._tally.schedule(start_ns, triggers, self._tick)))

    def _end_phase(self) -> None:
        assert self._phase is not None
        self._decide(
            "phase_end", phase=self._phase.index, name=self._phase.name, at_ns=self._now_ns
        )
        self._phase_end_ns = None
        self._open_gate()

    # --- what the box tells -----------------------------------------------------------------

    def _on_fired(self, item: inp.Fired) -> None:
        self._rows += self._tally.fired(item.trigger, self._ns(item.tick), item.boot)

    def _on_dropped_late(self, item: inp.DroppedLate) -> None:
        self._rows += self._tally.lost(item.trigger, "dropped_late", f"by the {item.by}")

    def _on_refused(self, item: inp.TriggerRefused) -> None:
        self._rows += self._tally.lost(item.trigger, "refused", item.reason)

    def _on_cancelled(self, item: inp.Cancelled) -> None:
        self._rows += self._tally.cancelled(item.trigger)

    def _on_edge(self, item: inp.Edge) -> None:
        self._tally.edge(item.line, self._ns(item.tick))

    def _on_synced(self, item: inp.Synced) -> None:
        self._rows.append(
            SyncRow(item.at_ns, item.offset_ns, item.bound_ns, item.skew_ppm, item.round_trip_ns)
        )

    def _on_sweep(self, item: inp.SweepTaken, sweep: Sweep) -> None:
        self._rows.append(
            SweepRow(
                item.start_ns,
                item.cell,
                item.clamp,
                item.rate_hz,
                item.unit,
                item.scale,
                sweep.samples,
                item.sha256,
            )
        )
        self._rows += self._tally.sweep(sweep)

    # --- hearing the box out ----------------------------------------------------------------

    def _plan_wake(self) -> None:
        """Say when to be woken: when the next presentation or the phase's end is due."""
        self.wake_ns = None
        if self._probing or self.state in ("closing", "closed"):
            return
        self.wake_ns = self._tally.next_due_ns()
        if self.wake_ns is None and self._in_phase and self.state != "paused":
            soon_ns = self._now_ns + STOP_POLL_NS
            self.wake_ns = soon_ns if self._stop_phase else self._phase_end_ns

    @property
    def _in_phase(self) -> bool:
        """Whether a phase is going on (and not a gate waited at)."""
        return self._phase_end_ns is not None

    def _probe(self) -> None:
        if not self._probing:
            self._probing = True
            self._actions.append(act.Probe())

    def _on_woke(self, item: inp.Woke) -> None:
        if self.state != "closed":
            self._probe()

    def _on_complete(self, item: inp.Complete) -> None:
        self._probing = False
        self._through_ns = max(self._through_ns, self._ns(item.through_tick))
        if self.state == "closing":
            self._close()
            return
        self._rows += self._tally.judge_due(self._through_ns)
        if self._phase_is_over():
            self._end_phase()

    def _phase_is_over(self) -> bool:
        if self._phase_end_ns is None or self.state == "paused":
            return False
        if self._tally.next_due_ns() is not None:
            return False
        if self._stop_phase and self._tally.settled:
            return True
        return self._through_ns >= self._phase_end_ns

    # --- pauses and ends --------------------------------------------------------------------

    def _on_operator(self, item: inp.Operator) -> None:
        waiting = self._waiting_gate()
        inducing = self._in_phase and self._phase is not None and self._phase.kind == "induction"
        match item.command:
            case "note" | "mark":
                pass
            case "go" if waiting is not None:
                self._decide("gate", phase=waiting.name, gate="operator", verdict="pass", text="go")
                self._begin_phase(waiting)
            case "pause" if self._in_phase and allowed(self.state, "pause"):
                self._paused_state = self.state
                self._move("pause")
                self._withdraw_from_boundary()
            case "resume" if self.state == "paused":
                self._move("resume")
                self._resume()
            case "end_induction" if inducing:
                self._ended_induction_early = True
                if self.state == "paused":
                    self._move("resume")
                self._stop_phase = True
                self._withdraw_from_boundary()
            case "abandon" if allowed(self.state, "abandon"):
                self._end("abandon", "abandoned", item.text or "the operator gave the cell up")
            case command:
                self._alarm("not_possible", f"{command} is not possible in state {self.state}")

    def _waiting_gate(self) -> PlanPhase | None:
        """Return the phase whose operator gate is waiting, if any."""
        at_gate = self.state == "armed" or self.state in RUNNING
        if not at_gate or self._in_phase or self._next_phase >= len(self._plan.phases):
            return None
        phase = self._plan.phases[self._next_phase]
        return phase if phase.gate == "operator" else None

    def _withdraw_from_boundary(self) -> None:
        """Take back every pairing and test that has not begun; let a begun one finish."""
        ids = self._tally.withdraw_from(self._now_ns + PAUSE_GUARD_NS)
        if ids:
            self._actions.append(act.Withdraw(ids))
        self._probe()

    def _resume(self) -> None:
        """Schedule again what the pause took back, all of it later by the same amount."""
        phase = self._phase
        assert phase is not None
        back = self._tally.withdrawn()
        if not back:
            self._stop_phase = True
            return
        start_ns = self._ns(self._tick(self._now_ns + PHASE_LEAD_NS - back[0].at_ns))
        self._decide("phase_shift", phase=phase.index, name=phase.name, start_ns=start_ns)
        self._phase_end_ns = start_ns + phase.duration_ns
        self._schedule(start_ns, back)

    def _on_link_fault(self, item: inp.LinkFault) -> None:
        self._tally.alarm_for_link(item.what)

    def _on_link_lost(self, item: inp.LinkLost) -> None:
        if allowed(self.state, "link_lost"):
            self._end("link_lost", "link_lost", item.what)
        elif self.state == "closing":
            self._close()

    def _on_box_reset(self, item: inp.BoxReset) -> None:
        if allowed(self.state, "box_reset"):
            self._end("box_reset", "box_reset", f"the box started anew (boot {item.boot})")

    def _on_box_disarmed(self, item: inp.BoxDisarmed) -> None:
        if allowed(self.state, "box_disarmed"):
            self._end("box_disarmed", "box_disarmed", item.reason)

    def _end(self, cause: str, ended: str, text: str) -> None:
        """Begin to close: disarm, hear the box out, then write what is left."""
        self.ended = ended
        self._move(cause)
        if ended not in ("as_planned", "induction_ended_early"):
            self._alarm(ended, text)
        self._decide("ended", how=ended, text=text)
        self._phase_end_ns = None
        if cause in ("box_disagrees", "link_lost"):
            self._close()
        else:
            self._actions.append(act.Disarm())
            # What an earlier probe asked for ends before the disarming: ask anew.
            self._probing = False
            self._probe()

    def _close(self) -> None:
        """Write what is left and close: nothing more will be heard."""
        now_ns = max(self._through_ns, self._now_ns)
        # Cut off from us, the box goes on with its queue until it misses our frames.
        alone_ns = BOX_ALONE_NS if self.ended == "link_lost" else 0
        self._rows += self._tally.finish(now_ns, now_ns + alone_ns)
        self._move("record_complete")
        self._decide("closed")
        self._actions.append(act.Finish())
