"""Figure A: the protocol to scale, whole and one pairing."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from rigctl.protocol.plan import Plan, PlanLine, PlanPairing, PlanPhase
from rigctl.protocol.planned import paired_pathways
from rigctl.report.figures.style import (
    BAND,
    FIRST,
    INK,
    QUIET,
    RULE,
    SECOND,
    Key,
    Shown,
    above,
    drawing,
    key,
    nothing,
    ordinate,
    shade,
)
from rigctl.report.names import event_name, phase_name

_BINS = 700
# Width of a letter of the largest type, as a share of the left panel.
_LETTER = 0.026


def figure_a(plan: Plan, simulated: bool) -> Shown:
    """Draw the protocol."""
    total_min = plan.duration_ns / 6e10
    with drawing(0.9 + 0.5 * max(3, len(plan.lines)), simulated) as made:
        whole, one = made.panels(2.0, 1)
        _whole(whole, plan)
        words = _one(one, plan)
    phases = ", ".join(
        f"{n} {phase_name(p.name)} {p.duration_ns / 6e10:.3g} min"
        for n, p in enumerate(plan.phases, 1)
    )
    says = (
        f"Left, every pulse of {total_min:.1f} min (if every gate passes at once): {phases}. "
        f"Right, the first pairing at the synapse: {words}."
    )
    title = "The protocol, to scale"
    return Shown("A", title, made.svg(f"Figure A. {title}. {says}"), _key(plan), says)


def _colour(line: PlanLine, paired: list[str]) -> str:
    if line.drives == "pre":
        return FIRST if line.pathway in paired else SECOND
    return INK if line.drives == "post" else QUIET


def _key(plan: Plan) -> tuple[Key, ...]:
    paired = paired_pathways(plan)
    drawn = [_colour(line, paired) for line in plan.lines]
    words = {
        FIRST: "paired pathway",
        SECOND: "other pathway",
        INK: "postsynaptic",
        QUIET: "test step",
    }
    entries = [key("❙", colour, means) for colour, means in words.items() if colour in drawn]
    if any(phase.kind == "induction" for phase in plan.phases):
        entries.append(key("■", BAND, "induction"))
    return tuple(entries)


def _whole(axes: Axes, plan: Plan) -> None:
    paired = paired_pathways(plan)
    total_min = plan.duration_ns / 6e10 or 1.0
    start_min = 0.0
    for number, phase in enumerate(plan.phases, 1):
        end_min = start_min + phase.duration_ns / 6e10
        if phase.kind == "induction":
            shade(axes, start_min, end_min)
        name = f"{number} {phase_name(phase.name)}"
        fits = len(name) * _LETTER < (end_min - start_min) / total_min
        above(axes, (start_min + end_min) / 2, name if fits else str(number))
        axes.axvline(end_min, color=RULE, lw=0.6)
        for row, line in enumerate(plan.lines):
            times = np.array([t.at_ns for t in phase.triggers if t.line == line.name]) / 6e10
            times = start_min + times
            if len(times) > _BINS:
                # As many ticks as can be told apart; the first of each stands for its neighbours.
                place = np.floor(times / total_min * _BINS)
                times = times[np.unique(place, return_index=True)[1]]
            axes.vlines(times, row - 0.32, row + 0.32, color=_colour(line, paired), lw=0.5)
        start_min = end_min
    axes.set_yticks(range(len(plan.lines)), [line.name for line in plan.lines])
    axes.tick_params("y", length=0)
    axes.spines.left.set_visible(False)
    axes.set_ylim(len(plan.lines) - 0.4, -0.6)
    axes.set_xlim(0, total_min)
    axes.set_xlabel("min from the start of the plan")


def _first_pairing(plan: Plan) -> tuple[PlanPhase, PlanPairing] | None:
    for phase in plan.phases:
        for pairing in phase.pairings:
            return phase, pairing
    return None


def _one(axes: Axes, plan: Plan) -> str:
    axes.set_yticks([1, 0], ["pre", "post"])
    axes.tick_params("y", length=0)
    axes.spines.left.set_visible(False)
    axes.set_ylim(-0.6, 1.6)
    ordinate(axes, "one pairing")
    found = _first_pairing(plan)
    if found is None:
        axes.set_xticks([])
        nothing(axes, "no scheduled pairing")
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
        row, colour = (1, FIRST) if drives == "pre" else (0, INK)
        axes.vlines(at_ms - zero, row - 0.35, row + 0.35, color=colour, lw=2)
    for side, row in (("pre", 1), ("post", 0)):
        if not any(drives == side for drives, _ in events):
            axes.text(
                0.5, row, "none", transform=axes.get_yaxis_transform(), color=QUIET, va="center"
            )
    axes.set_xlabel("ms")
    span = max(at for _, at in events) - zero
    axes.set_xlim(-0.1 * span - 1, 1.1 * span + 1)
    dts = [p.target_dt_ns / 1e6 for p in pairing.pairs]
    count = sum(len(p.pairings) for p in plan.phases)
    if not dts:
        return f"one of {count}, without a spike pair"
    if len(dts) == 1:
        axes.annotate(
            f"Δt {dts[0]:+g} ms", (abs(dts[0]) / 2, 0.5), ha="center", va="center", color=QUIET
        )
    shown = ", ".join(f"{dt:+g}" for dt in dts[:4]) + (" …" if len(dts) > 4 else "")
    return (
        f"one of {count}, target Δt {shown} ms from {event_name(plan.pre_reference)} to "
        f"{event_name(plan.post_reference)}"
    )
