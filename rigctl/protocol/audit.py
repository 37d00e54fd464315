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
from rigctl.protocol.plan import Plan, RuleChoice
from rigctl.protocol.planned import PlannedSpike, paired_pathways, planned_spikes
from rigctl.protocol.rig import Rig
from rigctl.protocol.sensitivity import Sensitivity, sensitivity

_MIN = 60_000_000_000
_REACH_TAUS = 5
_FALLBACK_REACH_NS = 200_000_000
_FEW = 10


class Segment(Struct, frozen=True):
    """One phase on a time axis that starts with the plan."""

    name: str
    kind: str
    gate: str
    start_ns: int
    end_ns: int
    pairings: int
    tests: int


class PulseCount(Struct, frozen=True):
    """Pulses of one line in one phase."""

    line: str
    pathway: str | None
    phase: str
    pulses: int


class UnintendedPair(Struct, frozen=True):
    """One kind of pair that nobody asked for: where, its Δt (to the ms), how often."""

    phase: str
    what: str
    dt_ms: float
    count: int


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


class WashoutMinute(Struct, frozen=True):
    """One minute after break-in: what goes on, and whether it is late."""

    minute: int
    what: str
    flag: str


class Audit(Struct, frozen=True):
    """The whole audit."""

    duration_ns: int
    segments: list[Segment]
    counts: list[PulseCount]
    intended_dt_ms: list[tuple[float, int]]
    reach_ms: float
    unintended: list[UnintendedPair]
    unintended_total: int
    forecasts: list[ForecastAudit]
    washout: list[WashoutMinute]
    not_stated: list[str]


def audit(plan: Plan, rig: Rig) -> Audit:
    """Audit a plan.

    Parameters
    ----------
    plan : Plan
    rig : Rig
        The rig that it was compiled with.
    """
    spikes = planned_spikes(plan)
    reach_ns = _reach_ns(plan.forecasts)
    unintended = _unintended(plan, spikes, reach_ns)
    return Audit(
        duration_ns=plan.duration_ns,
        segments=_segments(plan),
        counts=_counts(plan),
        intended_dt_ms=_intended(plan),
        reach_ms=reach_ns / 1e6,
        unintended=unintended,
        unintended_total=sum(u.count for u in unintended),
        forecasts=_forecasts(plan, spikes),
        washout=_washout(plan),
        not_stated=_not_stated(plan, rig),
    )


def _segments(plan: Plan) -> list[Segment]:
    pre = {line.name for line in plan.lines if line.drives == "pre"}
    segments, at_ns = [], 0
    for phase in plan.phases:
        tests = sum(1 for t in phase.triggers if t.pairing is None and t.line in pre)
        pairings = phase.rule.max_pairings if phase.rule else len(phase.pairings)
        end_ns = at_ns + phase.duration_ns
        segments.append(Segment(phase.name, phase.kind, phase.gate, at_ns, end_ns, pairings, tests))
        at_ns = end_ns
    return segments


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


def _reach_ns(choices: tuple[RuleChoice, ...]) -> int:
    taus = [
        float(value)
        for choice in choices
        for key, value in choice.parameters.items()
        if key in ("tau_plus_ms", "tau_minus_ms") and value is not None
    ]
    return round(_REACH_TAUS * max(taus) * 1e6) if taus else _FALLBACK_REACH_NS


def _unintended(plan: Plan, spikes: list[PlannedSpike], reach_ns: int) -> list[UnintendedPair]:
    """Count, by phase, kind and Δt, the pairs within reach that no pairing intends."""
    meant = {
        (pair.pre_trigger, pair.post_trigger)
        for phase in plan.phases
        for pairing in phase.pairings
        for pair in pairing.pairs
    }
    phase_of = {t.id: phase.name for phase in plan.phases for t in phase.triggers}
    paired = set(paired_pathways(plan))
    pres = [s for s in spikes if s.side == "pre" and s.pathway in paired]
    posts = [s for s in spikes if s.side == "post"]
    post_ns = np.array([s.at_ns for s in posts], dtype=np.int64)
    pre_ns = np.array([s.at_ns for s in pres], dtype=np.int64)
    first = np.searchsorted(post_ns, pre_ns - reach_ns, side="left")
    last = np.searchsorted(post_ns, pre_ns + reach_ns, side="right")
    found: Counter[tuple[str, str, float]] = Counter()
    for pre, begin, end in zip(pres, first.tolist(), last.tolist(), strict=True):
        for post in posts[begin:end]:
            if (pre.trigger, post.trigger) in meant or pre.at_ns == post.at_ns:
                continue
            if pre.pairing is None:
                what = "test stimulus or unpaired pre"
            elif pre.pairing == post.pairing:
                what = "within a pairing"
            else:
                what = "between pairings"
            dt_ms = float(round((post.at_ns - pre.at_ns) / 1e6))
            found[phase_of[pre.trigger], what, dt_ms] += 1
    return [
        UnintendedPair(phase, what, dt_ms, count)
        for (phase, what, dt_ms), count in sorted(
            found.items(), key=lambda item: (-item[1], abs(item[0][2]))
        )
    ]


