"""The spikes that a plan would make if it were delivered exactly."""

from __future__ import annotations

from typing import NamedTuple

from rigctl.protocol.plan import Plan


class PlannedSpike(NamedTuple):
    """One reference event of a plan delivered exactly; ``trigger`` brings it about."""

    at_ns: int
    side: str
    pathway: str | None
    pairing: int | None
    trigger: int


def planned_spikes(plan: Plan) -> list[PlannedSpike]:
    """Return the reference events of a session that starts at 0, phases back to back, in order.

    Test stimuli are the pre events without a pairing. A rule on the box makes none here: when a
    spontaneous spike comes is not planned.
    """
    lines = {line.name: line for line in plan.lines}
    spikes = []
    start_ns = 0
    for phase in plan.phases:
        for trigger in phase.triggers:
            line = lines[trigger.line]
            if line.drives == "pre":
                side, pathway = "pre", line.pathway
            elif line.drives == "post" and line.evokes_spike:
                side, pathway = "post", None
            else:
                continue
            at_ns = start_ns + trigger.at_ns + line.latency_ns
            spikes.append(PlannedSpike(at_ns, side, pathway, trigger.pairing, trigger.id))
        start_ns += phase.duration_ns
    spikes.sort(key=lambda s: (s.at_ns, s.side))
    return spikes


def paired_pathways(plan: Plan) -> list[str]:
    """Return the pathways that any pairing or rule uses, sorted."""
    found = {p.pathway for phase in plan.phases for p in phase.pairings}
    found |= {phase.rule.pathway for phase in plan.phases if phase.rule is not None}
    return sorted(found)
