"""Stimulation limits: each verdict says value, limit, formula and source.

The checks are separate; none implies another, and passing all of them is no permission. What comes
from amplitude holds for *declared* values: a box switches digital lines and cannot read a dial.
"""

from __future__ import annotations

import itertools
import math
from bisect import bisect_right
from collections.abc import Iterator

from msgspec import Struct

from rigctl.errors import Refused
from rigctl.protocol.plan import Plan, PlanLine
from rigctl.protocol.rig import Electrode, Limits, Rig, Stimulus
from rigctl.safety import charge

PASSING_IS_NO_PERMISSION = (
    "Passing these checks is no permission. What may be delivered is decided by your animal-care "
    "approval and your local rules (in the EU Directive 2010/63/EU; the Guide for the Care and Use "
    "of Laboratory Animals, 8th ed.; report by ARRIVE 2.0), electrical safety by IEC 61010-1 and "
    "light by IEC 60825-1, all of them in the hands of licensed people. This program is never for "
    "use on people."
)
PRACTICE = "common practice, no source"
RIG = "this rig's own limit"


class Verdict(Struct, frozen=True):
    """One check of one line.

    ``value`` is None when it cannot be computed because something is not stated; then ``ok`` is
    None too and ``note`` says what is missing. That is never a pass.
    """

    name: str
    line: str
    value: float | None
    limit: float | None
    unit: str
    ok: bool | None
    formula: str
    source: str
    note: str = ""


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
        trains = _trains(plan, line)
        found += _timing(line, trains, rig.limits)
        output = rig.outputs[line.name]
        stimulus = rig.stimuli.get(output.stimulus) if output.stimulus else None
        found += _stimulus(line, stimulus, rig, trains)
    total = sum(len(p.triggers) for p in plan.phases)
    total += sum(p.rule.max_pairings for p in plan.phases if p.rule is not None)
    found.append(
        _at_most(
            "count", "all lines", total, rig.limits.max_pulses, "pulses", "pulses in the plan", RIG
        )
    )
    return found


def refuse(found: list[Verdict]) -> None:
    """Raise :class:`rigctl.errors.Refused` when any verdict is over its limit."""
    over = [v for v in found if v.ok is False]
    if not over:
        return
    first = over[0]
    more = f" ({len(over) - 1} more)" if len(over) > 1 else ""
    assert first.value is not None
    raise Refused(
        f"refused: {first.name} of {first.line} is {first.value:.4g} {first.unit}, the limit "
        f"{'' if first.limit is None else f'{first.limit:.4g} {first.unit}'} "
        f"({first.formula}; {first.source}){more}. Nothing runs."
    )


def _at_most(
    name: str, line: str, value: float, limit: float, unit: str, formula: str, source: str,
    note: str = "",
) -> Verdict:  # fmt: skip
    # Equal to the limit is allowed; a hair over by rounding is not refused.
    ok = value <= limit or math.isclose(value, limit, rel_tol=1e-9)
    return Verdict(name, line, float(value), float(limit), unit, ok, formula, source, note)


def _at_least(
    name: str, line: str, value: float, limit: float, unit: str, formula: str, source: str
) -> Verdict:
    ok = value >= limit or math.isclose(value, limit, rel_tol=1e-9)
    return Verdict(name, line, float(value), float(limit), unit, ok, formula, source)


def _unstated(name: str, line: str, unit: str, formula: str, source: str, note: str) -> Verdict:
    return Verdict(name, line, None, None, unit, None, formula, source, note)


# --- timing -----------------------------------------------------------------------------------


