"""The search for pairs, against naive double loops."""

from __future__ import annotations

from collections import Counter

import msgspec
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.protocol import audit_pairs
from rigctl.protocol.audit_pairs import pairs_within, reach_of, reach_within, unintended
from rigctl.protocol.plan import PlanPhase, PlanTrigger
from rigctl.protocol.planned import planned_spikes
from tests.conftest import SHORT, make_plan, make_rig

TIMES = st.lists(st.integers(0, 2_000), max_size=40).map(sorted)


@given(TIMES, TIMES, st.integers(0, 500), st.integers(1, 50))
def test_the_search_is_the_double_loop(
    pre: list[int], post: list[int], reach: int, at_once: int
) -> None:
    before = audit_pairs._AT_ONCE
    audit_pairs._AT_ONCE = at_once
    try:
        parts = list(
            pairs_within(np.array(pre, dtype=np.int64), np.array(post, dtype=np.int64), reach)
        )
    finally:
        audit_pairs._AT_ONCE = before
    found = [(i, j) for ii, jj in parts for i, j in zip(ii.tolist(), jj.tolist(), strict=True)]
    naive = [(i, j) for i, a in enumerate(pre) for j, b in enumerate(post) if abs(b - a) <= reach]
    assert found == naive


@settings(max_examples=15, deadline=None)
@given(st.sampled_from([3.0, 7.0, 20.0, 40.0]), st.integers(2, 20), st.floats(1, 15))
def test_unintended_pairs_are_all_but_the_meant_ones(
    rate_hz: float, count: int, dt_ms: float
) -> None:
    protocol = (
        SHORT.replace("rate_hz = 1", f"rate_hz = {rate_hz}")
        .replace("pairings = 12", f"pairings = {count}")
        .replace("dt_ms = 10", f"dt_ms = {dt_ms}")
    )
    plan = make_plan(protocol, make_rig())
    spikes = planned_spikes(plan)
    pairs, reach_ns = unintended(plan, spikes, reach_of(plan.forecasts))
    meant = {
        (p.pre_trigger, p.post_trigger)
        for phase in plan.phases
        for x in phase.pairings
        for p in x.pairs
    }
    naive: Counter[tuple[str, float]] = Counter()
    for pre in spikes:
        for post in spikes:
            if (pre.side, post.side) != ("pre", "post"):
                continue
            gap_ns = post.at_ns - pre.at_ns
            if gap_ns and abs(gap_ns) <= reach_ns and (pre.trigger, post.trigger) not in meant:
                naive[pre.pathway or "", float(round(gap_ns / 1e6))] += 1
    found: Counter[tuple[str, float]] = Counter()
    for u in pairs:
        found[u.pathway, u.dt_ms] += u.count
    assert found == naive


def test_simultaneous_spikes_are_no_pair() -> None:
    # Δt = +100 ms every 100 ms: each spike meets the next pairing's EPSP at the very instant.
    protocol = SHORT.replace("rate_hz = 1", "every_s = 0.1").replace("dt_ms = 10", "dt_ms = 100")
    plan = make_plan(protocol, make_rig())
    spikes = planned_spikes(plan)
    posts = {s.at_ns for s in spikes if s.side == "post"}
    assert len(posts & {s.at_ns for s in spikes if s.side == "pre"}) == 11
    pairs, _ = unintended(plan, spikes, 150_000_000)
    # Left are the EPSPs of the next pairing but one: −100 ms, ten of them.
    assert [(u.dt_ms, u.count) for u in pairs] == [(-100, 10)]


@pytest.mark.parametrize(
    ("kind", "drives", "times_ms", "tests"),
    [
        ("induction", "pre", [0, 100, 200], 3),
        ("induction", "pre", [0, 100, 250], 0),  # no steady interval: a train's
        ("induction", "pre", [0, 100], 2),
        ("induction", "post", [0, 100], 0),  # one interval beside a train says nothing
        ("induction", "post", [0, 100, 200], 3),
        ("follow_up", "pre", [0, 100, 250], 3),
    ],
)
def test_what_counts_as_a_test_stimulus(
    kind: str, drives: str, times_ms: list[int], tests: int
) -> None:
    plan = make_plan(SHORT, make_rig())
    triggers = [
        PlanTrigger(n, "pre1", t * 1_000_000, 100_000, None, "s1") for n, t in enumerate(times_ms)
    ]
    if drives == "post":
        triggers.append(PlanTrigger(9, "post1", 500_000_000, 100_000, None, None))
    phase = PlanPhase(0, "x", kind, "auto", 10**9, tuple(triggers), ())  # type: ignore[arg-type]
    spikes = planned_spikes(msgspec.structs.replace(plan, phases=(phase,)))
    assert sum(s.is_test for s in spikes) == tests


def test_the_reach_is_cut_where_there_would_be_too_many_pairs() -> None:
    ns = np.arange(0, 1_000_000_000, 1_000_000, dtype=np.int64)
    # 1000 against 1000 spikes at 1 kHz: about 2·r + 1 partners each within r ms.
    assert reach_within(ns, ns, 8_000_000, most=20_000) == 8_000_000
    assert reach_within(ns, ns, 64_000_000, most=20_000) == 8_000_000


@pytest.mark.parametrize("tau_ms", [20, 50])
def test_the_reach_is_five_of_the_longest_tau(tau_ms: int) -> None:
    own = (
        'rule = "pair-all"\na_plus = 0.01\na_minus = 0.01\n'
        f"tau_plus_ms = 10\ntau_minus_ms = {tau_ms}"
    )
    plan = make_plan(SHORT.replace('rule = "pair-all"\nset = "bi-poo-2001"', own))
    assert reach_of(plan.forecasts) == 5 * tau_ms * 1_000_000
    assert reach_of(()) == 200_000_000
