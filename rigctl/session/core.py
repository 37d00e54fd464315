"""The session core: one run as a deterministic state machine, event in → actions and rows out.

No I/O, no clock: time comes with each input, on the session clock. Every input and every decision
becomes a row of the event table, chained; feeding the recorded inputs to a fresh core gives the
same rows again (:mod:`rigctl.record.verify` does).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any, NamedTuple

import msgspec

from rigctl.plasticity.forecast import Forecaster
from rigctl.protocol.plan import Plan, PlanPairing, PlanPhase, PlanTrigger
from rigctl.session import actions as act
from rigctl.session import inputs as inp
from rigctl.session.agenda import Agenda, Presentation
from rigctl.session.alarms import AlarmBook
from rigctl.session.chain import CHAIN_START, link
from rigctl.session.gates import evaluate_stable
from rigctl.session.ledger import Delivery, Ledger
from rigctl.session.responses import Responses
from rigctl.session.rows import (
    EventRow,
    ForecastRow,
    HeaderRow,
    PairingRow,
    Row,
    SpikePairRow,
    SweepRow,
    SyncRow,
)
from rigctl.session.states import State, allowed, follow
from rigctl.session.sweeps import Sweep

# From the decision to start a phase to its zero: time enough to fill the box's queue.
PHASE_LEAD_NS = 300_000_000
# A pulse nearer than this is left alone by a pause: the boundary is the one after it.
PAUSE_GUARD_NS = 250_000_000
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
        self._ledger = Ledger(plan, plan.tick_ns)
        self._inputs = {i.name: i for i in plan.inputs}
        # A detector that marks an event after it happened is heard that much later.
        self._settle_ns = max([0, *(-i.offset_ns for i in plan.inputs)])
        self._pathways = sorted({line.pathway for line in plan.lines if line.pathway is not None})
        self._drives = {line.name: line.drives for line in plan.lines}
        # How long after its last trigger something may still belong to a presentation.
        longest_ns = max((line.latency_ns for line in plan.lines), default=0)
        self._reach_ns = plan.response_window_ns + longest_ns + self._settle_ns + plan.tick_ns
        self._forecaster = Forecaster(plan.forecasts, self._pathways, self._pre_bounds_ns())
        self._responses = Responses(plan)
        self._alarms = AlarmBook(plan)
        self._next_phase = 0
        self._phase: PlanPhase | None = None
        self._phase_end_ns: int | None = None
        self._paused_at_ns: int | None = None
        self._paused_state: State | None = None
        self._agenda = Agenda()
        self._probing = False
        self._stop_phase = False
        self._ended_induction_early = False
        self._judged: set[int] = set()
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

    def _alarm(self, alarm: tuple[str, str] | None) -> None:
        if alarm is not None:
            self._decide("alarm", name=alarm[0], text=alarm[1])

    def _move(self, cause: str) -> None:
        before = self.state
        self.state = follow(before, cause, self._paused_state)
        self._decide("state", **{"from": before, "to": self.state, "cause": cause})

    def _ns(self, tick: int) -> int:
        return ticks_to_ns(tick, self._tick_num, self._tick_den)

    def _tick(self, at_ns: int) -> int:
        return ticks_to_ns(at_ns, self._tick_den, self._tick_num)

    def _pre_bounds_ns(self) -> dict[str, int]:
        """How far the derived pre times of each pathway may be off as a whole.

        Two standard errors of the latency's mean; where its n is not stated, two SD.
        """
        bounds = dict.fromkeys(self._pathways, 0)
        detected = {i.pathway for i in self._plan.inputs if i.detects == "pre"}
        for line in self._plan.lines:
            if line.drives == "pre" and line.pathway and line.pathway not in detected:
                bound_ns = round(2 * line.latency_sd_ns / max(line.latency_n, 1) ** 0.5)
                bounds[line.pathway] = max(bounds[line.pathway], bound_ns)
        return bounds

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
            verdict = evaluate_stable(self._plan, self._responses.of_phase())
            self._decide(
                "gate", phase=phase.name, gate="stable", verdict=verdict.verdict, text=verdict.text
            )
            if verdict.verdict == "fail":
                self._end("gate_failed", "gate_failed", verdict.text)
            else:
                if verdict.verdict == "undecidable":
                    self._alarm(("gate_undecidable", verdict.text))
                self._begin_phase(phase)
        else:
            self._begin_phase(phase)

    def _begin_phase(self, phase: PlanPhase) -> None:
        start_tick = self._tick(self._now_ns + PHASE_LEAD_NS)
        start_ns = self._ns(start_tick)
        self._phase = phase
        self._next_phase += 1
        self._phase_end_ns = start_ns + phase.duration_ns
        self._stop_phase = False
        self._ledger.begin_phase(phase)
        self._responses.begin_phase()
        self._move(f"{phase.kind}_begins")
        self._decide(
            "phase_start", phase=phase.index, name=phase.name, kind=phase.kind, start_ns=start_ns
        )
        self._alarm(self._alarms.phase_begins(phase, start_ns))
        self._schedule(phase, start_ns, phase.triggers)
        presentations = [
            self._presentation(start_ns, p, p.first_ns, p.last_ns) for p in phase.pairings
        ]
        presentations += self._tests(start_ns, phase.triggers)
        self._agenda = Agenda(presentations)

    def _presentation(
        self, start_ns: int, pairing: PlanPairing | None, first_ns: int, last_ns: int
    ) -> Presentation:
        due_ns = start_ns + last_ns + self._reach_ns
        return Presentation(due_ns, start_ns + first_ns, pairing)

    def _tests(self, start_ns: int, triggers: Iterable[PlanTrigger]) -> list[Presentation]:
        """Return the presentations of pre stimuli that belong to no pairing."""
        return [
            self._presentation(start_ns, None, t.at_ns, t.at_ns)
            for t in triggers
            if t.pairing is None and self._drives[t.line] == "pre"
        ]

    def _schedule(self, phase: PlanPhase, start_ns: int, triggers: tuple[PlanTrigger, ...]) -> None:
        scheduled = []
        for trigger in triggers:
            at_ns = start_ns + trigger.at_ns
            tick = self._tick(at_ns)
            self._ledger.plan_trigger(phase.index, trigger, at_ns, tick)
            width_ticks = max(1, self._tick(trigger.width_ns))
            scheduled.append(act.ScheduledTrigger(trigger.id, trigger.line, tick, width_ticks))
        self._actions.append(act.Schedule(tuple(scheduled)))

    def _end_phase(self) -> None:
        assert self._phase is not None
        self._decide(
            "phase_end", phase=self._phase.index, name=self._phase.name, at_ns=self._now_ns
        )
        self._phase_end_ns = None
        self._open_gate()

    # --- what the box tells -----------------------------------------------------------------

    def _on_fired(self, item: inp.Fired) -> None:
        delivery = self._ledger.delivery(item.trigger)
        if delivery is None:
            self._alarm(("unexplained_pulse", f"the box fired trigger {item.trigger}, not ours"))
            return
        at_ns = self._ns(item.tick)
        self._rows += self._ledger.fired(delivery, at_ns, item.boot)
        line = delivery.line
        if line.drives == "pre" and line.pathway is not None:
            if delivery.pre_at_ns is not None:
                self._forecaster.pre(line.pathway, delivery.pre_at_ns)
            if delivery.plan.pairing is None:
                self._responses.test_fired(line, at_ns)

    def _on_dropped_late(self, item: inp.DroppedLate) -> None:
        self._lost(item.trigger, "dropped_late", f"by the {item.by}")

    def _on_refused(self, item: inp.TriggerRefused) -> None:
        self._lost(item.trigger, "refused", item.reason)

    def _lost(self, trigger: int, fate: Any, why: str) -> None:
        delivery = self._ledger.delivery(trigger)
        if delivery is not None and delivery.fate is None:
            self._rows += self._ledger.resolved(delivery, fate)
            self._alarm(self._alarms.trigger_lost(fate, delivery.plan.line, why))

    def _on_cancelled(self, item: inp.Cancelled) -> None:
        delivery = self._ledger.delivery(item.trigger)
        if delivery is not None and delivery.fate is None:
            self._rows += self._ledger.resolved(delivery, "cancelled")

    def _on_edge(self, item: inp.Edge) -> None:
        line = self._inputs.get(item.line)
        if line is None:
            return
        at_ns = self._ns(item.tick) + line.offset_ns
        if line.detects == "post":
            self._ledger.post_seen(line.name, line.reference, at_ns)
            self._forecaster.post(at_ns)
        else:
            self._ledger.pre_seen(line.pathway, line.name, line.reference, at_ns)
            for pathway in [line.pathway] if line.pathway else self._pathways:
                self._forecaster.pre(pathway, at_ns)

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
        self._rows += self._responses.measure(sweep, self._ledger.spike_between)

    # --- judging ----------------------------------------------------------------------------

    def _plan_wake(self) -> None:
        """Say when to be woken: when the next presentation or the phase's end is due."""
        self.wake_ns = None
        if self._probing:
            return
        if self._agenda and self.state != "closing":
            self.wake_ns = self._agenda.next_due_ns()
        elif self._phase_end_ns is not None and self._paused_at_ns is None:
            soon_ns = self._now_ns + STOP_POLL_NS
            self.wake_ns = soon_ns if self._stop_phase else self._phase_end_ns

    def _probe(self) -> None:
        self._probing = True
        self._actions.append(act.Probe())

    def _on_woke(self, item: inp.Woke) -> None:
        if not self._probing and self.state != "closed":
            self._probe()

    def _on_complete(self, item: inp.Complete) -> None:
        self._probing = False
        self._through_ns = max(self._through_ns, self._ns(item.through_tick))
        if self.state == "closing":
            self._finish_record("record_complete")
            return
        self._judge_due()
        over = self._phase_end_ns is not None and self._through_ns >= self._phase_end_ns
        if (
            self._phase is not None
            and not self._agenda
            and self._paused_at_ns is None
            and (over or (self._stop_phase and self._nothing_pending()))
        ):
            self._phase_end_ns = None
            self._end_phase()

    def _nothing_pending(self) -> bool:
        return all(d.fate is not None for d in self._ledger.deliveries())

    def _judge_due(self) -> None:
        """Judge everything due; write the spikes that no pairing can claim any more."""
        due = self._agenda.take_due(self._through_ns)
        for presentation in due:
            if presentation.pairing is not None:
                self._judge(presentation.pairing)
        limit_ns = self._through_ns - self._settle_ns
        earliest_ns = self._agenda.earliest_begin_ns()
        if earliest_ns is not None:
            limit_ns = min(limit_ns, earliest_ns)
        self._rows += self._ledger.flush(limit_ns)
        self._forecaster.advance(self._through_ns - self._settle_ns)
        if due:
            self._write_forecast(self._through_ns)

    def _judge(self, pairing: PlanPairing) -> None:
        assert self._phase is not None
        for delivery in self._ledger.deliveries_of(pairing.id):
            if delivery.fate is None:
                self._unknown(delivery)
        judged = self._ledger.judge(pairing, self._phase.index)
        self._judged.add(pairing.id)
        self._rows += judged.rows
        for alarm in self._alarms.pairing_judged(pairing.id, judged):
            self._alarm(alarm)

    def _unknown(self, delivery: Delivery) -> None:
        """Nobody knows whether this pulse came: log it so, and let the band say it."""
        self._rows += self._ledger.resolved(delivery, "unknown")
        expected_ns = delivery.planned_ns + delivery.line.latency_ns
        line = delivery.line
        if line.drives == "pre" and line.pathway is not None:
            self._forecaster.pre(line.pathway, expected_ns, known=False)
        elif line.drives == "post" and line.evokes_spike:
            self._forecaster.post(expected_ns, known=False)

    def _write_forecast(self, at_ns: int) -> None:
        self._rows += [
            ForecastRow(at_ns, v.pathway, v.rule, v.parameter_set, v.change, v.low, v.high)
            for v in self._forecaster.read()
        ]

    # --- pauses and ends --------------------------------------------------------------------

    def _on_operator(self, item: inp.Operator) -> None:
        phase = self._phase
        if item.command in ("note", "mark"):
            return
        waiting = self._waiting_gate()
        if item.command == "go" and waiting is not None:
            self._decide("gate", phase=waiting.name, gate="operator", verdict="pass", text="go")
            self._begin_phase(waiting)
        elif item.command == "pause" and allowed(self.state, "pause"):
            self._paused_state = self.state
            self._paused_at_ns = self._now_ns
            self._move("pause")
            self._withdraw_from_boundary()
        elif item.command == "resume" and self.state == "paused":
            self._move("resume")
            self._resume()
        elif item.command == "end_induction" and phase and phase.kind == "induction":
            self._ended_induction_early = True
            if self.state == "paused":
                self._paused_at_ns = None
                self._move("resume")
            self._stop_phase = True
            self._withdraw_from_boundary()
        elif item.command == "abandon" and allowed(self.state, "abandon"):
            self._end("abandon", "abandoned", item.text or "the operator gave the cell up")
        else:
            self._decide(
                "alarm",
                name="not_possible",
                text=f"{item.command} is not possible in state {self.state}",
            )

    def _waiting_gate(self) -> PlanPhase | None:
        """Return the phase whose operator gate is waiting, if any."""
        if self.state not in ("armed", "baseline", "induction", "follow_up"):
            return None
        if self._phase_end_ns is not None or self._next_phase >= len(self._plan.phases):
            return None
        phase = self._plan.phases[self._next_phase]
        return phase if phase.gate == "operator" else None

    def _withdraw_from_boundary(self) -> None:
        """Take back every pairing and test that has not begun; let a begun one finish."""
        boundary_ns = self._now_ns + PAUSE_GUARD_NS
        keep = self._agenda.begun_before(boundary_ns)
        kept_pairings = {p.pairing.id for p in keep if p.pairing is not None}
        ids = []
        for delivery in self._ledger.deliveries():
            begun = (
                delivery.planned_ns < boundary_ns
                if delivery.plan.pairing is None
                else delivery.plan.pairing in kept_pairings
            )
            if delivery.fate is None and not begun:
                delivery.withdrawn = True
                ids.append(delivery.plan.id)
        self._agenda = Agenda(keep)
        if ids:
            self._actions.append(act.Withdraw(tuple(ids)))
        if not self._probing:
            self._probe()

    def _resume(self) -> None:
        """Schedule again what the pause took back, all of it later by the same amount."""
        phase = self._phase
        assert phase is not None
        assert self._paused_at_ns is not None
        back = [d.plan for d in self._ledger.deliveries() if d.withdrawn and d.fate == "cancelled"]
        self._paused_at_ns = None
        if not back:
            self._phase_end_ns = self._now_ns
            self._stop_phase = True
            return
        first_ns = min(t.at_ns for t in back)
        start_ns = self._ns(self._tick(self._now_ns + PHASE_LEAD_NS - first_ns))
        self._decide("phase_shift", phase=phase.index, name=phase.name, start_ns=start_ns)
        self._phase_end_ns = start_ns + phase.duration_ns
        self._schedule(phase, start_ns, tuple(sorted(back, key=lambda t: (t.at_ns, t.line))))
        pairings = {t.pairing for t in back if t.pairing is not None}
        presentations = [
            self._presentation(start_ns, p, p.first_ns, p.last_ns)
            for p in phase.pairings
            if p.id in pairings
        ]
        presentations += self._tests(start_ns, back)
        self._agenda = Agenda([*self._agenda.rest(), *presentations])

    def _on_link_fault(self, item: inp.LinkFault) -> None:
        self._alarm(self._alarms.link_fault(item.what))

    def _on_link_lost(self, item: inp.LinkLost) -> None:
        if allowed(self.state, "link_lost"):
            self._end("link_lost", "link_lost", item.what)
        elif self.state == "closing":
            self._finish_record("record_complete")

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
            self._decide("alarm", name=ended, text=text)
        self._decide("ended", how=ended, text=text)
        self._phase_end_ns = None
        if cause in ("box_disagrees", "link_lost"):
            self._finish_record("record_complete")
        else:
            self._actions.append(act.Disarm())
            self._probe()

    def _finish_record(self, cause: str) -> None:
        """Judge what is left, write what never ran, close."""
        for presentation in self._agenda.take_due(1 << 62):
            if presentation.pairing is not None and self._begun(presentation.pairing):
                self._judge(presentation.pairing)
        for delivery in self._ledger.deliveries():
            if delivery.fate is None:
                # Nothing was heard of it: past its time nobody knows, before it it never left.
                if delivery.planned_ns <= max(self._through_ns, self._now_ns):
                    self._unknown(delivery)
                else:
                    self._rows += self._ledger.resolved(delivery, "cancelled")
        self._rows += self._ledger.flush(1 << 62)
        self._forecaster.finish()
        self._write_forecast(max(self._through_ns, self._now_ns))
        for phase in self._plan.phases:
            for pairing in phase.pairings:
                if pairing.id not in self._judged:
                    self._rows += _not_run(pairing, phase.index)
        self._move(cause)
        self._decide("closed")
        self._actions.append(act.Finish())

    def _begun(self, pairing: PlanPairing) -> bool:
        return any(
            d.fate not in (None, "cancelled") or d.planned_ns <= self._now_ns
            for d in self._ledger.deliveries_of(pairing.id)
        )


def _not_run(pairing: PlanPairing, phase: int) -> list[Row]:
    rows: list[Row] = [
        SpikePairRow(pairing.id, p.k, None, None, p.target_dt_ns, None, "not_run")
        for p in pairing.pairs
    ]
    rows.append(
        PairingRow(pairing.id, phase, pairing.pathway, pairing.target_dt_ns, None, "not_run", None)
    )
    return rows
