"""The audit: what a plan would really do at the synapse, before anything runs.

A pairing protocol brings together more than it says: neighbouring pairings, the spikes within a
burst, and test stimuli near spikes are pairs as well. The audit counts them, and what they add.
"""

from __future__ import annotations

from collections import Counter

import numpy as np
from msgspec import Struct

from rigctl.plasticity import rule
from rigctl.plasticity.forecast import as_planned, extrapolates
from rigctl.protocol.audit_pairs import UnintendedPair, reach_of, unintended
from rigctl.protocol.audit_stated import not_stated
from rigctl.protocol.audit_washout import WashoutMinute, washout_minutes
from rigctl.protocol.plan import Plan, RuleChoice
from rigctl.protocol.planned import PlannedSpike, paired_pathways, planned_spikes
from rigctl.protocol.rig import Rig
from rigctl.protocol.sensitivity import Sensitivity, change_of, sensitivity

__all__ = [
    "Audit",
    "ForecastAudit",
    "Segment",
    "Stretch",
    "UnintendedPair",
    "WashoutMinute",
    "audit",
]


class Segment(Struct, frozen=True):
    """One phase on a time axis that starts with the plan.

    ``tests`` counts test stimuli, ``unpaired`` other pre events that belong to no pairing.
    """

    name: str
    kind: str
    gate: str
    start_ns: int
    end_ns: int
    pairings: int
    tests: int
    unpaired: int


class Stretch(Struct, frozen=True):
    """One block or test series of a phase, from its first trigger to its last.

    ``dt_ms`` is the target of a block's pairings where they have one and the same.
    """

    phase: str
    what: str
    pathway: str
    start_ns: int
    end_ns: int
    count: int
    dt_ms: float | None


class PulseCount(Struct, frozen=True):
    """Pulses of one line in one phase."""

    line: str
    pathway: str | None
    phase: str
    pulses: int


class ForecastAudit(Struct, frozen=True):
    """What a rule makes of the plan delivered exactly, and of parts of it (relative changes)."""

    rule: str
    parameter_set: str
    pathway: str
    preparation: str | None
    change: float
    intended_only: float
    without_tests: float
    sensitivity: Sensitivity | None
    extrapolation: str | None


class Audit(Struct, frozen=True):
    """The whole audit. ``notes`` says where it falls short of the plan, in sentences."""

    duration_ns: int
    segments: list[Segment]
    stretches: list[Stretch]
    counts: list[PulseCount]
    intended_dt_ms: list[tuple[float, int]]
    reach_ms: float
    unintended: list[UnintendedPair]
    unintended_total: int
    forecasts: list[ForecastAudit]
    washout: list[WashoutMinute]
    not_stated: list[str]
    notes: list[str]


def audit(plan: Plan, rig: Rig) -> Audit:
    """Audit a plan.

    Parameters
    ----------
    plan : Plan
    rig : Rig
        The rig that it was compiled with.
    """
    spikes = planned_spikes(plan)
    asked_ns = reach_of(plan.forecasts)
    pairs, reach_ns = unintended(plan, spikes, asked_ns)
    notes = []
    if any(phase.rule is not None for phase in plan.phases):
        notes.append(
            "Spontaneous spikes start the pairings of a box rule: when they come is not planned, "
            "so these pairings are in no forecast and no unintended pair here."
        )
    if reach_ns < asked_ns:
        notes.append(
            f"Unintended pairs are counted within {reach_ns / 1e6:g} ms only: within the rule's "
            f"{asked_ns / 1e6:g} ms there are too many."
        )
    return Audit(
        duration_ns=plan.duration_ns,
        segments=_segments(plan, spikes),
        stretches=_stretches(plan, spikes),
        counts=_counts(plan),
        intended_dt_ms=_intended(plan),
        reach_ms=reach_ns / 1e6,
        unintended=pairs,
        unintended_total=sum(u.count for u in pairs),
        forecasts=_forecasts(plan, spikes),
        washout=washout_minutes(plan),
        not_stated=not_stated(plan, rig),
        notes=notes,
    )


def _segments(plan: Plan, spikes: list[PlannedSpike]) -> list[Segment]:
    loose = Counter((s.phase, s.is_test) for s in spikes if s.side == "pre" and s.pairing is None)
    segments, at_ns = [], 0
    for phase in plan.phases:
        pairings = phase.rule.max_pairings if phase.rule else len(phase.pairings)
        end_ns = at_ns + phase.duration_ns
        segments.append(
            Segment(
                phase.name,
                phase.kind,
                phase.gate,
                at_ns,
                end_ns,
                pairings,
                loose[phase.index, True],
                loose[phase.index, False],
            )
        )
        at_ns = end_ns
    return segments


