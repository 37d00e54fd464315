"""Figure A: the protocol to scale, whole and one pairing."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from rigctl.protocol.plan import Plan, PlanPairing, PlanPhase
from rigctl.report.figures.style import (
    FIRST,
    QUIET,
    RULE,
    SECOND,
    SERIES,
    drawing,
    shade,
)

_MOST_TICKS = 3000


def figure_a(plan: Plan, simulated: bool) -> tuple[str, str]:
    """Draw the protocol; return (SVG, the sentence that says it)."""
    total_min = plan.duration_ns / 6e10
    with drawing(2.9, simulated) as made:
        whole, one = made.figure.subplots(1, 2, width_ratios=(2.2, 1))
        _whole(whole, plan)
        words = _one(one, plan)
    text = f"{len(plan.phases)} phases, {total_min:.1f} min if every gate passes at once; {words}"
    return made.svg(f"Figure A, the protocol to scale: {text}"), text


def _whole(axes: Axes, plan: Plan) -> None:
    lines = [line.name for line in plan.lines]
    start_min = 0.0
    for phase in plan.phases:
        end_min = start_min + phase.duration_ns / 6e10
        if phase.kind == "induction":
            shade(axes, start_min, end_min, phase.name)
        else:
            axes.text(
                (start_min + end_min) / 2, 1.0, phase.name, ha="center", va="bottom",
                transform=axes.get_xaxis_transform(), color=QUIET, fontsize=8.5,
            )  # fmt: skip
        for row, name in enumerate(lines):
            times = np.array([t.at_ns for t in phase.triggers if t.line == name]) / 6e10
            if len(times) > _MOST_TICKS:
                times = times[:: len(times) // _MOST_TICKS + 1]
            axes.vlines(start_min + times, row - 0.32, row + 0.32, color=SERIES[row % 3], lw=0.5)
        axes.axvline(end_min, color=RULE, lw=0.6)
        start_min = end_min
    axes.set_yticks(range(len(lines)), lines)
    axes.set_ylim(len(lines) - 0.4, -0.6)
    axes.set_xlim(0, start_min or 1)
    axes.set_xlabel("min from the start of the plan")
    axes.set_title("A  Every pulse, to scale", pad=16)


def _first_pairing(plan: Plan) -> tuple[PlanPhase, PlanPairing] | None:
    for phase in plan.phases:
        for pairing in phase.pairings:
            return phase, pairing
    return None


def _one(axes: Axes, plan: Plan) -> str:
    axes.set_title("One pairing, at the synapse", pad=16)
    axes.set_yticks([1, 0], ["pre", "post"])
    axes.set_ylim(-0.6, 1.7)
    found = _first_pairing(plan)
    if found is None:
        axes.set_xticks([])
        axes.text(0.5, 0.5, "no scheduled pairing", transform=axes.transAxes, ha="center")
        return "no pairing is scheduled"
    phase, pairing = found
    lines = {line.name: line for line in plan.lines}
    events = []
    for trigger in phase.triggers:
        line = lines[trigger.line]
        if trigger.pairing == pairing.id and line.drives in ("pre", "post"):
            events.append((line.drives, (trigger.at_ns + line.latency_ns) / 1e6))
    zero = min(at for _, at in events)
    for drives, at_ms in events:
        row, colour = (1, FIRST) if drives == "pre" else (0, SECOND)
        axes.vlines(at_ms - zero, row - 0.35, row + 0.35, color=colour, lw=2)
    axes.set_xlabel(f"ms ({plan.pre_reference} and {plan.post_reference})")
    span = max(at for _, at in events) - zero
    axes.set_xlim(-0.1 * span - 1, 1.1 * span + 1)
    dts = [p.target_dt_ns / 1e6 for p in pairing.pairs]
    count = sum(len(p.pairings) for p in plan.phases)
    if not dts:
        return f"{count} pairings without a spike pair"
    shown = ", ".join(f"{dt:+g}" for dt in dts[:4]) + (" …" if len(dts) > 4 else "")
    if len(dts) == 1:
        axes.annotate(
            f"Δt {dts[0]:+g} ms", (abs(dts[0]) / 2, 0.5), ha="center", va="center", color=QUIET
        )
    return f"{count} pairings; the first one's target Δt is {shown} ms"
