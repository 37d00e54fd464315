"""What happens within one pairing: reference events, and which of them belong together."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from msgspec import Struct

from rigctl.errors import InputError
from rigctl.protocol.schema import Pairings, RandomDt, Repeat

_MS = 1_000_000
# A Δt under a microsecond has no order that anybody could measure.
LEAST_DT_NS = 1_000


class Pattern(Struct, frozen=True):
    """Reference events of one pairing, ns from its own zero; ``pairs`` are (pre, post) indices."""

    pre_ns: tuple[int, ...]
    post_ns: tuple[int, ...]
    pairs: tuple[tuple[int, int], ...]


def to_ns(ms: float) -> int:
    """Return milliseconds as integer nanoseconds."""
    return round(ms * _MS)


def pattern_of(block: Pairings, dt_ms: float | None, where: str, path: str) -> Pattern:
    """Return the pattern of a block; ``dt_ms`` stands in for a Δt drawn or given by an arm."""
    pairs: tuple[tuple[int, int], ...] | None = None
    if block.spike_pairs is not None:
        pairs = tuple((i - 1, j - 1) for i, j in block.spike_pairs)
    if block.pre_at_ms is not None and block.post_at_ms is not None:
        pre = [to_ns(t) for t in block.pre_at_ms]
        post = [to_ns(t) for t in block.post_at_ms]
    else:
        assert dt_ms is not None
        pre = _train(0.0, block.pre_count, block.pre_rate_hz)
        post = _train(dt_ms, block.post_count, block.post_rate_hz)
    if pairs is None:
        pairs = _usual_pairs(len(pre), len(post), where, path)
    else:
        for i, j in pairs:
            if not (0 <= i < len(pre) and 0 <= j < len(post)):
                raise InputError.at(
                    where,
                    f"{path}.spike_pairs",
                    [i + 1, j + 1],
                    f"[pre 1..{len(pre)}, post 1..{len(post)}] is needed",
                )
    if block.deliver == "pre":
        post, pairs = [], ()
    elif block.deliver == "post":
        pre, pairs = [], ()
    pattern = Pattern(tuple(pre), tuple(post), pairs)
    for repeat in block.repeat:
        pattern = _repeated(pattern, repeat)
    return pattern


def check_order(pattern: Pattern, raw_ns: int, where: str, path: str) -> None:
    """Refuse a spike pair whose Δt, ``raw_ns`` added, is too small to have a sign."""
    for i, j in pattern.pairs:
        if abs(pattern.post_ns[j] - pattern.pre_ns[i] + raw_ns) < LEAST_DT_NS:
            raise InputError(
                f"{where}: {path}: pre event {i + 1} and post event {j + 1} of a pairing are a "
                "spike pair with Δt = 0, which has no order: move one of them, or say in "
                "spike_pairs which events belong together."
            )


def _train(first_ms: float, count: int, rate_hz: float | None) -> list[int]:
    interval_ms = 1000 / rate_hz if rate_hz else 0.0
    return [to_ns(first_ms + n * interval_ms) for n in range(count)]


def _usual_pairs(pre: int, post: int, where: str, path: str) -> tuple[tuple[int, int], ...]:
    """Equal numbers pair one to one; a single event pairs with each of the other side."""
    if pre == post:
        return tuple((n, n) for n in range(pre))
    if pre == 1:
        return tuple((0, n) for n in range(post))
    if post == 1:
        return tuple((n, 0) for n in range(pre))
    if 0 in (pre, post):
        return ()
    raise InputError(
        f"{where}: {path}.spike_pairs: needed, since {pre} pre and {post} post events can be "
        "paired in more than one way."
    )


def _repeated(pattern: Pattern, repeat: Repeat) -> Pattern:
    every_ns = to_ns(repeat.every_ms if repeat.every_ms else 1000 / (repeat.rate_hz or 1))
    pre: list[int] = []
    post: list[int] = []
    pairs: list[tuple[int, int]] = []
    for n in range(repeat.times):
        pairs += [(i + len(pre), j + len(post)) for i, j in pattern.pairs]
        pre += [t + n * every_ns for t in pattern.pre_ns]
        post += [t + n * every_ns for t in pattern.post_ns]
    return Pattern(tuple(pre), tuple(post), tuple(pairs))


def random_dts_ms(random: RandomDt, seed: int, stream: int) -> Iterator[float]:
    """Yield Δt, uniform over the whole microseconds between the bounds without the middle."""
    rng = np.random.default_rng([seed, stream])
    ranges = dt_ranges_us(random)
    total = sum(last - first + 1 for first, last in ranges)
    while True:
        for drawn in rng.integers(0, total, 256).tolist():
            for first, last in ranges:
                if drawn <= last - first:
                    yield (first + drawn) / 1000
                    break
                drawn -= last - first + 1


def dt_ranges_us(random: RandomDt) -> list[tuple[int, int]]:
    """Return the allowed Δt as (first, last) whole us: at most one range on each side of 0."""

    def us(ms: float) -> float:
        return round(ms * 1000, 6)

    low, high = math.ceil(us(random.low_ms)), math.floor(us(random.high_ms))
    gap = max(math.ceil(us(random.min_abs_ms)), LEAST_DT_NS // 1000)
    ranges = [(low, min(-gap, high)), (max(gap, low), high)]
    return [(first, last) for first, last in ranges if first <= last]


def interval_ns(block: Pairings) -> int:
    """Return the time from one pairing to the next (0 for a single one without a rate)."""
    if block.every_s is not None:
        return round(block.every_s * 1e9)
    return round(1e9 / block.rate_hz) if block.rate_hz else 0


def events_per_pairing(block: Pairings) -> int:
    """Return how many triggers one pairing has, without expanding it."""
    pre = len(block.pre_at_ms) if block.pre_at_ms is not None else block.pre_count
    post = len(block.post_at_ms) if block.post_at_ms is not None else block.post_count
    pre, post = pre * (block.deliver != "post"), post * (block.deliver != "pre")
    times = 1
    for repeat in block.repeat:
        times *= repeat.times
    return (pre + post) * times + (1 if block.step else 0)
