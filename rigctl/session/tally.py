"""What has been delivered and seen so far, and what that adds up to.

Brings together the ledger, what is still awaited, the forecast, the responses and the alarms about
pairings. The session core decides *when*; this says *what*. Rows are handed back as they arise.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable

from rigctl.plasticity.forecast import Forecaster
from rigctl.protocol.plan import Plan, PlanPairing, PlanPhase, PlanTrigger
from rigctl.session.actions import ScheduledTrigger
from rigctl.session.agenda import Agenda, Presentation
from rigctl.session.alarms import Alarm, AlarmBook
from rigctl.session.ledger import Delivery, Ledger
from rigctl.session.responses import Responses
from rigctl.session.rows import ForecastRow, PairingRow, Row, SpikePairRow, TriggerFate
from rigctl.session.sweeps import Sweep

_FOREVER_NS = 1 << 62


class Tally:
    """The running account of one session.

    Parameters
    ----------
    plan : Plan
    """

    def __init__(self, plan: Plan) -> None:
        self._plan = plan
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
        self._book = AlarmBook(plan)
        self._agenda = Agenda()
        self._phase: PlanPhase | None = None
        self._judged: set[int] = set()
        self._told: list[Alarm] = []

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

    def take_alarms(self) -> list[Alarm]:
        """Return the alarms raised since the last call."""
        told, self._told = self._told, []
        return told

    def alarm_for_link(self, what: str) -> None:
        """Take note of a fault that the link mended."""
        self._tell(self._book.link_fault(what))

    def _tell(self, alarm: Alarm | None) -> None:
        if alarm is not None:
            self._told.append(alarm)

    # --- phases -----------------------------------------------------------------------------

    def begin_phase(self, phase: PlanPhase, start_ns: int) -> None:
        """Turn to a phase; everything of the one before has been judged."""
        self._phase = phase
        self._ledger.begin_phase(phase)
        self._responses.begin_phase()
        self._tell(self._book.phase_begins(phase, start_ns))

    def schedule(
        self, start_ns: int, triggers: Iterable[PlanTrigger], tick: Callable[[int], int]
    ) -> tuple[ScheduledTrigger, ...]:
        """Take on triggers of this phase, to be awaited, and return them with absolute ticks.

        Parameters
        ----------
        start_ns : int
            The phase's start on the session clock (shifted, when a pause went before).
        triggers : iterable of PlanTrigger
            Sorted by time; pairings come whole.
        tick : callable
            From session time to box ticks.
        """
        assert self._phase is not None
        scheduled, awaited, pairings = [], self._agenda.rest(), set()
        for trigger in triggers:
            at_ns = start_ns + trigger.at_ns
            at_tick = tick(at_ns)
            self._ledger.plan_trigger(self._phase.index, trigger, at_ns, at_tick)
            width_ticks = max(1, tick(trigger.width_ns))
            scheduled.append(ScheduledTrigger(trigger.id, trigger.line, at_tick, width_ticks))
            if trigger.pairing is not None:
                pairings.add(trigger.pairing)
            elif self._drives[trigger.line] == "pre":
                awaited.append(Presentation(at_ns + self._reach_ns, at_ns, None))
        awaited += [
            Presentation(start_ns + p.last_ns + self._reach_ns, start_ns + p.first_ns, p)
            for p in self._phase.pairings
            if p.id in pairings
        ]
        self._agenda = Agenda(awaited)
        return tuple(scheduled)

    def responses(self) -> dict[str, list[float]]:
        """Return the responses measured in this phase, by pathway."""
        return self._responses.of_phase()

    def withdraw_from(self, boundary_ns: int) -> tuple[int, ...]:
        """Await no more what begins after ``boundary_ns``; return the triggers to take back.

        What has begun is left to finish.
        """
        keep = self._agenda.begun_before(boundary_ns)
        kept = {p.pairing.id for p in keep if p.pairing is not None}
        ids = []
        for delivery in self._ledger.deliveries():
            begun = (
                delivery.planned_ns < boundary_ns
                if delivery.plan.pairing is None
                else delivery.plan.pairing in kept
            )
            if delivery.fate is None and not begun:
                delivery.withdrawn = True
                ids.append(delivery.plan.id)
        self._agenda = Agenda(keep)
        return tuple(ids)

    def withdrawn(self) -> list[PlanTrigger]:
        """Return what was taken back and did not fire, sorted by time."""
        back = [d.plan for d in self._ledger.deliveries() if d.withdrawn and d.fate == "cancelled"]
        return sorted(back, key=lambda t: (t.at_ns, t.line))

    # --- what is awaited --------------------------------------------------------------------

    def next_due_ns(self) -> int | None:
        """Return when the next presentation falls due; None when none is awaited."""
        return self._agenda.next_due_ns()

    @property
    def settled(self) -> bool:
        """Whether the fate of every trigger of this phase is known."""
        return all(d.fate is not None for d in self._ledger.deliveries())

    # --- what the box tells -----------------------------------------------------------------

    def fired(self, trigger: int, at_ns: int, boot: int) -> list[Row]:
        """Log an edge of the box."""
        delivery = self._ledger.delivery(trigger)
        if delivery is None:
            self._tell(("unexplained_pulse", f"the box fired trigger {trigger}, not ours"))
            return []
        rows = self._ledger.fired(delivery, at_ns, boot)
        line = delivery.line
        if line.drives == "pre" and line.pathway is not None:
            if delivery.pre_at_ns is not None:
                self._forecaster.pre(line.pathway, delivery.pre_at_ns)
            if delivery.plan.pairing is None:
                self._responses.test_fired(line, at_ns)
        return rows

    def lost(self, trigger: int, fate: TriggerFate, why: str) -> list[Row]:
        """Log a trigger that did not fire and should have."""
        rows = self._resolve(trigger, fate)
        if rows:
            delivery = self._ledger.delivery(trigger)
            assert delivery is not None
            self._tell(self._book.trigger_lost(fate, delivery.plan.line, why))
        return rows

    def cancelled(self, trigger: int) -> list[Row]:
        """Log a trigger that was taken back in time."""
        return self._resolve(trigger, "cancelled")

    def _resolve(self, trigger: int, fate: TriggerFate) -> list[Row]:
        delivery = self._ledger.delivery(trigger)
        if delivery is None or delivery.fate is not None:
            return []
        return self._ledger.resolved(delivery, fate)

    def edge(self, line_name: str, at_edge_ns: int) -> None:
        """Take in a detector's edge."""
        line = self._inputs.get(line_name)
        if line is None:
            return
        at_ns = at_edge_ns + line.offset_ns
        if line.detects == "post":
            self._ledger.post_seen(line.name, line.reference, at_ns)
            self._forecaster.post(at_ns)
        else:
            self._ledger.pre_seen(line.pathway, line.name, line.reference, at_ns)
            for pathway in [line.pathway] if line.pathway else self._pathways:
                self._forecaster.pre(pathway, at_ns)

    def sweep(self, sweep: Sweep) -> list[Row]:
        """Measure the test responses in a sweep."""
        return self._responses.measure(sweep, self._ledger.spike_between)

    # --- judging ----------------------------------------------------------------------------

    def judge_due(self, through_ns: int) -> list[Row]:
        """Judge all that is due now that everything up to ``through_ns`` has been heard."""
        rows: list[Row] = []
        due = self._agenda.take_due(through_ns)
        for presentation in due:
            if presentation.pairing is not None:
                rows += self._judge(presentation.pairing)
        # A spike may be called unplanned once no presentation can claim it any more.
        limit_ns = through_ns - self._settle_ns
        earliest_ns = self._agenda.earliest_begin_ns()
        if earliest_ns is not None:
            limit_ns = min(limit_ns, earliest_ns)
        rows += self._ledger.flush(limit_ns)
        self._forecaster.advance(through_ns - self._settle_ns)
        if due:
            rows += self._forecast(through_ns)
        return rows

    def finish(self, now_ns: int, may_fire_ns: int) -> list[Row]:
        """Judge what has begun, write what never ran: nothing more will be heard.

        A pulse planned up to ``may_fire_ns`` of which nothing was heard may have come; later ones
        never left.
        """
        rows: list[Row] = []
        if self._phase is not None:
            for pairing in self._phase.pairings:
                if pairing.id not in self._judged and self._begun(pairing, may_fire_ns):
                    rows += self._judge(pairing)
        for delivery in self._ledger.deliveries():
            if delivery.fate is None:
                if delivery.planned_ns <= may_fire_ns:
                    rows += self._unknown(delivery)
                else:
                    rows += self._ledger.resolved(delivery, "cancelled")
        rows += self._ledger.flush(_FOREVER_NS)
        self._forecaster.finish()
        rows += self._forecast(now_ns)
        for phase in self._plan.phases:
            for pairing in phase.pairings:
                if pairing.id not in self._judged:
                    rows += _not_run(pairing, phase.index)
        return rows

    def _begun(self, pairing: PlanPairing, may_fire_ns: int) -> bool:
        return any(
            d.fate not in (None, "cancelled") or (d.fate is None and d.planned_ns <= may_fire_ns)
            for d in self._ledger.deliveries_of(pairing.id)
        )

    def _judge(self, pairing: PlanPairing) -> list[Row]:
        assert self._phase is not None
        rows: list[Row] = []
        for delivery in self._ledger.deliveries_of(pairing.id):
            if delivery.fate is None:
                rows += self._unknown(delivery)
        judged = self._ledger.judge(pairing, self._phase.index)
        self._judged.add(pairing.id)
        self._told += self._book.pairing_judged(pairing.id, judged)
        return rows + judged.rows

    def _unknown(self, delivery: Delivery) -> list[Row]:
        """Nobody knows whether this pulse came: log it so, and let the band say it."""
        expected_ns = delivery.planned_ns + delivery.line.latency_ns
        line = delivery.line
        if line.drives == "pre" and line.pathway is not None:
            self._forecaster.pre(line.pathway, expected_ns, known=False)
        elif line.drives == "post" and line.evokes_spike:
            self._forecaster.post(expected_ns, known=False)
        return self._ledger.resolved(delivery, "unknown")

    def _forecast(self, at_ns: int) -> list[Row]:
        return [
            ForecastRow(at_ns, v.pathway, v.rule, v.parameter_set, v.change, v.low, v.high)
            for v in self._forecaster.read()
        ]


def _not_run(pairing: PlanPairing, phase: int) -> list[Row]:
    rows: list[Row] = [
        SpikePairRow(pairing.id, p.k, None, None, p.target_dt_ns, None, "not_run")
        for p in pairing.pairs
    ]
    rows.append(
        PairingRow(pairing.id, phase, pairing.pathway, pairing.target_dt_ns, None, "not_run", None)
    )
    return rows
