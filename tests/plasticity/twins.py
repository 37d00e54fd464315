"""Naive twins of the rules: double sums and step-by-step loops, kept only to test the fast path."""

from __future__ import annotations

import math
from collections.abc import Callable

Spike = tuple[float, str]


def pairs_all(pre: list[float], post: list[float]) -> list[tuple[float, float]]:
    """Every pre with every post, but not simultaneous ones."""
    return [(i, j) for i in pre for j in post if i != j]


def pairs_symmetric(pre: list[float], post: list[float]) -> list[tuple[float, float]]:
    """Each spike with the last one, strictly before it, of the other train."""
    found = []
    for j in post:
        before = [i for i in pre if i < j]
        if before:
            found.append((max(before), j))
    for i in pre:
        before = [j for j in post if j < i]
        if before:
            found.append((i, max(before)))
    return found


def pairs_presynaptic(pre: list[float], post: list[float]) -> list[tuple[float, float]]:
    """Each pre with the last post before it and the next post after it."""
    found = []
    for i in pre:
        before = [j for j in post if j < i]
        after = [j for j in post if j > i]
        if before:
            found.append((i, max(before)))
        if after:
            found.append((i, min(after)))
    return found


def additive(
    pairs: list[tuple[float, float]],
    a_plus: float,
    a_minus: float,
    tau_plus: float,
    tau_minus: float,
) -> float:
    """Sum of all pairs' contributions."""
    parts = []
    for pre, post in pairs:
        dt = post - pre
        if dt > 0:
            parts.append(a_plus * math.exp(-dt / tau_plus))
        else:
            parts.append(-a_minus * math.exp(dt / tau_minus))
    return math.fsum(parts)


def stepwise(
    pre: list[float],
    post: list[float],
    up: Callable[[float, float], float],
    down: Callable[[float, float], float],
    taus: tuple[float, float],
    bounds: tuple[float, float],
    w: float,
) -> float:
    """All pairs, weight-dependent: at each spike the whole history of the other train is summed."""
    spikes = sorted([(t, "pre") for t in pre] + [(t, "post") for t in post])
    for at, side in spikes:
        if side == "pre":
            trace = math.fsum(math.exp(-(at - t) / taus[1]) for t in post if t < at)
            w = max(down(w, trace), bounds[0]) if trace else w
        else:
            trace = math.fsum(math.exp(-(at - t) / taus[0]) for t in pre if t < at)
            w = min(up(w, trace), bounds[1]) if trace else w
    return w
