"""The clock that starts at break-in: dialysis of the cell limits when an induction may be."""

from __future__ import annotations

from rigctl.errors import InputError
from rigctl.protocol.plan import PlanPhase
from rigctl.protocol.rig import Rig

_MIN = 60_000_000_000

# Minutes after break-in: induction starts by, ends by, warning from (common practice, no source).
_BY_ACCESS: dict[str, tuple[float | None, float | None, float | None]] = {
    "ruptured": (8.0, 15.0, 12.0),
    "perforated": (None, None, None),
    "sharp": (None, None, None),
    "in_vivo": (None, None, None),
    "extracellular": (None, None, None),
}


def washout_of(rig: Rig) -> dict[str, int | None]:
    """Return the rig's washout clock in ns; what the rig file leaves open comes by access."""
    start_by, end_by, warn_at = _BY_ACCESS[rig.access]
    own = rig.washout

    def ns(value: float | None, usual: float | None) -> int | None:
        minutes = value if value is not None else usual
        return None if minutes is None else round(minutes * _MIN)

    return {
        "before_plan_ns": round(own.before_plan_min * _MIN),
        "start_by_ns": ns(own.start_by_min, start_by),
        "end_by_ns": ns(own.end_by_min, end_by),
        "warn_at_ns": ns(own.warn_at_min, warn_at),
    }


def check_washout(
    phases: tuple[PlanPhase, ...], washout: dict[str, int | None], where: str, rig_file: str
) -> None:
    """Refuse a plan whose induction comes too late even if every gate passes at once."""
    at_ns = washout["before_plan_ns"] or 0
    for phase in phases:
        end_ns = at_ns + phase.duration_ns
        if phase.kind == "induction":
            for key, moment_ns, word in (
                ("start_by", at_ns, "starts"),
                ("end_by", end_ns, "ends"),
            ):
                limit_ns = washout[f"{key}_ns"]
                if limit_ns is not None and moment_ns > limit_ns:
                    raise InputError(
                        f"{where}: phase[{phase.index + 1}]: the induction {word} "
                        f"{moment_ns / _MIN:.2f} min after break-in; {rig_file} allows "
                        f"{limit_ns / _MIN:g} min (washout.{key}_min): shorten what comes before, "
                        "or use an access without that clock."
                    )
        at_ns = end_ns