def _stretches(plan: Plan, spikes: list[PlannedSpike]) -> list[Stretch]:
    """Return blocks and test series, phase by phase, in the order in which they begin."""
    trigger_at = {t.id: t.at_ns for phase in plan.phases for t in phase.triggers}
    tests: dict[tuple[int, str], list[int]] = {}
    for spike in spikes:
        if spike.is_test:
            tests.setdefault((spike.phase, spike.pathway or ""), []).append(
                trigger_at[spike.trigger]
            )
    found, zero_ns = [], 0
    for phase in plan.phases:
        here = []
        for number in dict.fromkeys(p.block for p in phase.pairings):
            block = [p for p in phase.pairings if p.block == number]
            first_ns, last_ns = block[0].first_ns, max(p.last_ns for p in block)
            targets = {p.target_dt_ns for p in block}
            target_ns = targets.pop() if len(targets) == 1 else None
            dt_ms = None if target_ns is None else target_ns / 1e6
            here.append((first_ns, last_ns, f"block {number}", block[0].pathway, len(block), dt_ms))
        if phase.rule is not None:
            r = phase.rule
            here.append(
                (0, r.duration_ns, "box rule", r.pathway, r.max_pairings, r.target_dt_ns / 1e6)
            )
        for (index, pathway), times_ns in tests.items():
            if index == phase.index:
                here.append((min(times_ns), max(times_ns), "tests", pathway, len(times_ns), None))
        found += [
            Stretch(phase.name, what, pathway, zero_ns + a, zero_ns + b, count, dt_ms)
            for a, b, what, pathway, count, dt_ms in sorted(here, key=lambda h: h[:4])
        ]
        zero_ns += phase.duration_ns
    return found


def _counts(plan: Plan) -> list[PulseCount]:
    pathway = {line.name: line.pathway for line in plan.lines}
    counts = []
    for phase in plan.phases:
        pulses = Counter(t.line for t in phase.triggers)
        if phase.rule is not None:
            pulses[phase.rule.line] += phase.rule.max_pairings
        counts += [
            PulseCount(line, pathway[line], phase.name, n) for line, n in sorted(pulses.items())
        ]
    return counts


def _intended(plan: Plan) -> list[tuple[float, int]]:
    found: Counter[float] = Counter()
    for phase in plan.phases:
        if phase.rule is not None:
            found[phase.rule.target_dt_ns / 1e6] += phase.rule.max_pairings
        for pairing in phase.pairings:
            found.update(pair.target_dt_ns / 1e6 for pair in pairing.pairs)
    return sorted(found.items())


def _forecasts(plan: Plan, spikes: list[PlannedSpike]) -> list[ForecastAudit]:
    everything = as_planned(plan.forecasts, [s[:3] for s in spikes])
    paired = paired_pathways(plan)
    pairings: Counter[str] = Counter()
    for phase in plan.phases:
        pairings.update(p.pathway for p in phase.pairings)
        if phase.rule is not None:
            pairings[phase.rule.pathway] += phase.rule.max_pairings
    post = np.array([s.at_ns for s in spikes if s.side == "post"], dtype=np.float64)
    audits = []
    # as_planned goes choice by choice, each over the same pathways.
    per_choice = len(everything) // max(1, len(plan.forecasts))
    for n, value in enumerate(everything):
        choice = plan.forecasts[n // per_choice]
        mine = [s for s in spikes if s.side == "pre" and s.pathway == value.pathway]
        untested = [s.at_ns for s in mine if not s.is_test]
        without = value.change
        if len(untested) < len(mine):
            without = change_of(choice, np.array(untested, dtype=np.float64), post)
        is_paired = value.pathway in paired
        audits.append(
            ForecastAudit(
                value.rule,
                value.parameter_set,
                value.pathway,
                choice.preparation,
                value.change,
                _intended_only(plan, choice, value.pathway),
                without,
                sensitivity(choice, spikes, value.pathway) if is_paired else None,
                extrapolates(choice, pairings[value.pathway]) if is_paired else None,
            )
        )
    return audits


def _intended_only(plan: Plan, choice: RuleChoice, pathway: str) -> float:
    """Return the change if each intended spike pair came alone, far from all others."""
    made = rule(choice.rule, **choice.parameters)
    far_s = 20 * reach_of((choice,)) / 1e9
    at_s = 0.0
    for phase in plan.phases:
        for pairing in phase.pairings:
            if pairing.pathway != pathway:
                continue
            for pair in pairing.pairs:
                dt_s = pair.target_dt_ns / 1e9
                at_s += far_s + abs(dt_s)
                if dt_s > 0:
                    made.pre(at_s)
                    made.post(at_s + dt_s)
                else:
                    made.post(at_s)
                    made.pre(at_s - dt_s)
    return made.change
