"""The pairs at the synapse that nobody asked for: counted by phase, kind and Δt."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
from msgspec import Struct

from rigctl.protocol.plan import Plan, RuleChoice
from rigctl.protocol.planned import PlannedSpike

_REACH_TAUS = 5
_FALLBACK_REACH_NS = 200_000_000
# So many pairs are looked at; a rule of seconds on fast trains would make billions of them.
MOST_PAIRS = 10_000_000
_AT_ONCE = 1_000_000

Ints = npt.NDArray[np.int64]


class UnintendedPair(Struct, frozen=True):
    """One kind of pair that nobody asked for: where, its Δt (to the ms), how often."""

    phase: str
    what: str
    pathway: str
    dt_ms: float
    count: int


def reach_of(choices: tuple[RuleChoice, ...]) -> int:
    """Return how far apart two spikes may be and still matter, ns: five of the longest τ."""
    taus = [
        float(value)
        for choice in choices
        for key, value in choice.parameters.items()
        if key in ("tau_plus_ms", "tau_minus_ms") and value is not None
    ]
    return round(_REACH_TAUS * max(taus) * 1e6) if taus else _FALLBACK_REACH_NS


def pairs_within(pre_ns: Ints, post_ns: Ints, reach_ns: int) -> Iterator[tuple[Ints, Ints]]:
    """Yield the indices of all pairs with ``|post − pre| ≤ reach_ns``, some at a time.

    Parameters
    ----------
    pre_ns, post_ns : ndarray of int64, shape (n,) and (m,)
        Rising.

    Yields
    ------
    pre_index, post_index : ndarray of int64, shape (k,)
    """
    first = np.searchsorted(post_ns, pre_ns - reach_ns, side="left")
    last = np.searchsorted(post_ns, pre_ns + reach_ns, side="right")
    counts = last - first
    done = np.concatenate([[0], np.cumsum(counts)])
    begin = 0
    while begin < len(pre_ns):
        end = max(begin + 1, int(np.searchsorted(done, done[begin] + _AT_ONCE, side="right")) - 1)
        here = counts[begin:end]
        nth = np.arange(int(here.sum())) - np.repeat(done[begin:end] - done[begin], here)
        yield (
            np.repeat(np.arange(begin, end), here),
            np.repeat(first[begin:end], here) + nth,
        )
        begin = end


def reach_within(pre_ns: Ints, post_ns: Ints, reach_ns: int, most: int = MOST_PAIRS) -> int:
    """Return ``reach_ns``, halved until there are no more than ``most`` pairs within it."""
    while reach_ns > 1_000_000:
        first = np.searchsorted(post_ns, pre_ns - reach_ns, side="left")
        last = np.searchsorted(post_ns, pre_ns + reach_ns, side="right")
        if int((last - first).sum()) <= most:
            break
        reach_ns //= 2
    return reach_ns


def unintended(
    plan: Plan, spikes: list[PlannedSpike], reach_ns: int
) -> tuple[list[UnintendedPair], int]:
    """Count the pairs within reach that no pairing intends, test stimuli included.

    Every pathway's pre events are looked at, the unpaired ones' too. Simultaneous spikes do not
    pair.

    Returns
    -------
    pairs : list of UnintendedPair
        The most frequent first; of equally frequent ones the nearest first.
    reach_ns : int
        As asked, or less where there would be too many pairs.
    """
    pres = [s for s in spikes if s.side == "pre"]
    posts = [s for s in spikes if s.side == "post"]
    pre_ns = np.array([s.at_ns for s in pres], dtype=np.int64)
    post_ns = np.array([s.at_ns for s in posts], dtype=np.int64)
    reach_ns = reach_within(pre_ns, post_ns, reach_ns)
    if not len(pres) or not len(posts):
        return [], reach_ns
    pre_id = np.array([s.trigger for s in pres], dtype=np.int64)
    post_id = np.array([s.trigger for s in posts], dtype=np.int64)
    scale = int(max(pre_id.max(), post_id.max())) + 1
    meant = _meant(plan, scale)
    kinds = _kinds(pres)
    kind_of = np.array([kinds.index(k) for k in map(_kind, pres)], dtype=np.int64)
    pre_pairing = np.array([-1 if s.pairing is None else s.pairing for s in pres], dtype=np.int64)
    post_pairing = np.array([-2 if s.pairing is None else s.pairing for s in posts], dtype=np.int64)
    far_ms = reach_ns // 1_000_000 + 1
    found: dict[int, int] = {}
    for i, j in pairs_within(pre_ns, post_ns, reach_ns):
        dt_ns = post_ns[j] - pre_ns[i]
        keep = (dt_ns != 0) & ~np.isin(pre_id[i] * scale + post_id[j], meant)
        i, j, dt_ns = i[keep], j[keep], dt_ns[keep]
        within = (pre_pairing[i] == post_pairing[j]).astype(np.int64)
        dt_ms = np.rint(dt_ns / 1e6).astype(np.int64) + far_ms
        codes, counts = np.unique(
            (kind_of[i] * 2 + within) * (2 * far_ms + 1) + dt_ms, return_counts=True
        )
        for code, count in zip(codes.tolist(), counts.tolist(), strict=True):
            found[code] = found.get(code, 0) + count
    pairs = []
    for code, count in found.items():
        rest, dt_ms_up = divmod(code, 2 * far_ms + 1)
        (phase, pathway, what), is_within = kinds[rest // 2], rest % 2
        pairs.append(
            UnintendedPair(
                plan.phases[phase].name,
                what or ("within a pairing" if is_within else "between pairings"),
                pathway,
                float(dt_ms_up - far_ms),
                count,
            )
        )
    pairs.sort(key=lambda p: (-p.count, abs(p.dt_ms), p.dt_ms, p.phase, p.what))
    return pairs, reach_ns


def _meant(plan: Plan, scale: int) -> Ints:
    """Return the intended pairs, each as one number."""
    return np.array(
        [
            pair.pre_trigger * scale + pair.post_trigger
            for phase in plan.phases
            for pairing in phase.pairings
            for pair in pairing.pairs
        ],
        dtype=np.int64,
    )


def _kind(spike: PlannedSpike) -> tuple[int, str, str]:
    """Return phase, pathway and what the pre event is; empty: part of a pairing."""
    pathway = spike.pathway or ""
    if spike.is_test:
        return spike.phase, pathway, f"test stimulus of {pathway}"
    if spike.pairing is None:
        return spike.phase, pathway, "pre event outside pairings"
    return spike.phase, pathway, ""


def _kinds(pres: list[PlannedSpike]) -> list[tuple[int, str, str]]:
    return list(dict.fromkeys(map(_kind, pres)))
