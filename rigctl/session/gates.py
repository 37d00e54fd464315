"""The start gate ``stable``: a frozen rule on the responses of the phase before.

Over a few dozen sweeps a drift-free cell often shows a large end-to-end change by chance, so the
gate fails a cell only when the trend's interval excludes zero *and* its size is over the limit.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from statistics import NormalDist
from typing import Literal, NamedTuple

from rigctl.protocol.plan import Plan


class Verdict(NamedTuple):
    """What a gate decided, and the numbers behind it in words."""

    verdict: Literal["pass", "fail", "undecidable"]
    text: str


def trend_pct(values: Sequence[float], interval_pct: float) -> tuple[float, float]:
    """Return the end-to-end change of a straight line through ``values``, and its half interval.

    Both in % of the values' mean. Least squares over the sweep number; the interval is normal,
    with residual variance on n − 2 degrees of freedom.
    """
    n = len(values)
    mean = sum(values) / n
    mid = (n - 1) / 2
    spread = sum((i - mid) ** 2 for i in range(n))
    slope = sum((i - mid) * (v - mean) for i, v in enumerate(values)) / spread
    rest = sum((v - mean - slope * (i - mid)) ** 2 for i, v in enumerate(values))
    error = (rest / (n - 2) / spread) ** 0.5
    z = NormalDist().inv_cdf(0.5 + interval_pct / 200)
    scale = 100 * (n - 1) / abs(mean)
    return slope * scale, z * error * scale


def evaluate_stable(plan: Plan, responses: Mapping[str, Sequence[float]]) -> Verdict:
    """Judge the last phase's responses, pathway by pathway; the worst verdict counts."""
    if not responses:
        return Verdict("fail", "gate stable: no response was measured, so it refuses")
    worst = Verdict("pass", "")
    texts = []
    for pathway, values in sorted(responses.items()):
        if len(values) < max(plan.gate_min_sweeps, 3):
            verdict = Verdict(
                "fail",
                f"{pathway}: {len(values)} responses, {plan.gate_min_sweeps} are needed",
            )
        elif sum(values) == 0:
            verdict = Verdict("fail", f"{pathway}: no response at all")
        else:
            change, half = trend_pct(values, plan.gate_interval_pct)
            numbers = (
                f"{pathway}: trend {change:+.1f} % "
                f"[{change - half:+.1f}, {change + half:+.1f}] over {len(values)} sweeps, "
                f"limit {plan.gate_max_trend_pct:g} %"
            )
            over = abs(change) > plan.gate_max_trend_pct
            if over and abs(change) > half:
                verdict = Verdict("fail", numbers)
            elif abs(change) + half > plan.gate_max_trend_pct:
                verdict = Verdict("undecidable", numbers)
            else:
                verdict = Verdict("pass", numbers)
        texts.append(verdict.text)
        order = ("pass", "undecidable", "fail")
        if order.index(verdict.verdict) > order.index(worst.verdict):
            worst = verdict
    return Verdict(worst.verdict, "gate stable: " + "; ".join(texts))
