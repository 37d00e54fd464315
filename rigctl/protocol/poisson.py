"""Poisson trains with a dead time and a share of events tied together at a lag."""

from __future__ import annotations

from bisect import bisect_left

import numpy as np

from rigctl.errors import InputError
from rigctl.protocol.patterns import to_ns
from rigctl.protocol.schema import Poisson


def trains(
    block: Poisson, seed: int, stream: int, where: str, path: str
) -> tuple[list[int], list[int], list[tuple[int, int]]]:
    """Draw the two trains of a block.

    Returns
    -------
    pre_ns, post_ns : list of int
        Reference events from the block's zero, rising. Intervals within a train are a dead time
        plus an exponential, so the mean rate is the stated one. Post events that are not shared
        and would fall within the dead time of another are left out, so the post rate is a little
        lower than stated.
    shared : list of (int, int)
        Indices (pre, post) of the events tied together.
    """
    rng = np.random.default_rng([seed, stream])
    dead_ns = to_ns(block.dead_time_ms)
    end_ns = round(block.duration_s * 1e9)
    pre = _train(rng, block.pre_rate_hz, dead_ns, end_ns)
    lag_ns = to_ns(block.shared_dt_ms or 0.0)
    tied = [t for t in pre if rng.random() < block.shared_fraction and t + lag_ns > 0]
    shared_hz = block.pre_rate_hz * block.shared_fraction
    free_hz = block.post_rate_hz - shared_hz
    if free_hz < 0:
        raise InputError.at(
            where,
            f"{path}.post_rate_hz",
            block.post_rate_hz,
            f"the shared events alone make {shared_hz:g} Hz: that or more is needed",
        )
    post = [t + lag_ns for t in tied]
    if free_hz > 0:
        for at_ns in _train(rng, free_hz, dead_ns, end_ns):
            n = bisect_left(post, at_ns)
            clear_before = n == 0 or at_ns - post[n - 1] >= dead_ns
            clear_after = n == len(post) or post[n] - at_ns >= dead_ns
            if clear_before and clear_after:
                post.insert(n, at_ns)
    pre_at = {t: n for n, t in enumerate(pre)}
    post_at = {t: n for n, t in enumerate(post)}
    return pre, post, [(pre_at[t], post_at[t + lag_ns]) for t in tied]


def _train(rng: np.random.Generator, rate_hz: float, dead_ns: int, end_ns: int) -> list[int]:
    mean_ns = 1e9 / rate_hz - dead_ns
    times: list[int] = []
    at_ns = 0
    while True:
        for gap in rng.exponential(max(mean_ns, 1.0), 256):
            at_ns += dead_ns + round(float(gap))
            if at_ns >= end_ns:
                return times
            times.append(at_ns)
