"""A trend that a few wild values do not make or hide."""

from __future__ import annotations

from statistics import NormalDist
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]


class Trend(NamedTuple):
    """A slope per unit of x, with its interval."""

    slope: float
    low: float
    high: float


def theil_sen(x: Floats, y: Floats, interval: float = 0.95, most: int = 600) -> Trend:
    """Return the median of all pairwise slopes, with its interval.

    Parameters
    ----------
    x, y : ndarray, shape (n,)
        At least two different ``x``.
    interval : float
        Coverage of the interval, from the normal approximation of Kendall's statistic with ties
        (Sen 1968, J Am Stat Assoc 63:1379; from memory).
    most : int
        Of more points than this, evenly chosen ones are used: the pairs grow with the square.

    Raises
    ------
    ValueError
        All ``x`` are equal.
    """
    if len(x) > most:
        chosen = np.linspace(0, len(x) - 1, most).astype(int)
        x, y = x[chosen], y[chosen]
    first, second = np.triu_indices(len(x), 1)
    run, rise = x[second] - x[first], y[second] - y[first]
    apart = run != 0
    if not apart.any():
        raise ValueError("a trend needs two different x")
    slopes = np.sort(rise[apart] / run[apart])
    n = len(x)
    variance = (_term(np.array([n])) - _term(_repeats(x)) - _term(_repeats(y))) / 18
    reach = NormalDist().inv_cdf(0.5 + interval / 2) * max(variance, 0.0) ** 0.5
    low = max(round((len(slopes) - reach) / 2) - 1, 0)
    high = min(round((len(slopes) + reach) / 2), len(slopes) - 1)
    return Trend(float(np.median(slopes)), float(slopes[low]), float(slopes[high]))


def _repeats(values: Floats) -> npt.NDArray[np.int64]:
    counts: npt.NDArray[np.int64] = np.unique(values, return_counts=True)[1]
    return counts[counts > 1]


def _term(k: npt.NDArray[np.int64]) -> float:
    return float(np.sum(k * (k - 1) * (2 * k + 5)))
