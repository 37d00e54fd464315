"""What a reviewer would ask for and neither file says."""

from __future__ import annotations

from rigctl.protocol.plan import Plan, PlanLine
from rigctl.protocol.rig import Rig, Stimulus

_FEW = 10


def not_stated(plan: Plan, rig: Rig) -> list[str]:
    """Return what is not stated, as phrases, each with the key to add.

    Parameters
    ----------
    plan : Plan
    rig : Rig
        The rig that it was compiled with.
    """
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
    missing += _washout(rig)
    for line in plan.lines:
        missing += _latency(line)
    for line in plan.lines:
        name = rig.outputs[line.name].stimulus
        if name is None:
            missing.append(f"what {line.name} delivers (output.{line.name}.stimulus)")
        else:
            missing += _stimulus(name, rig.stimuli[name], rig)
    return list(dict.fromkeys(missing))


def _washout(rig: Rig) -> list[str]:
    own = rig.washout
    if own.start_by_min is not None or own.end_by_min is not None:
        return []
    if rig.access == "ruptured":
        return [
            "washout clock (washout.start_by_min, washout.end_by_min): the usual one of a ruptured "
            "patch is taken, common practice, no source"
        ]
    if rig.access in ("perforated", "sharp"):
        return [f"washout clock (washout.end_by_min): none is kept with {rig.access} access"]
    return []


def _latency(line: PlanLine) -> list[str]:
    if line.reference == "trigger":
        return []
    missing = []
    if line.latency_n < _FEW:
        missing.append(
            f"latency of {line.name} with n of {_FEW} or more (it says {line.latency_n})"
        )
    if line.latency_sd_ns == 0:
        missing.append(f"SD of the latency of {line.name}")
    return missing


def _stimulus(name: str, stimulus: Stimulus, rig: Rig) -> list[str]:
    missing = []
    if stimulus.kind in ("current_pulse", "field"):
        if stimulus.amplitude_ua is None:
            missing.append(f"amplitude of {name} (stimulus.{name}.amplitude_ua)")
        if stimulus.electrode is None:
            missing.append(f"electrode of {name} (stimulus.{name}.electrode)")
        else:
            electrode = rig.electrodes.get(stimulus.electrode)
            if electrode is None or (electrode.diameter_um is None and electrode.area_um2 is None):
                missing.append(f"diameter or area of the electrode {stimulus.electrode}")
            if electrode is None or electrode.material == "other":
                missing.append(f"material of the electrode {stimulus.electrode}")
        if stimulus.balanced is None:
            missing.append(f"charge balance of {name} (stimulus.{name}.balanced)")
    elif stimulus.kind == "current_clamp" and stimulus.amplitude_pa is None:
        missing.append(f"amplitude of {name} (stimulus.{name}.amplitude_pa)")
    elif stimulus.kind == "light":
        if stimulus.power_mw is None:
            missing.append(f"power of {name} (stimulus.{name}.power_mw)")
        if stimulus.spot_diameter_um is None:
            missing.append(f"spot of {name} (stimulus.{name}.spot_diameter_um)")
    return missing
