"""The stable gate fails only what is both large and clear."""

from __future__ import annotations

import numpy as np
import pytest

from rigctl.session.gates import evaluate_stable, trend_pct
from tests.conftest import SHORT, make_plan

PLAN = make_plan(SHORT.replace('title = "short"', 'title = "s"\ngates = { min_sweeps = 12 }'))


def test_a_straight_line_has_its_own_trend_and_no_interval() -> None:
    change, half = trend_pct([90 + n for n in range(21)], 95)
    assert change == pytest.approx(20.0)
    assert half == pytest.approx(0, abs=1e-9)


def _rates(drift_pct: float, cv: float, sweeps: int = 36, cells: int = 400) -> dict[str, float]:
    rng = np.random.default_rng(1)
    line = np.linspace(-0.5, 0.5, sweeps) * drift_pct / 100
    found: dict[str, float] = {"pass": 0, "undecidable": 0, "fail": 0}
    for _ in range(cells):
        values = (1 + line + cv * rng.standard_normal(sweeps)).tolist()
        found[evaluate_stable(PLAN, {"s1": values}).verdict] += 1 / cells
    return found


def test_a_drift_free_cell_is_failed_no_more_often_than_stated() -> None:
    # 36 sweeps at a CV of 0.2: without the interval more than a third would fail.
    assert _rates(0, 0.2)["fail"] <= 0.05 + 3 * (0.05 * 0.95 / 400) ** 0.5


def test_a_large_clear_drift_fails_and_a_small_clear_one_passes() -> None:
    assert _rates(30, 0.05)["fail"] > 0.95
    assert _rates(2, 0.02)["pass"] > 0.95


def test_what_the_sweeps_cannot_tell_is_undecidable() -> None:
    assert _rates(0, 0.2)["undecidable"] > 0.5


@pytest.mark.parametrize(
    ("responses", "words"),
    [({}, "no response was measured"), ({"s1": [1.0] * 5}, "12 are needed"),
     ({"s1": [0.0] * 20}, "no response at all")],
)  # fmt: skip
def test_it_refuses_what_it_cannot_see(responses: dict[str, list[float]], words: str) -> None:
    verdict = evaluate_stable(PLAN, responses)
    assert (verdict.verdict, words in verdict.text) == ("fail", True)


def test_the_worst_pathway_counts() -> None:
    steady = [1.0, 1.01] * 12
    falling = list(np.linspace(2, 1, 24))
    assert evaluate_stable(PLAN, {"s1": steady}).verdict == "pass"
    assert evaluate_stable(PLAN, {"s1": steady, "s2": falling}).verdict == "fail"
