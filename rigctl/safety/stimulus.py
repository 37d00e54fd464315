"""What one pulse delivers, as declared: current, charge, light."""

from __future__ import annotations

import math
from collections.abc import Iterator

from rigctl.protocol.plan import PlanLine
from rigctl.protocol.rig import Electrode, Limits, Rig, Stimulus
from rigctl.safety import charge
from rigctl.safety.verdict import (
    NO_LIMIT,
    PRACTICE,
    RIG,
    USUAL,
    Verdict,
    at_most,
    source_of,
    unstated,
)

# A box knows its own pulse only; a stimulator with a timer of its own delivers something else.
_CHARGE = "Q = I × trigger width"
_DENSITY = "D = Q / area"
_K = "k = log10(Q × D)"


def stimulus_verdicts(
    line: PlanLine, stimulus: Stimulus | None, rig: Rig, per_s: int
) -> Iterator[Verdict]:
    """Yield the verdicts on what a line delivers.

    Parameters
    ----------
    line : PlanLine
    stimulus : Stimulus or None
        None: not stated.
    rig : Rig
    per_s : int
        The most pulses in any second.
    """
    name = line.name
    if stimulus is None:
        yield unstated(
            "stimulus", name, "", "what a pulse delivers", NO_LIMIT,
            f"output.{name}.stimulus is not stated",
        )  # fmt: skip
    elif stimulus.kind in ("current_pulse", "field"):
        yield from _current(line, stimulus, rig)
    elif stimulus.kind == "light":
        yield from _light(line, stimulus, rig.limits, per_s)
    elif stimulus.kind == "sensory":
        yield unstated(
            "stimulus", name, "", "what a pulse delivers", NO_LIMIT,
            "a sensory stimulus: nothing about it is declared that could be checked",
        )  # fmt: skip
    elif stimulus.amplitude_pa is None:
        yield unstated(
            "amplitude", name, "pA", "declared current", NO_LIMIT, "amplitude_pa is not stated"
        )
    else:
        yield Verdict(
            "amplitude", name, stimulus.amplitude_pa, None, "pA", True, "declared current",
            NO_LIMIT, "for information: through the recording pipette",
        )  # fmt: skip


def _current(line: PlanLine, stimulus: Stimulus, rig: Rig) -> Iterator[Verdict]:
    limits, name = rig.limits, line.name
    electrode = rig.electrodes.get(stimulus.electrode) if stimulus.electrode else None
    area_cm2 = None if electrode is None else charge.area_cm2(electrode)
    source = f"slice stimulation 10–500 µA: {PRACTICE}"
    charge_uc = None
    if stimulus.amplitude_ua is None:
        yield unstated(
            "amplitude", name, "uA", "declared current", source, "amplitude_ua is not stated"
        )
    else:
        charge_uc = charge.per_phase_uc(stimulus.amplitude_ua, line.width_ns / 1000)
        yield at_most(
            "amplitude", name, stimulus.amplitude_ua, limits.max_amplitude_ua, "uA",
            "declared current", source_of(limits.max_amplitude_ua, USUAL.max_amplitude_ua, source),
        )  # fmt: skip
    if charge_uc is None or electrode is None or area_cm2 is None:
        missing = ["amplitude_ua"] if charge_uc is None else []
        if area_cm2 is None:
            missing.append("the electrode with its diameter or area")
        note = f"not stated: {' and '.join(missing)}"
        yield unstated("charge density", name, "uC/cm2", _DENSITY, charge.COGAN, note)
        yield unstated("k", name, "", _K, charge.SHANNON, note)
    else:
        yield _density(name, charge.density_uc_cm2(charge_uc, area_cm2), electrode, limits)
        yield at_most(
            "k", name, charge.shannon_k(charge_uc, area_cm2), limits.max_k, "", _K,
            source_of(limits.max_k, USUAL.max_k, charge.SHANNON),
        )  # fmt: skip
    yield _per_phase(name, charge_uc, electrode, area_cm2, limits)
    yield _balance(name, stimulus)


