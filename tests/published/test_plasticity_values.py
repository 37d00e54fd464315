"""The rules against published numbers. Each check names its source and how sure it is."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rigctl.plasticity import PairRule, rule
from rigctl.plasticity.sets import SETS

# Bi & Poo 2001, Annu Rev Neurosci 24:139 (read second-hand): the window after 60 pairs at 1 Hz, in
# % (computed here from the stated equation).
BI_POO_PCT = {
    5: 57.7, 10: 42.8, 20: 23.6, 40: 7.2, -5: -23.5, -10: -20.3, -20: -15.1, -40: -8.3,
}  # fmt: skip


@pytest.mark.parametrize(("dt_ms", "pct"), BI_POO_PCT.items())
def test_bi_poo_set_gives_the_window_back_after_its_own_sixty_pairs(dt_ms: int, pct: float) -> None:
    made = rule("pair-all", **SETS["bi-poo-2001"].parameters)
    for n in range(60):
        at_s = 1.0 + n
        if dt_ms > 0:
            made.pre(at_s)
            made.post(at_s + dt_ms / 1000)
        else:
            made.post(at_s)
            made.pre(at_s - dt_ms / 1000)
    # The table is printed to a tenth of a per cent.
    assert 100 * made.change == pytest.approx(pct, abs=0.06)


def _poisson_drift(made: PairRule, p_hz: float, q_hz: float, seconds: float, seed: int) -> float:
    rng = np.random.default_rng(seed)
    pre = rng.uniform(0, seconds, rng.poisson(p_hz * seconds))
    post = rng.uniform(0, seconds, rng.poisson(q_hz * seconds))
    times = np.concatenate([pre, post])
    order = np.argsort(times)
    is_post = order >= len(pre)
    for at_s, side in zip(times[order].tolist(), is_post.tolist(), strict=True):
        (made.post if side else made.pre)(at_s)
    # Counts vary from draw to draw; the drift is per expected pair.
    return made.change / seconds * (p_hz * q_hz * seconds**2) / (len(pre) * len(post))


# Mean drift under independent Poisson trains, p = 5, q = 20 Hz, with the Bi & Poo 2001 window
# (computed here from the stated equations; the symmetric scheme after Izhikevich & Desai 2003,
# Neural Comput 15:1511).
@pytest.mark.parametrize(
    ("name", "nearest", "drift"),
    [
        ("pair-all", None, 0.3853),
        ("pair-nearest", "symmetric", 0.6546),
        ("pair-nearest", "presynaptic", 0.4275),
    ],
)
def test_poisson_drift(name: str, nearest: str | None, drift: float) -> None:
    made = rule(
        name, nearest=nearest, a_plus=0.777, a_minus=0.273, tau_plus_ms=16.8, tau_minus_ms=33.7
    )
    assert _poisson_drift(made, 5, 20, 120_000, seed=2) == pytest.approx(drift, rel=0.01)


# --- fixed points of weight dependence ----------------------------------------------------------


def _mean_step(parameters: dict[str, object], w: float) -> float:
    """Return the mean change at weight ``w`` of one pre-post and one post-pre pairing, each
    weighted by its time constant: the mean field of uncorrelated trains.
    """
    total = 0.0
    for sign, tau in (("plus", "tau_plus_ms"), ("minus", "tau_minus_ms")):
        made = rule("pair-all", **{**parameters, "w_start": w})
        if sign == "plus":
            made.pre(0.0)
            made.post(1e-12)
        else:
            made.post(0.0)
            made.pre(1e-12)
        total += w * made.change * float(parameters[tau])  # type: ignore[arg-type]
    return total


def _fixed_point(parameters: dict[str, object], low: float, high: float) -> float:
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if _mean_step(parameters, middle) > 0 else (low, middle)
    return (low + high) / 2


def test_van_rossum_fixed_point() -> None:
    # van Rossum, Bi & Turrigiano 2000, J Neurosci 20:8812 (constants from memory):
    # w* = c_p·τ₊ / (c_d·τ₋), computed here.
    parameters = {
        "a_plus": 1.0, "a_minus": 0.003, "tau_plus_ms": 20.0, "tau_minus_ms": 20.0,
        "weight_plus": "additive", "weight_minus": "multiplicative",
    }  # fmt: skip
    assert _fixed_point(parameters, 1, 2000) == pytest.approx(1 / 0.003, rel=1e-6)
    uneven = {**parameters, "tau_plus_ms": 15.0}
    assert _fixed_point(uneven, 1, 2000) == pytest.approx(15 / (0.003 * 20), rel=1e-6)


# Gütig et al. 2003, J Neurosci 23:3697 (form read second-hand): w* = 1/(1 + α^(1/μ)), α = 1.05.
@pytest.mark.parametrize(
    ("mu", "fixed"), [(1.0, 0.4878), (0.5, 0.4756), (0.1, 0.3804), (0.02, 0.0802)]
)
def test_guetig_fixed_point(mu: float, fixed: float) -> None:
    parameters = {
        "a_plus": 1e-3, "a_minus": 1.05e-3, "tau_plus_ms": 20.0, "tau_minus_ms": 20.0,
        "weight": "power", "mu": mu, "w_min": 0.0, "w_max": 1.0,
    }  # fmt: skip
    found = _fixed_point(parameters, 1e-6, 1 - 1e-6)
    assert found == pytest.approx(fixed, abs=5e-5)
    assert found == pytest.approx(1 / (1 + 1.05 ** (1 / mu)), rel=1e-6)


def test_morrison_fixed_point() -> None:
    # Morrison, Aertsen & Diesmann 2007, Neural Comput 19:1437 (μ = .4 read second-hand):
    # w*/w0 = [τ₊/(α·τ₋)]^(1/(1−μ)), computed here. w0 is the scale of the power law.
    mu, alpha, w0 = 0.4, 0.11, 1.0

    def step(w: float) -> float:
        up = rule("pair-all", a_plus=0.1, a_minus=0, tau_plus_ms=20, tau_minus_ms=20,
                  weight_plus="power", weight_minus="multiplicative", mu=mu, w_start=w)  # fmt: skip
        up.pre(0.0)
        up.post(1e-12)
        # ``w_start`` is the power law's scale too: take it back to w0.
        potentiated = w * up.change * (w0 / w) ** (1 - mu)
        down = rule("pair-all", a_plus=0, a_minus=0.1 * alpha, tau_plus_ms=20, tau_minus_ms=20,
                    weight="multiplicative", w_start=w)  # fmt: skip
        down.post(0.0)
        down.pre(1e-12)
        return potentiated + w * down.change

    low, high = 0.1, 1000.0
    for _ in range(80):
        middle = (low + high) / 2
        low, high = (middle, high) if step(middle) > 0 else (low, middle)
    assert low == pytest.approx((1 / alpha) ** (1 / (1 - mu)), rel=1e-6)


def test_song_set_is_the_papers_own_numbers() -> None:
    # Song, Miller & Abbott 2000, Nat Neurosci 3:919 (read second-hand).
    found = SETS["song-2000"].parameters
    assert found["a_minus"] == pytest.approx(1.05 * float(found["a_plus"]))
    assert (found["tau_plus_ms"], found["w_min"], found["w_max"]) == (20.0, 0.0, 1.0)
    made = rule("pair-all", **found)
    for n in range(2000):
        made.pre(n * 1.0)
        made.post(n * 1.0 + 0.001)
    assert made.change == pytest.approx(1.0)  # from .5 to the hard bound at 1


def test_froemke_dan_window() -> None:
    # Froemke & Dan 2002, Nature 416:433 (read second-hand): 1.01·exp(−Δt/14.8) over 60 pairings.
    made = rule("pair-all", **SETS["froemke-dan-2002"].parameters)
    for n in range(60):
        made.pre(n * 5.0)
        made.post(n * 5.0 + 0.010)
    assert made.change == pytest.approx(1.01 * math.exp(-10 / 14.8), rel=1e-6)
