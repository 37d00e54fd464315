"""The trend: against another implementation, and against wild values."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from rigctl.report.trend import theil_sen


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("decimals", [6, 1])
def test_equals_the_library_with_and_without_ties(seed: int, decimals: int) -> None:
    rng = np.random.default_rng(seed)
    n = int(rng.integers(5, 120))
    x = np.arange(n, dtype=float) // (1 + seed % 3)
    y = np.round(0.05 * x + rng.normal(0, 0.3, n), decimals)
    found = theil_sen(x, y)
    # scipy's own implementation of Sen 1968 (computed here).
    other = stats.theilslopes(y, x)
    assert found.slope == pytest.approx(other.slope, abs=1e-12)
    assert found.low == pytest.approx(other.low_slope, abs=1e-12)
    assert found.high == pytest.approx(other.high_slope, abs=1e-12)


def test_a_fifth_of_wild_values_neither_makes_nor_hides_a_trend() -> None:
    rng = np.random.default_rng(1)
    x = np.arange(75.0)
    wild = rng.permutation(75)[:15]
    steady, creeping = rng.normal(0, 0.2, 75), 0.04 * x + rng.normal(0, 0.2, 75)
    steady[wild] += 30
    creeping[wild] -= 30
    flat = theil_sen(x, steady)
    assert flat.low < 0 < flat.high
    assert theil_sen(x, creeping).slope == pytest.approx(0.04, abs=0.008)
    assert theil_sen(x, creeping).low > 0


def test_many_points_are_thinned_evenly() -> None:
    x = np.arange(100_000.0)
    assert theil_sen(x, 3 * x).slope == pytest.approx(3)


def test_equal_x_have_no_trend() -> None:
    with pytest.raises(ValueError, match="two different x"):
        theil_sen(np.ones(5), np.arange(5.0))
