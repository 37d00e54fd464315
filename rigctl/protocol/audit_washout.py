"""The washout budget: what goes on in each minute after break-in, and whether it is late."""

from __future__ import annotations

from msgspec import Struct

from rigctl.protocol.plan import Plan

_MIN = 60_000_000_000


class WashoutMinute(Struct, frozen=True):
    """One minute after break-in: what goes on, and whether it is late.

    ``flag`` is ``"late"`` from the warning on, ``"over"`` past the end, else empty.
    """

    minute: int
    what: str
    inducing: bool
    flag: str


def washout_minutes(plan: Plan) -> list[WashoutMinute]:
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
    warn_ns, end_by_ns = clock.get("warn_at_ns"), clock.get("end_by_ns")
    minutes = []
    for minute in range(-(-end_ns // _MIN)):
        from_ns, to_ns = minute * _MIN, (minute + 1) * _MIN
        here = [s for s in stretches if s[2] < to_ns and s[3] > from_ns]
        # The last moment of induction within this minute; a minute may outlast its induction.
        until_ns = max((min(s[3], to_ns) for s in here if s in inductions), default=0)
        flag = ""
        if end_by_ns is not None and until_ns > end_by_ns:
            flag = "over"
        elif warn_ns is not None and until_ns > warn_ns:
            flag = "late"
        what = " → ".join(s[0] for s in here)
        minutes.append(WashoutMinute(minute + 1, what, until_ns > 0, flag))
    return minutes
