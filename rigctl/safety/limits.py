"""Stimulation limits: each verdict says value, limit, formula and source.

The checks are separate; none implies another, and passing all of them is no permission. What comes
from amplitude holds for *declared* values: a box switches digital lines and cannot read a dial.
"""

from __future__ import annotations

from rigctl.errors import Refused
from rigctl.protocol.plan import Plan
from rigctl.protocol.rig import Rig
from rigctl.safety.stimulus import stimulus_verdicts
from rigctl.safety.timing import load_of, timing
from rigctl.safety.verdict import USUAL, Verdict, at_most, shown, source_of

__all__ = ["PASSING_IS_NO_PERMISSION", "Verdict", "refuse", "verdicts"]

PASSING_IS_NO_PERMISSION = (
    "Passing these checks is no permission. What may be delivered is decided by your animal-care "
    "approval and your local rules (in the EU Directive 2010/63/EU; the Guide for the Care and Use "
    "of Laboratory Animals, 8th ed.; report by ARRIVE 2.0), electrical safety by IEC 61010-1 and "
    "light by IEC 60825-1, all of them in the hands of licensed people. This program is never for "
    "use on people."
)


def verdicts(plan: Plan, rig: Rig) -> list[Verdict]:
    """Check every line that the plan uses.

    Parameters
    ----------
    plan : Plan
    rig : Rig
        The rig that the plan was compiled with.

    Returns
    -------
    list of Verdict
        In the order of lines, then of checks.
    """
    found: list[Verdict] = []
    for line in plan.lines:
        load = load_of(plan, line)
        found += timing(line, load, rig.limits)
        output = rig.outputs[line.name]
        stimulus = rig.stimuli.get(output.stimulus) if output.stimulus else None
        found += stimulus_verdicts(line, stimulus, rig, load.per_s)
    total = sum(len(p.triggers) for p in plan.phases)
    total += sum(p.rule.max_pairings for p in plan.phases if p.rule is not None)
    most = rig.limits.max_pulses
    found.append(
        at_most(
            "count", "all lines", total, most, "pulses", "pulses in the plan",
            source_of(most, USUAL.max_pulses),
        )
    )  # fmt: skip
    return found


def refuse(found: list[Verdict]) -> None:
    """Raise :class:`rigctl.errors.Refused` when any verdict is over its limit."""
    over = [v for v in found if v.ok is False]
    if not over:
        return
    first = over[0]
    more = f" ({len(over) - 1} more)" if len(over) > 1 else ""
    if first.value is None or first.limit is None:
        what = f"{first.name} of {first.line}: {first.note}"
    else:
        what = (
            f"{first.name} of {first.line} is {shown(first.value, first.unit)}, the limit is "
            f"{shown(first.limit, first.unit)}"
        )
    raise Refused(f"refused: {what} ({first.formula}; {first.source}){more}. Nothing runs.")