def _forecasts(plan: Plan, spikes: list[PlannedSpike]) -> list[ForecastAudit]:
    everything = as_planned(plan.forecasts, [s[:3] for s in spikes])
    tested = {s.trigger for s in spikes if s.side == "pre" and s.pairing is None}
    no_tests = [s[:3] for s in spikes if s.trigger not in tested]
    without = {
        (v.rule, v.parameter_set, v.pathway): v.change for v in as_planned(plan.forecasts, no_tests)
    }
    paired = paired_pathways(plan)
    pairings = {p: sum(1 for ph in plan.phases for x in ph.pairings if x.pathway == p)
                for p in paired}  # fmt: skip
    audits = []
    # as_planned goes choice by choice, each over the same pathways.
    per_choice = len(everything) // max(1, len(plan.forecasts))
    for n, value in enumerate(everything):
        choice = plan.forecasts[n // per_choice]
        key = (value.rule, value.parameter_set, value.pathway)
        is_paired = value.pathway in paired
        audits.append(
            ForecastAudit(
                value.rule,
                value.parameter_set,
                value.pathway,
                choice.preparation,
                value.change,
                _intended_only(plan, choice, value.pathway),
                without.get(key, 0.0),
                sensitivity(choice, spikes, value.pathway) if is_paired else None,
                extrapolates(choice, pairings[value.pathway]) if is_paired else None,
            )
        )
    return audits


def _intended_only(plan: Plan, choice: RuleChoice, pathway: str) -> float:
    """Return the change if each intended spike pair came alone, far from all others."""
    made = rule(choice.rule, **choice.parameters)
    far_s = 1e-6 * (_reach_ns((choice,)) / 1e3) * 20
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


def _washout(plan: Plan) -> list[WashoutMinute]:
    """Return the budget from break-in to the end of the induction, minute by minute."""
    clock = plan.washout
    if clock.get("start_by_ns") is None and clock.get("end_by_ns") is None:
        return []
    at_ns = clock["before_plan_ns"] or 0
    stretches = [("before the plan", "", 0, at_ns)]
    for phase in plan.phases:
        stretches.append((phase.name, phase.kind, at_ns, at_ns + phase.duration_ns))
        at_ns += phase.duration_ns
    inductions = [s for s in stretches if s[1] == "induction"]
    end_ns = inductions[-1][3] if inductions else stretches[0][3]
    minutes = []
    for minute in range(-(-end_ns // _MIN)):
        from_ns, to_ns = minute * _MIN, (minute + 1) * _MIN
        here = [s[0] for s in stretches if s[2] < to_ns and s[3] > from_ns]
        inducing = any(s in inductions for s in stretches if s[2] < to_ns and s[3] > from_ns)
        flag = ""
        warn_ns, end_by_ns = clock.get("warn_at_ns"), clock.get("end_by_ns")
        if inducing and end_by_ns is not None and to_ns > end_by_ns:
            flag = "over"
        elif inducing and warn_ns is not None and to_ns > warn_ns:
            flag = "late"
        minutes.append(WashoutMinute(minute + 1, " → ".join(here), flag))
    return minutes


def _not_stated(plan: Plan, rig: Rig) -> list[str]:
    """Return what a reviewer would ask for and neither file says."""
    missing = []
    if plan.preparation is None:
        missing.append("preparation (in the protocol or the rig file)")
    if any(choice.preparation is None for choice in plan.forecasts):
        missing.append(
            "which parameter set applies here: the forecast carries the badge "
            "'no preparation named'"
        )
    if rig.approval is None:
        missing.append("animal-care approval number (approval)")
    for line in plan.lines:
        if line.reference == "trigger":
            continue
        if line.latency_n < _FEW:
            missing.append(
                f"latency of {line.name} with n of {_FEW} or more (it says {line.latency_n})"
            )
        if line.latency_sd_ns == 0:
            missing.append(f"SD of the latency of {line.name}")
    for line in plan.lines:
        name = rig.outputs[line.name].stimulus
        if name is None:
            missing.append(f"what {line.name} delivers (output.{line.name}.stimulus)")
            continue
        stimulus = rig.stimuli[name]
        if stimulus.kind in ("current_pulse", "field"):
            if stimulus.amplitude_ua is None:
                missing.append(f"amplitude of {name}")
            if stimulus.electrode is None:
                missing.append(f"electrode of {name}")
            if stimulus.balanced is None:
                missing.append(f"charge balance of {name}")
        elif stimulus.kind == "light" and None in (stimulus.power_mw, stimulus.spot_diameter_um):
            missing.append(f"power and spot of {name}")
    return list(dict.fromkeys(missing))
