"""The simulated cell's kinetics and synapses against published numbers."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from rigctl_sim.hodgkin_huxley import respond, rest_mv, steady, upward_crossings_ms
from rigctl_sim.synapse import Depression

# Hodgkin & Huxley 1952, J Physiol 117:500, 6.3 °C; figures computed here from the stated equations
# by independent code: upward crossings of 0 mV, step from rest.


def _threshold(fires: Callable[[float], bool], low: float, high: float) -> float:
    for _ in range(14):
        middle = (low + high) / 2
        low, high = (low, middle) if fires(middle) else (middle, high)
    return high


def test_rest() -> None:
    assert round(rest_mv(), 3) == -64.996
    m, h, n = steady(rest_mv())
    assert (round(m, 5), round(h, 5), round(n, 5)) == (0.05296, 0.59599, 0.31773)


# At 15 µA/cm² the rate is 78.649 Hz (two step sizes, and scipy's DOP853 at 1e-9, agree on that);
# the table that these figures come from says 78.7, as if rounded twice. The others are as there.
@pytest.mark.parametrize(
    ("current", "rate_hz"),
    [(6.5, 55.1), (7, 58.3), (8, 62.5), (10, 68.3), (15, 78.6), (20, 86.5)],
)
def test_firing_rates(current: float, rate_hz: float) -> None:
    crossings = upward_crossings_ms(respond(current, 600, 600))
    assert round(1000 / float(np.diff(crossings)[-1]), 1) == rate_hz


def test_first_spike() -> None:
    trace = respond(10, 20, 20)
    assert round(float(upward_crossings_ms(trace)[0]), 3) == 1.901
    assert round(float(trace[:1000].max()), 1) == 40.3


def test_thresholds() -> None:
    one = _threshold(lambda i: len(upward_crossings_ms(respond(i, 60, 60))) >= 1, 2.0, 2.5)
    assert round(one, 3) == 2.240
    sustained = _threshold(
        lambda i: bool((upward_crossings_ms(respond(i, 1500, 1500))[-1:] > 1470).any()), 6.2, 6.3
    )
    assert round(sustained, 3) == 6.260


@pytest.mark.parametrize(("pulse_ms", "current"), [(2, 3.859), (3, 2.928), (5, 2.351)])
def test_pulse_thresholds(pulse_ms: float, current: float) -> None:
    found = _threshold(lambda i: len(upward_crossings_ms(respond(i, pulse_ms, 30))) >= 1, 2.0, 4.5)
    assert round(found, 3) == current


# Tsodyks & Markram 1997, PNAS 94:719 (U and τrec read second-hand; releases computed here from the
# stated equations, in which what was released recovers at once: τinact 0).
def test_depression_at_20_hz() -> None:
    synapse = Depression(0.5, 0.8, 0.0)
    found = [round(synapse.release(0.05 * k), 4) for k in range(6)]
    assert found == [0.5, 0.2651, 0.1548, 0.1030, 0.0787, 0.0673]


@pytest.mark.parametrize(
    ("rate_hz", "steady_release"), [(1, 0.4164), (10, 0.1051), (20, 0.0571), (50, 0.0241)]
)
def test_depression_settles(rate_hz: float, steady_release: float) -> None:
    synapse = Depression(0.5, 0.8, 0.0)
    found = [synapse.release(k / rate_hz) for k in range(400)]
    assert round(found[-1], 4) == steady_release


def test_three_ms_of_inactivation_changes_little() -> None:
    slow, fast = Depression(0.5, 0.8, 0.003), Depression(0.5, 0.8, 0.0)
    for k in range(50):
        assert slow.release(0.05 * k) == pytest.approx(fast.release(0.05 * k), rel=0.01)
