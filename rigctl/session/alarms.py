"""What the experimenter must be told while it can still be helped. Each alarm comes once."""

from __future__ import annotations

from collections import deque
from statistics import median

from rigctl.protocol.plan import Plan, PlanPhase
from rigctl.session.ledger import JudgedPairing

_RECENT = 5
_MISSES_ALLOWED = 0.05
_MISSES_FROM = 20

Alarm = tuple[str, str]


class AlarmBook:
    """Watches the ledger and remembers which alarms have been raised."""

    def __init__(self, plan: Plan) -> None:
        self._plan = plan
        self._raised: set[str] = set()
        self._recent_ns: deque[int] = deque(maxlen=_RECENT)
        self._judged = 0
        self._missed = 0
        self._break_in_ns: int | None = None

    def _once(self, name: str, text: str) -> Alarm | None:
        if name in self._raised:
            return None
        self._raised.add(name)
        return name, text

    def phase_begins(self, phase: PlanPhase, start_ns: int) -> Alarm | None:
        """Start the washout clock with the first phase; check an induction against it."""
        washout = self._plan.washout
        if self._break_in_ns is None:
            self._break_in_ns = start_ns - (washout.get("before_plan_ns") or 0)
        limit_ns = washout.get("start_by_ns")
        since_ns = start_ns - self._break_in_ns
        if phase.kind == "induction" and limit_ns is not None and since_ns > limit_ns:
            return self._once(
                "washout",
                f"the induction starts {since_ns / 6e10:.1f} min after break-in; "
                f"the rig file allows {limit_ns / 6e10:g} min",
            )
        return None

    def trigger_lost(self, fate: str, line: str, why: str) -> Alarm | None:
        """Report the first trigger of each kind that did not fire."""
        return self._once(f"{fate}:{line}", f"a trigger on {line} did not fire: {fate} ({why})")

    def link_fault(self, what: str) -> Alarm | None:
        """Report the first of each kind of fault that the link mended."""
        return self._once(f"link:{what}", f"the link had to mend itself: {what}")

    def pairing_judged(self, pairing: int, judged: JudgedPairing) -> list[Alarm]:
        """Watch misses and Δt off target."""
        alarms: list[Alarm | None] = []
        self._judged += 1
        if judged.fate in ("no_pre", "no_post"):
            self._missed += 1
        if self._judged >= _MISSES_FROM and self._missed > _MISSES_ALLOWED * self._judged:
            alarms.append(
                self._once(
                    "misses",
                    f"{self._missed} of {self._judged} pairings missed a spike by pairing "
                    f"{pairing}: more than {_MISSES_ALLOWED:.0%}",
                )
            )
        if judged.errors_ns:
            self._recent_ns.extend(judged.errors_ns)
            middle_ns = median(self._recent_ns)
            if len(self._recent_ns) == _RECENT and abs(middle_ns) > self._plan.on_target_within_ns:
                alarms.append(
                    self._once(
                        "off_target",
                        f"the last {_RECENT} Δt were off target by {middle_ns / 1e6:+.2f} ms "
                        f"(median) at pairing {pairing}; "
                        f"± {self._plan.on_target_within_ns / 1e6:g} ms is on target",
                    )
                )
        return [a for a in alarms if a is not None]