def _trains(plan: Plan, line: PlanLine) -> list[list[int]]:
    """Return the line's edges, phase by phase (phases are apart), ns.

    A rule on the box is taken at its worst: its shortest interval, for a second.
    """
    trains = []
    for phase in plan.phases:
        times = [t.at_ns for t in phase.triggers if t.line == line.name]
        rule = phase.rule
        if rule is not None and rule.line == line.name:
            least_ns = max(rule.lockout_ns, rule.min_interval_ns)
            n = min(rule.max_pairings, 1_000_000_000 // least_ns + 1)
            times = sorted(times + [k * least_ns for k in range(n)])
        if times:
            trains.append(times)
    return trains


def worst_second(times_ns: list[int]) -> int:
    """Return the largest number of edges in any second (open at its start)."""
    worst = 0
    for n, at_ns in enumerate(times_ns):
        worst = max(worst, n + 1 - bisect_right(times_ns, at_ns - 1_000_000_000, 0, n + 1))
    return worst


def _timing(line: PlanLine, trains: list[list[int]], limits: Limits) -> Iterator[Verdict]:
    name, width_us = line.name, line.width_ns / 1000
    yield _at_most("width", name, width_us, limits.max_width_us, "us", "pulse width", RIG)
    gaps = [b - a for times in trains for a, b in itertools.pairwise(times)]
    if gaps:
        yield _at_least(
            "spacing", name, min(gaps) / 1000, limits.min_spacing_us, "us", "edge to next edge", RIG
        )
    rate = max((worst_second(times) for times in trains), default=0)
    yield _at_most("rate", name, rate, limits.max_rate_hz, "/s", "most pulses in any second", RIG)
    duty = rate * line.width_ns / 1e9
    yield _at_most("duty", name, duty, limits.max_duty, "", "rate × width", RIG)


# --- stimulus ---------------------------------------------------------------------------------


def _stimulus(
    line: PlanLine, stimulus: Stimulus | None, rig: Rig, trains: list[list[int]]
) -> Iterator[Verdict]:
    if line.drives == "step" and stimulus is None:
        return
    if stimulus is None:
        yield _unstated(
            "stimulus", line.name, "", "", RIG, f"output.{line.name}.stimulus is not stated"
        )
    elif stimulus.kind in ("current_pulse", "field"):
        yield from _current(line, stimulus, rig)
    elif stimulus.kind == "light":
        rate = max((worst_second(times) for times in trains), default=0)
        yield from _light(line, stimulus, rig.limits, rate)
    elif stimulus.kind == "current_clamp" and stimulus.amplitude_pa is None:
        yield _unstated("amplitude", line.name, "pA", "", RIG, "amplitude_pa is not stated")


def _current(line: PlanLine, stimulus: Stimulus, rig: Rig) -> Iterator[Verdict]:
    limits, name, width_us = rig.limits, line.name, line.width_ns / 1000
    if stimulus.amplitude_ua is None:
        yield _unstated("amplitude", name, "uA", "", RIG, "amplitude_ua is not stated")
        return
    current_ua = stimulus.amplitude_ua
    yield _at_most(
        "amplitude", name, current_ua, limits.max_amplitude_ua, "uA",
        "declared current", f"slice stimulation 10–500 µA: {PRACTICE}",
    )  # fmt: skip
    charge_uc = charge.per_phase_uc(current_ua, width_us)
    electrode = rig.electrodes.get(stimulus.electrode) if stimulus.electrode else None
    area_cm2 = None if electrode is None else charge.area_cm2(electrode)
    if electrode is None or area_cm2 is None:
        note = "the electrode, with its diameter or area, is not stated"
        for check in ("charge density", "k", "charge per phase"):
            yield _unstated(check, name, "", "", charge.SHANNON, note)
    else:
        yield from _charge(name, charge_uc, area_cm2, electrode, limits)
    yield _balance(name, stimulus, electrode)


def _charge(
    name: str, charge_uc: float, area_cm2: float, electrode: Electrode, limits: Limits
) -> Iterator[Verdict]:
    limit, source = charge.density_limit(electrode.material)
    if limits.max_density_uc_cm2 is not None:
        limit, source = limits.max_density_uc_cm2, RIG
    density = charge.density_uc_cm2(charge_uc, area_cm2)
    formula = "D = I × width / area"
    if limit is None:
        yield Verdict(
            "charge density", name, density, None, "uC/cm2", None, formula, source,
            f"no published limit here for {electrode.material}: set limits.max_density_uc_cm2",
        )  # fmt: skip
    else:
        yield _at_most("charge density", name, density, limit, "uC/cm2", formula, source)
    yield _at_most(
        "k", name, charge.shannon_k(charge_uc, area_cm2), limits.max_k, "",
        "k = log10(Q × D)", charge.SHANNON,
    )  # fmt: skip
    micro = electrode.micro
    if micro is None:
        micro = area_cm2 * 1e8 <= charge.MICRO_AREA_UM2 * (1 + 1e-9)
    if micro:
        yield _at_most(
            "charge per phase", name, charge_uc * 1000, limits.max_micro_charge_nc, "nC",
            "Q = I × width; microelectrodes do not follow k", charge.MICRO,
        )  # fmt: skip
    else:
        yield Verdict(
            "charge per phase", name, charge_uc * 1000, None, "nC", True, "Q = I × width",
            charge.MICRO, "for information: not a microelectrode",
        )  # fmt: skip


def _balance(name: str, stimulus: Stimulus, electrode: Electrode | None) -> Verdict:
    formula, source = "net charge per pulse is zero", "Merrill et al. 2005, from memory"
    balanced = stimulus.balanced
    if balanced is None and stimulus.polarity == "biphasic":
        note = "biphasic, but `balanced` is not stated"
    elif balanced is None:
        note = "monophasic, and `balanced` is not stated"
    else:
        note = "declared balanced" if balanced else "declared unbalanced: net charge each pulse"
    return (
        Verdict("charge balance", name, None, None, "", balanced, formula, source, note)
        if (balanced is not False)
        else Verdict("charge balance", name, 1.0, 0.0, "net", False, formula, source, note)
    )


def _light(line: PlanLine, stimulus: Stimulus, limits: Limits, per_s: int) -> Iterator[Verdict]:
    name = line.name
    if stimulus.power_mw is None:
        yield _unstated("light", name, "mW", "", RIG, "power_mw is not stated")
        return
    duty = per_s * line.width_ns / 1e9
    yield _at_most("light duty", name, duty, limits.max_light_duty, "", "rate × width", RIG)
    # Heating goes by the mean power over the worst second; the larger published factor is taken.
    heat_c = charge.HEAT_C_PER_MW * stimulus.power_mw * duty
    yield _at_most(
        "light heating", name, heat_c, limits.max_light_heat_c, "°C",
        "0.25 °C per mW of mean power near the fibre",
        "0.1–0.25 °C per mW; heating alone changes firing: Owen, Liu & Kreitzer 2019, "
        "read in the paper",
    )  # fmt: skip
    if stimulus.spot_diameter_um is None:
        yield _unstated("light density", name, "mW/mm2", "", RIG, "spot_diameter_um is not stated")
        return
    density = stimulus.power_mw / (math.pi * (stimulus.spot_diameter_um / 2000) ** 2)
    yield _at_most(
        "light density", name, density, limits.max_light_mw_mm2, "mW/mm2", "power / spot area",
        "1–10 mW/mm2 typical, from memory",
    )  # fmt: skip