def _density(name: str, density: float, electrode: Electrode, limits: Limits) -> Verdict:
    limit, source = charge.density_limit(electrode.material)
    own = limits.max_density_uc_cm2
    if own is not None:
        source = f"{RIG}; {source}" if limit is None else source_of(own, limit, source)
        limit = own
    if limit is None:
        return Verdict(
            "charge density", name, density, None, "uC/cm2", None, _DENSITY, source,
            "not stated: a limit for this material (limits.max_density_uc_cm2)",
        )  # fmt: skip
    return at_most("charge density", name, density, limit, "uC/cm2", _DENSITY, source)


def _per_phase(
    name: str,
    charge_uc: float | None,
    electrode: Electrode | None,
    area_cm2: float | None,
    limits: Limits,
) -> Verdict:
    check, unit = "charge per phase", "nC"
    if charge_uc is None:
        return unstated(check, name, unit, _CHARGE, charge.MICRO, "not stated: amplitude_ua")
    micro = None if electrode is None else electrode.micro
    if micro is None and area_cm2 is not None:
        micro = area_cm2 * 1e8 <= charge.MICRO_AREA_UM2 * (1 + 1e-9)
    if micro is None:
        note = "not stated: whether this is a microelectrode (its area, or electrode.micro)"
        return Verdict(check, name, charge_uc * 1000, None, unit, None, _CHARGE, charge.MICRO, note)
    if not micro:
        note = "for information: not a microelectrode"
        return Verdict(check, name, charge_uc * 1000, None, unit, True, _CHARGE, charge.MICRO, note)
    most = limits.max_micro_charge_nc
    return at_most(
        check, name, charge_uc * 1000, most, unit, _CHARGE,
        source_of(most, USUAL.max_micro_charge_nc, charge.MICRO),
        "microelectrodes do not follow k",
    )  # fmt: skip


def _balance(name: str, stimulus: Stimulus) -> Verdict:
    balanced = stimulus.balanced
    if balanced is None:
        note = f"{stimulus.polarity}, and balanced is not stated"
    elif balanced:
        note = "declared balanced"
    else:
        note = "declared unbalanced: every pulse leaves charge behind"
    return Verdict(
        "charge balance", name, None, None, "", balanced, "net charge per pulse is zero",
        "Merrill et al. 2005, J Neurosci Meth 141:171, from memory", note,
    )  # fmt: skip


def _light(line: PlanLine, stimulus: Stimulus, limits: Limits, per_s: int) -> Iterator[Verdict]:
    name = line.name
    duty = per_s * line.width_ns / 1e9
    yield at_most(
        "light duty", name, duty, limits.max_light_duty, "", "rate × width",
        source_of(limits.max_light_duty, USUAL.max_light_duty),
    )  # fmt: skip
    # Heating goes by the mean power over the worst second; the larger published factor is taken.
    formula = "0.25 °C per mW × power × duty"
    source = (
        "factor 0.1–0.25 °C per mW near the fibre, and heating alone changes firing: Owen, Liu & "
        "Kreitzer 2019, read in the paper; limit: "
        + source_of(limits.max_light_heat_c, USUAL.max_light_heat_c)
    )
    if stimulus.power_mw is None:
        yield unstated("light heating", name, "°C", formula, source, "power_mw is not stated")
    else:
        heat_c = charge.HEAT_C_PER_MW * stimulus.power_mw * duty
        yield at_most("light heating", name, heat_c, limits.max_light_heat_c, "°C", formula, source)
    formula = "power / spot area"
    source = source_of(
        limits.max_light_mw_mm2,
        USUAL.max_light_mw_mm2,
        "1–10 mW/mm2 typical, from memory",
    )
    missing = [
        key
        for key, value in (
            ("power_mw", stimulus.power_mw),
            ("spot_diameter_um", stimulus.spot_diameter_um),
        )
        if value is None
    ]
    if stimulus.power_mw is None or stimulus.spot_diameter_um is None:
        note = f"not stated: {' and '.join(missing)}"
        yield unstated("light density", name, "mW/mm2", formula, source, note)
        return
    density = stimulus.power_mw / (math.pi * (stimulus.spot_diameter_um / 2000) ** 2)
    yield at_most(
        "light density", name, density, limits.max_light_mw_mm2, "mW/mm2", formula, source
    )
