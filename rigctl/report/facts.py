"""What the page draws and says, taken out of a record once."""

from __future__ import annotations

from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from msgspec import Struct

from rigctl.plasticity import rule
from rigctl.protocol.plan import Plan, RuleChoice
from rigctl.protocol.planned import paired_pathways, planned_spikes
from rigctl.record.read import Record
from rigctl.record.verify import plan_of
from rigctl.report.summary import summarise
from rigctl.report.trend import theil_sen
from rigctl.session.rows import SpikePairRow

Floats = npt.NDArray[np.float64]
# A creep smaller than this is not worth a sentence (common practice, no source).
_LEAST_CREEP_MS = 0.5
_LEAST_PAIRS = 12


class PhaseTime(Struct, frozen=True):
    """When a phase ran, session ns."""

    name: str
    kind: str
    start_ns: int
    end_ns: int


class Creep(NamedTuple):
    """A clear trend of the Δt error over the pairings, ms: from first to last, with its interval.

    ``first_ms`` and ``last_ms`` are the median errors of the first and the last tenth.
    """

    total_ms: float
    low_ms: float
    high_ms: float
    first_ms: float
    last_ms: float


class Facts:
    """A record and its plan, with what several parts of the page need."""

    def __init__(self, record: Record) -> None:
        self.record = record
        self.plan: Plan = plan_of(record.header)
        self.summary: dict[str, Any] = summarise(record, self.plan)
        self.simulated = record.simulated
        self.phases = self._phase_times()
        paired = paired_pathways(self.plan)
        self.paired = paired[0] if paired else None

    def _phase_times(self) -> list[PhaseTime]:
        ends = {e["phase"]: int(e["at_ns"]) for e in self.record.bodies("phase_end")}
        # Not the last event's: a box that starts anew begins its clock anew.
        last = max((e.at_ns for e in self.record.events), default=0)
        return [
            PhaseTime(s["name"], s["kind"], int(s["start_ns"]), ends.get(s["phase"], last))
            for s in self.record.bodies("phase_start")
        ]

    @property
    def induction(self) -> PhaseTime | None:
        """The first induction that ran."""
        return next((p for p in self.phases if p.kind == "induction"), None)

    @property
    def zero_ns(self) -> int:
        """Session time of minute 0: the induction's start, else the first phase's."""
        if self.induction is not None:
            return self.induction.start_ns
        return self.phases[0].start_ns if self.phases else 0

    def minutes(self, at_ns: int) -> float:
        """Return minutes since :attr:`zero_ns`."""
        return (at_ns - self.zero_ns) / 6e10

    def judged_pairs(self) -> list[SpikePairRow]:
        """Return the spike pairs that came up, in order."""
        return [p for p in self.record.spike_pairs if p.fate != "not_run"]

    def targets_ms(self) -> list[float]:
        """Return the planned Δt, ms, each once, rising."""
        pairs = (p for phase in self.plan.phases for x in phase.pairings for p in x.pairs)
        return sorted({p.target_dt_ns / 1e6 for p in pairs})

    def errors_ms(self) -> tuple[Floats, Floats]:
        """Return pairing numbers and Δt errors of single spikes, ms."""
        good = [
            (p.pairing, (p.delivered_dt_ns - p.target_dt_ns) / 1e6)
            for p in self.record.spike_pairs
            if p.delivered_dt_ns is not None and p.fate in ("on_target", "off_target")
        ]
        values = np.array(good, dtype=float).reshape(-1, 2)
        return values[:, 0], values[:, 1]

    def creep(self) -> Creep | None:
        """Return the trend of the Δt error over the pairings, when it is clear.

        Clear: its 95 % interval excludes zero and it is larger than half a millisecond.
        """
        return self._creep

    @cached_property
    def _creep(self) -> Creep | None:
        numbers, errors = self.errors_ms()
        n = len(errors)
        span = float(np.ptp(numbers)) if n else 0.0
        if n < _LEAST_PAIRS or span == 0:
            return None
        trend = theil_sen(numbers, errors)
        total, low, high = (slope * span for slope in trend)
        if low <= 0 <= high or abs(total) <= _LEAST_CREEP_MS:
            return None
        tenth = max(3, n // 10)
        return Creep(
            total, low, high, float(np.median(errors[:tenth])), float(np.median(errors[-tenth:]))
        )

    @property
    def pre_is_derived(self) -> bool:
        """Whether every pre event of a pairing is trigger + latency, so that Δt moves with post."""
        return all(
            s.source == "derived"
            for s in self.record.spikes
            if s.side == "pre" and s.pairing is not None
        )

    def responses(self) -> dict[str, Floats]:
        """Return the measured response amplitudes by pathway: minutes and values, shape (n, 2)."""
        found: dict[str, list[tuple[float, float]]] = {}
        for m in self.record.measures:
            if m.kind.endswith("amplitude") and m.pathway is not None:
                found.setdefault(m.pathway, []).append((self.minutes(m.at_ns), m.value))
        return {pathway: np.array(found[pathway]) for pathway in sorted(found)}

    @property
    def response_unit(self) -> str:
        """The unit of the response amplitudes."""
        units = (m.unit for m in self.record.measures if m.kind.endswith("amplitude"))
        return next(units, "mV")

    def first_off_target(self) -> int | None:
        """Return the number of the first pairing off target."""
        return next((p.id for p in self.record.pairings if p.fate == "off_target"), None)

    def planned_curve(self, choice: RuleChoice, pathway: str) -> tuple[Floats, Floats]:
        """Return the forecast had the plan been delivered exactly, at the phases' real starts.

        Returns
        -------
        minutes, change : ndarray, shape (n,)
        """
        shifts = self._phase_shifts()
        phase_of = {t.id: p.index for p in self.plan.phases for t in p.triggers}
        made = rule(choice.rule, **choice.parameters)
        minutes, changes = [], []
        events = sorted(
            (s.at_ns + shifts[phase_of[s.trigger]], s.side, s.pathway)
            for s in planned_spikes(self.plan)
            if phase_of[s.trigger] in shifts
        )
        for at_ns, side, where in events:
            if side == "post":
                made.post(at_ns / 1e9)
            elif where == pathway:
                made.pre(at_ns / 1e9)
            else:
                continue
            minutes.append(self.minutes(at_ns))
            changes.append(made.change)
        return np.array(minutes), np.array(changes)

    def _phase_shifts(self) -> dict[int, int]:
        """How far each phase that ran was from back to back at 0."""
        begins, at_ns = {}, 0
        for phase in self.plan.phases:
            begins[phase.index] = at_ns
            at_ns += phase.duration_ns
        return {
            s["phase"]: int(s["start_ns"]) - begins[s["phase"]]
            for s in self.record.bodies("phase_start")
        }
