"""The spikes that a plan would make if it were delivered exactly."""

from __future__ import annotations

import itertools
from typing import NamedTuple

from rigctl.protocol.plan import Plan, PlanLine, PlanPhase


class PlannedSpike(NamedTuple):
    """One reference event of a plan delivered exactly; ``trigger`` brings it about.

    ``is_test`` is true for the pre event of a test stimulus; ``phase`` counts from 0.
    """

    at_ns: int
    side: str
    pathway: str | None
    pairing: int | None
    trigger: int
    is_test: bool
    phase: int


def planned_spikes(plan: Plan) -> list[PlannedSpike]:
    """Return the reference events of a session that starts at 0, phases back to back, in order.

    A rule on the box makes none here: when a spontaneous spike comes is not planned.
    """
    lines = {line.name: line for line in plan.lines}
    spikes = []
    start_ns = 0
    for phase in plan.phases:
        tested = _tested(phase, lines, plan.tick_ns)
        for trigger in phase.triggers:
            line = lines[trigger.line]
            if line.drives == "pre":
                side, pathway = "pre", line.pathway
            elif line.drives == "post" and line.evokes_spike:
                side, pathway = "post", None
            else:
                continue
            at_ns = start_ns + trigger.at_ns + line.latency_ns
            is_test = trigger.pairing is None and line.name in tested
            spikes.append(
                PlannedSpike(
                    at_ns, side, pathway, trigger.pairing, trigger.id, is_test, phase.index
                )
            )
        start_ns += phase.duration_ns
    spikes.sort(key=lambda s: (s.at_ns, s.side))
    return spikes


def _tested(phase: PlanPhase, lines: dict[str, PlanLine], tick_ns: int) -> set[str]:
    """Return the lines whose pulses outside pairings are test stimuli.

    A plan does not mark its tests. Outside an induction there is nothing else; within one, the
    events of a random train belong to no pairing either, and only tests keep a steady interval.
    """
    loose: dict[str, list[int]] = {}
    for trigger in phase.triggers:
        if trigger.pairing is None:
            loose.setdefault(trigger.line, []).append(trigger.at_ns)
    has_train = any(lines[name].drives == "post" for name in loose)
    found = set()
    for name, times_ns in loose.items():
        if lines[name].drives != "pre":
            continue
        gaps_ns = [b - a for a, b in itertools.pairwise(times_ns)]
        # Two intervals at least, or their equality says nothing.
        enough = len(gaps_ns) > 1 or not has_train
        steady = enough and (not gaps_ns or max(gaps_ns) - min(gaps_ns) <= 2 * tick_ns)
        if phase.kind != "induction" or steady:
            found.add(name)
    return found


def paired_pathways(plan: Plan) -> list[str]:
    """Return the pathways that any pairing or rule uses, sorted."""
    found = {p.pathway for phase in plan.phases for p in phase.pairings}
    found |= {phase.rule.pathway for phase in plan.phases if phase.rule is not None}
    return sorted(found)
