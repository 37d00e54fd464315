"""How much timing error it takes to move a forecast by a tenth.

The rule itself is run on shifted, jittered and thinned spikes; draws are seeded, so that the same
plan gives the same answer.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Callable

import numpy as np
import numpy.typing as npt
from msgspec import Struct

from rigctl.plasticity import rule
from rigctl.protocol.audit_pairs import reach_of
from rigctl.protocol.plan import RuleChoice
from rigctl.protocol.planned import PlannedSpike

FARTHEST_MS = 20.0
_SHARE = 0.1
# So many spikes are run in all for one value of jitter or misses: few spikes, many draws.
_SPIKES_DRAWN = 8_000
_DRAWS = (8, 400)
_GRID_MS = 0.25
_MOST_SPIKES = 4_000
_NEAR_NS = 400_000_000

Floats = npt.NDArray[np.float64]


class Sensitivity(Struct, frozen=True):
    """What moves the forecast by 10 % of itself; None: not within ± 20 ms, or not within 50 %.

    ``cut_to`` is the number of spikes used where the plan has too many to run all of them.
    """

    constant_later_ms: float | None
    constant_earlier_ms: float | None
    jitter_sd_ms: float | None
    miss_pct: float | None
    cut_to: int | None


def sensitivity(choice: RuleChoice, spikes: list[PlannedSpike], pathway: str) -> Sensitivity | None:
    """Return the sensitivity of a pathway's forecast, or None where there is no forecast."""
    post = np.array([s.at_ns for s in spikes if s.side == "post"], dtype=np.float64)
    pre_all = np.array(
        [s.at_ns for s in spikes if s.side == "pre" and s.pathway == pathway], dtype=np.float64
    )
    pre = _near(pre_all, post, max(_NEAR_NS, 2 * reach_of((choice,))))
    cut_to = None
    if len(pre) + len(post) > _MOST_SPIKES:
        cut_to = _MOST_SPIKES
        end = np.sort(np.concatenate([pre, post]))[_MOST_SPIKES]
        pre, post = pre[pre < end], post[post < end]

    def change(shift_ns: Floats | float, keep: npt.NDArray[np.bool_] | None = None) -> float:
        told = post + shift_ns
        return change_of(choice, pre, told if keep is None else told[keep])

    base = change(0.0)
    if base == 0 or not len(post):
        return None

    def moved(value: float) -> bool:
        return abs(value - base) >= _SHARE * abs(base) * (1 - 1e-9)

    rng = np.random.default_rng(0)
    draws = min(max(_SPIKES_DRAWN // (len(pre) + len(post)), _DRAWS[0]), _DRAWS[1])
    noise = rng.standard_normal((draws, len(post)))
    chance = rng.random((draws, len(post)))

    def jittered(sd_ms: float) -> float:
        return float(np.mean([change(row * sd_ms * 1e6) for row in noise]))

    def thinned(pct: float) -> float:
        return float(np.mean([change(0.0, row * 100 >= pct) for row in chance]))

    return Sensitivity(
        _first(lambda ms: moved(change(ms * 1e6)), FARTHEST_MS, _GRID_MS),
        _first(lambda ms: moved(change(-ms * 1e6)), FARTHEST_MS, _GRID_MS),
        _first(lambda ms: moved(jittered(ms)), FARTHEST_MS, 1.0),
        _first(lambda pct: moved(thinned(pct)), 50.0, 2.5),
        cut_to,
    )


def _near(pre: Floats, post: Floats, near_ns: int) -> Floats:
    """Keep the pre events that any post spike is near to: the others change nothing."""
    times = post.tolist()

    def near(at_ns: float) -> bool:
        n = bisect_left(times, at_ns - near_ns)
        return n < len(times) and times[n] <= at_ns + near_ns

    return pre[[near(t) for t in pre.tolist()]] if len(pre) else pre


def change_of(choice: RuleChoice, pre: Floats, post: Floats) -> float:
    """Return what a rule makes of one pathway's pre events and the cell's post spikes.

    Parameters
    ----------
    choice : RuleChoice
    pre, post : ndarray of float, shape (n,) and (m,)
        ns, in any order.
    """
    made = rule(choice.rule, **choice.parameters)
    times = np.concatenate([pre, post])
    is_post = np.arange(len(times)) >= len(pre)
    order = np.argsort(times, kind="stable")
    for at_s, post_side in zip((times[order] / 1e9).tolist(), is_post[order].tolist(), strict=True):
        (made.post if post_side else made.pre)(at_s)
    return made.change


def _first(moves: Callable[[float], bool], most: float, grid: float) -> float | None:
    """Return the least value that moves the forecast: a walk along the grid, then halving."""
    value = grid
    while value <= most + 1e-12:
        if moves(value):
            low, high = value - grid, value
            for _ in range(10):
                middle = (low + high) / 2
                low, high = (low, middle) if moves(middle) else (middle, high)
            return high
        value += grid
    return None
