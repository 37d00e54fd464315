"""The online rules against naive twins, and what their parameters may be."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rigctl.errors import InputError
from rigctl.plasticity import PairRule, rule
from tests.plasticity import twins

WINDOW = {"a_plus": 0.013, "a_minus": 0.0046, "tau_plus_ms": 16.8, "tau_minus_ms": 33.7}
TAUS = (0.0168, 0.0337)


def _train(rng: np.random.Generator, rate_hz: float, seconds: float) -> list[float]:
    return sorted(rng.uniform(0, seconds, rng.poisson(rate_hz * seconds)).tolist())


def _feed(made: PairRule, pre: list[float], post: list[float]) -> float:
    for at_s, side in sorted([(t, 0) for t in pre] + [(t, 1) for t in post]):
        (made.post if side else made.pre)(at_s)
    return made.change


VARIANTS = [
    ("pair-all", None, twins.pairs_all),
    ("pair-nearest", "symmetric", twins.pairs_symmetric),
    ("pair-nearest", "presynaptic", twins.pairs_presynaptic),
]


@pytest.mark.parametrize(("name", "nearest", "pairs"), VARIANTS)
@pytest.mark.parametrize("rate_hz", [1.0, 10.0, 50.0])
def test_additive_against_the_double_sum(
    name: str, nearest: str | None, pairs: object, rate_hz: float
) -> None:
    rng = np.random.default_rng(round(rate_hz))
    pre, post = _train(rng, rate_hz, 300 / rate_hz), _train(rng, rate_hz, 300 / rate_hz)
    found = _feed(rule(name, nearest=nearest, **WINDOW), pre, post)
    naive = twins.additive(pairs(pre, post), 0.013, 0.0046, *TAUS)  # type: ignore[operator]
    assert found == pytest.approx(naive, rel=1e-9)


@pytest.mark.parametrize(("name", "nearest", "pairs"), VARIANTS)
@given(
    pre=st.lists(st.integers(0, 40), max_size=12), post=st.lists(st.integers(0, 40), max_size=12)
)
def test_simultaneous_and_coarse_spikes_pair_as_the_twin_says(
    name: str, nearest: str | None, pairs: object, pre: list[int], post: list[int]
) -> None:
    # On a grid of 5 ms many spikes coincide; equal spikes of one train count once each.
    pre_s = sorted({t * 0.005 for t in pre})
    post_s = sorted({t * 0.005 for t in post})
    naive = twins.additive(pairs(pre_s, post_s), 0.013, 0.0046, *TAUS)  # type: ignore[operator]
    events = [(t, "pre") for t in pre_s] + [(t, "post") for t in post_s]
    for order in (sorted(events), sorted(events, key=lambda e: (e[0], e[1] == "pre"))):
        made = rule(name, nearest=nearest, **WINDOW)
        for at_s, side in order:
            (made.pre if side == "pre" else made.post)(at_s)
        assert made.change == pytest.approx(naive, rel=1e-9, abs=1e-15)


def test_multiplicative_without_bounds_compounds() -> None:
    rng = np.random.default_rng(3)
    pre, post = _train(rng, 20, 10), _train(rng, 20, 10)
    found = _feed(rule("pair-all", weight="multiplicative", **WINDOW), pre, post)
    naive = twins.stepwise(
        pre, post, lambda w, x: w + 0.013 * w * x, lambda w, y: w - 0.0046 * w * y, TAUS,
        (-np.inf, np.inf), 1.0,
    )  # fmt: skip
    assert found == pytest.approx(naive - 1, rel=1e-9)


@pytest.mark.parametrize("mu", [0.0, 0.02, 0.4, 1.0])
def test_power_between_bounds(mu: float) -> None:
    rng = np.random.default_rng(4)
    pre, post = _train(rng, 20, 10), _train(rng, 20, 10)
    made = rule("pair-all", weight="power", mu=mu, w_min=0.0, w_max=1.0, w_start=0.4, **WINDOW)
    naive = twins.stepwise(
        pre, post, lambda w, x: w + 0.013 * max(0.0, 1 - w) ** mu * x,
        lambda w, y: w - 0.0046 * max(0.0, w) ** mu * y, TAUS, (0.0, 1.0), 0.4,
    )  # fmt: skip
    assert _feed(made, pre, post) == pytest.approx(naive / 0.4 - 1, rel=1e-9)


def test_power_without_bounds() -> None:
    rng = np.random.default_rng(5)
    pre, post = _train(rng, 20, 10), _train(rng, 20, 10)
    made = rule(
        "pair-all",
        weight_plus="power",
        weight_minus="multiplicative",
        mu=0.4,
        w_start=2.0,
        **WINDOW,
    )
    naive = twins.stepwise(
        pre, post, lambda w, x: w + 0.013 * 2.0**0.6 * w**0.4 * x,
        lambda w, y: w - 0.0046 * w * y, TAUS, (-np.inf, np.inf), 2.0,
    )  # fmt: skip
    assert _feed(made, pre, post) == pytest.approx(naive / 2 - 1, rel=1e-9)


spikes = st.lists(st.tuples(st.floats(0, 5), st.booleans()), max_size=60)


@given(spikes, st.sampled_from(["additive", "multiplicative", "power"]))
def test_bounds_are_never_left(events: list[tuple[float, bool]], weight: str) -> None:
    made = rule(
        "pair-all", weight=weight, mu=0.3, w_start=0.5, w_min=0.2, w_max=0.9, a_plus=0.4,
        a_minus=0.4, tau_plus_ms=50, tau_minus_ms=50,
    )  # fmt: skip
    for at_s, is_post in sorted(events):
        (made.post if is_post else made.pre)(at_s)
        assert 0.2 - 1e-12 <= 0.5 * (1 + made.change) <= 0.9 + 1e-12


def test_change_begins_at_zero_and_one_pair_is_the_window() -> None:
    made = rule("pair-all", **WINDOW)
    assert made.change == 0
    made.pre(1.0)
    made.post(1.010)
    assert made.change == pytest.approx(0.013 * np.exp(-10 / 16.8), rel=1e-12)


def test_additive_is_unbounded_without_bounds() -> None:
    made = rule("pair-all", **{**WINDOW, "a_minus": 1.0})
    for n in range(10):
        made.post(n * 1.0)
        made.pre(n * 1.0 + 0.001)
    assert made.change < -5


def test_time_must_not_go_back() -> None:
    made = rule("pair-all", **WINDOW)
    made.pre(1.0)
    with pytest.raises(InputError, match="must not decrease"):
        made.post(0.999)
    with pytest.raises(InputError, match="must not decrease"):
        made.pre(float("nan"))


@pytest.mark.parametrize(
    ("name", "change", "sentence"),
    [
        ("pair", {}, 'did you mean "pair-all"'),
        ("suppression", {}, "not in this version; it runs pair-all and pair-nearest"),
        ("pair-all", {"a_plus": -1}, "a_plus = -1: 0 or more is needed"),
        ("pair-all", {"tau_plus_ms": 0}, "tau_plus_ms = 0: 0 is too small: more is needed"),
        ("pair-all", {"a_plus": float("nan")}, "a finite number"),
        ("pair-all", {"taup_ms": 1}, 'did you mean "tau_plus_ms"'),
        ("pair-all", {"weight": "linear"}, "one of additive, multiplicative, power"),
        ("pair-all", {"nearest": "symmetric"}, "belongs to pair-nearest"),
        ("pair-all", {"w_min": 2, "w_max": 1}, "more than w_min = 2 is needed"),
        ("pair-all", {"w_min": 0, "w_max": 0.5}, "must lie between w_min and w_max"),
        ("pair-all", {"a_plus": None}, "a_plus: this parameter is needed"),
    ],
)
def test_wrong_parameters(name: str, change: dict[str, object], sentence: str) -> None:
    with pytest.raises(InputError) as caught:
        rule(name, **{**WINDOW, **change})
    assert sentence in str(caught.value)
