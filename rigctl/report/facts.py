"""What the page draws and says, taken out of a record once."""

from __future__ import annotations

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
from rigctl.session.rows import SpikePairRow

Floats = npt.NDArray[np.float64]
_T95 = 1.96


class PhaseTime(Struct, frozen=True):
    """When a phase ran, session ns."""

    name: str
    kind: str
    start_ns: int
    end_ns: int


class Creep(NamedTuple):
    """A clear trend of Δt error over the pairings, ms."""

    total_ms: float
    half_ms: float
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
        last = self.record.events[-1].at_ns if self.record.events else 0
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
        """Return the trend of the Δt error, when it is clear: its interval excludes zero and it
        is larger than half a millisecond (0.5 ms: common practice, no source).
        """
        numbers, errors = self.errors_ms()
        n = len(errors)
        if n < 12 or np.ptp(numbers) == 0:
            return None
        centred = numbers - numbers.mean()
        spread = float(centred @ centred)
        slope = float(centred @ errors) / spread
        rest = errors - errors.mean() - slope * centred
        half = _T95 * float(np.sqrt(rest @ rest / (n - 2) / spread)) * float(np.ptp(numbers))
        total = slope * float(np.ptp(numbers))
        if abs(total) <= max(half, 0.5):
            return None
        tenth = max(3, n // 10)
        return Creep(total, half, float(errors[:tenth].mean()), float(errors[-tenth:].mean()))

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
