"""The online forecaster: any order of telling, a band that holds what is open, badges."""

from __future__ import annotations

import random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.plasticity import rule
from rigctl.plasticity.forecast import Forecaster, as_planned, extrapolates
from rigctl.plasticity.sets import SETS, resolve
from rigctl.protocol.plan import RuleChoice
from rigctl.protocol.schema import Forecast

CHOICE = resolve(Forecast(rule="pair-all", set="bi-poo-2001"), None, "test", "forecast[1]")
MS = 1_000_000


def _direct(choice: RuleChoice, pre: list[int], post: list[int]) -> float:
    made = rule(choice.rule, **choice.parameters)
    for at_ns, side in sorted([(t, 0) for t in pre] + [(t, 1) for t in post]):
        (made.post if side else made.pre)(at_ns / 1e9)
    return made.change


times = st.lists(st.integers(0, 3_000 * MS), max_size=20)


@settings(deadline=None)
@given(times, times, st.integers(0, 2**31))
def test_the_order_of_telling_does_not_matter(pre: list[int], post: list[int], seed: int) -> None:
    events = [(t, False) for t in pre] + [(t, True) for t in post]
    random.Random(seed).shuffle(events)
    forecaster = Forecaster([CHOICE], ["s1"], {"s1": 500_000})
    for at_ns, is_post in events:
        if is_post:
            forecaster.post(at_ns)
        else:
            forecaster.pre("s1", at_ns)
    forecaster.finish()
    (value,) = forecaster.read()
    assert value.change == pytest.approx(_direct(CHOICE, pre, post), rel=1e-12, abs=1e-15)
    assert value.low <= value.change <= value.high


def test_advancing_piece_by_piece_gives_the_same() -> None:
    pre = [n * 200 * MS for n in range(1, 50)]
    post = [n * 200 * MS + 10 * MS for n in range(1, 50)]
    forecaster = Forecaster([CHOICE], ["s1"], {"s1": 300_000})
    for a, b in zip(pre, post, strict=True):
        forecaster.post(b)
        forecaster.pre("s1", a)
        forecaster.advance(b + 20 * MS)
        (value,) = forecaster.read()
        n = pre.index(a) + 1
        assert value.change == pytest.approx(_direct(CHOICE, pre[:n], post[:n]), rel=1e-12)


def test_the_band_is_the_latencys_uncertainty() -> None:
    forecaster = Forecaster([CHOICE], ["s1"], {"s1": 2 * MS})
    forecaster.pre("s1", 100 * MS)
    forecaster.post(110 * MS)
    forecaster.finish()
    (value,) = forecaster.read()
    # The pre event may be 2 ms earlier (Δt 12 ms, less) or later (8 ms, more).
    assert value.low == pytest.approx(_direct(CHOICE, [98 * MS], [110 * MS]))
    assert value.high == pytest.approx(_direct(CHOICE, [102 * MS], [110 * MS]))


def test_a_band_across_zero_has_both_signs() -> None:
    forecaster = Forecaster([CHOICE], ["s1"], {"s1": 3 * MS})
    forecaster.pre("s1", 100 * MS)
    forecaster.post(102 * MS)
    forecaster.finish()
    (value,) = forecaster.read()
    assert value.low < 0 < value.change < value.high


def test_unknown_events_widen_the_band_and_are_not_taken_as_intended() -> None:
    forecaster = Forecaster([CHOICE], ["s1"], {})
    for n in range(1, 11):
        forecaster.pre("s1", n * 1000 * MS)
        forecaster.post(n * 1000 * MS + 10 * MS, known=n != 4)
    forecaster.finish()
    (value,) = forecaster.read()
    nine = 9 * _direct(CHOICE, [0], [10 * MS])
    assert value.change == pytest.approx(nine, rel=1e-6)
    assert value.low == pytest.approx(value.change)
    assert value.high == pytest.approx(nine * 10 / 9, rel=1e-6)


def test_pathways_do_not_mix_and_a_post_spike_counts_for_all() -> None:
    forecaster = Forecaster([CHOICE], ["s1", "s2"], {})
    forecaster.pre("s1", 100 * MS)
    forecaster.post(110 * MS)
    forecaster.pre("s2", 120 * MS)
    forecaster.finish()
    first, second = forecaster.read()
    assert (first.pathway, first.change > 0) == ("s1", True)
    assert (second.pathway, second.change < 0) == ("s2", True)


def test_as_planned_is_the_same_rule() -> None:
    events = [(100 * MS, "pre", "s1"), (110 * MS, "post", None)]
    (value,) = as_planned([CHOICE], events)
    assert value.change == pytest.approx(_direct(CHOICE, [100 * MS], [110 * MS]))


def test_more_pairings_than_the_source_had_are_an_extrapolation() -> None:
    assert extrapolates(CHOICE, 60) is None
    assert extrapolates(CHOICE, 61) == "61 pairings extrapolate: bi-poo-2001 comes from 60 pairings"
    song = resolve(Forecast(rule="pair-all", set="song-2000"), None, "t", "k")
    assert extrapolates(song, 10_000) is None


def test_nothing_named_is_a_fallback_without_a_preparation() -> None:
    choice = resolve(None, None, "rig.toml", "forecast_set")
    assert (choice.parameter_set, choice.preparation) == ("bi-poo-2001", None)
    named = resolve(None, "bi-poo-2001", "rig.toml", "forecast_set")
    assert named.preparation == SETS["bi-poo-2001"].preparation
    own = resolve(Forecast(rule="pair-all", set="bi-poo-2001", a_plus=0.1), None, "t", "k")
    assert own.parameter_set == "own"


@pytest.mark.parametrize("name", SETS)
def test_every_set_names_source_preparation_conversion_and_runs(name: str) -> None:
    found = SETS[name]
    assert found.source
    assert found.preparation
    assert found.conversion
    assert found.how_sure
    made = rule("pair-all", **found.parameters)
    made.pre(0.0)
    made.post(0.01)
    assert made.change > 0


def test_a_shifted_event_may_still_come_before_one_already_told() -> None:
    forecaster = Forecaster([CHOICE], ["s1"], {"s1": 5 * MS})
    forecaster.pre("s1", 90 * MS)
    forecaster.post(101 * MS)
    forecaster.advance(102 * MS)
    # In the variants that are early this one precedes the post spike; half the bound gives most.
    forecaster.pre("s1", 103 * MS)
    forecaster.finish()
    (value,) = forecaster.read()
    early = _direct(CHOICE, [87_500_000, 100_500_000], [101 * MS])
    assert value.high == pytest.approx(early)
