"""The scripted cell: what is planted comes, and the trace shows it."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rigctl_sim.knobs import ScriptedKnobs
from rigctl_sim.scripted import PulseLine, ScriptedCell

LINES = {
    "post1": PulseLine(1500.0, True, 3_000_000, 200_000),
    "weak": PulseLine(300.0, False, 0, 0),
    "step1": PulseLine(-20.0, False, 0, 0),
}
S = 1_000_000_000


def _spikes(cell: ScriptedCell, pulses: int) -> list[list[float]]:
    found = []
    for n in range(1, pulses + 1):
        cell.advance(n * S)
        cell.current(n * S, 2_000_000, "post1")
        here = []
        while (peak_ns := cell.advance((n + 1) * S - 1)) is not None:
            here.append((peak_ns - n * S) / 1e6)
        found.append(here)
    return found


def test_planted_misses_and_doublets_and_nothing_else() -> None:
    cell = ScriptedCell(ScriptedKnobs(miss_at=[3, 7], doublet_at=[5]), LINES, 10, seed=1)
    counts = [len(s) for s in _spikes(cell, 10)]
    assert counts == [1, 1, 0, 1, 2, 1, 0, 1, 1, 1]


def test_creep_is_linear_over_the_pulses() -> None:
    quiet = {"post1": PulseLine(1500.0, True, 3_000_000, 0)}
    cell = ScriptedCell(ScriptedKnobs(creep_ms=3), quiet, 7, seed=1)
    assert [s[0] for s in _spikes(cell, 9)] == [3.0, 3.5, 4.0, 4.5, 5.0, 5.5, 6.0, 6.0, 6.0]


def test_latencies_have_the_stated_mean_and_sd() -> None:
    cell = ScriptedCell(ScriptedKnobs(), LINES, 400, seed=2)
    latencies = np.array([s[0] for s in _spikes(cell, 400)])
    # Five standard errors of a mean and of an SD over 400 draws.
    assert abs(latencies.mean() - 3.0) < 5 * 0.2 / 20
    assert abs(latencies.std(ddof=1) - 0.2) < 5 * 0.2 / 28


def test_a_weak_pulse_evokes_none() -> None:
    cell = ScriptedCell(ScriptedKnobs(), LINES, 10, seed=1)
    cell.current(S, 2_000_000, "weak")
    assert cell.advance(2 * S) is None


def test_spontaneous_spikes_come_at_their_rate() -> None:
    cell = ScriptedCell(ScriptedKnobs(spontaneous_hz=2), LINES, 2, seed=5)
    count = 0
    while cell.advance(500 * S) is not None:
        count += 1
    # A Poisson count of 1000 has an SD of 32.
    assert abs(count - 1000) < 5 * 32


def test_the_trace_shows_epsp_step_spike_and_is_the_same_each_time() -> None:
    knobs = ScriptedKnobs(noise_mv=0)
    cell = ScriptedCell(knobs, LINES, 10, seed=1)
    cell.epsp(S, "s1", 1.0)
    cell.current(S + 500_000_000, 300_000_000, "step1")
    cell.current(S + 1_500_000_000, 2_000_000, "post1")
    peak_ns = cell.advance(4 * S)
    assert peak_ns is not None
    trace = cell.trace_mv(S - 100_000_000, 30_000, 10_000)
    assert trace[:1000] == pytest.approx(-70.0)
    assert trace[1000:2500].max() == pytest.approx(-67.0, abs=0.01)
    # −20 pA through 150 + 15 MΩ.
    assert trace[8500:8900].mean() == pytest.approx(-70 - 20 * 0.165, abs=0.01)
    assert abs(int(np.argmax(trace)) - (peak_ns - S + 100_000_000) / 1e5) <= 1
    noisy = ScriptedCell(ScriptedKnobs(), LINES, 10, seed=1)
    assert np.array_equal(noisy.trace_mv(S, 500, 10_000), noisy.trace_mv(S, 500, 10_000))


def _naive_mv(at_ms: float, knobs: ScriptedKnobs) -> float:
    """The templates' sum written out: EPSP at 0, step from 30 to 330 ms, spike at 500."""
    v = knobs.rest_mv
    rise, decay, tau = knobs.rise_ms, knobs.decay_ms, knobs.membrane_tau_ms
    if at_ms >= 0:
        top = math.log(decay / rise) * rise * decay / (decay - rise)
        height = math.exp(-top / decay) - math.exp(-top / rise)
        v += knobs.epsp_mv * (math.exp(-at_ms / decay) - math.exp(-at_ms / rise)) / height
    if 30 <= at_ms < 330:
        v += -20e-3 * knobs.series_resistance_mohm
        v += -20e-3 * knobs.input_resistance_mohm * (1 - math.exp(-(at_ms - 30) / tau))
    if at_ms >= 330:
        full = -20e-3 * knobs.input_resistance_mohm * (1 - math.exp(-300 / tau))
        v += full * math.exp(-(at_ms - 330) / tau)
    since = at_ms - 500
    if since >= -2:
        v += 100 * math.exp(-((since / 0.35) ** 2) / 2)
    if since > 0:
        v -= 6 * since / 8 * math.exp(1 - since / 8)
    return v


@given(
    start_us=st.integers(-60_000, 520_000),
    rate_hz=st.sampled_from([1_000.0, 10_000.0, 25_000.0]),
    decay_ms=st.floats(2, 40),
    tau_ms=st.floats(3, 60),
)
def test_the_trace_is_its_templates_sum_wherever_it_is_cut(
    start_us: int, rate_hz: float, decay_ms: float, tau_ms: float
) -> None:
    knobs = ScriptedKnobs(noise_mv=0, decay_ms=decay_ms, membrane_tau_ms=tau_ms)
    exact = {"post1": PulseLine(0.0, True, 3_000_000, 0), "step1": LINES["step1"]}
    cell = ScriptedCell(knobs, exact, 10, seed=1)
    cell.epsp(S, "s1", 1.0)
    cell.current(S + 30_000_000, 300_000_000, "step1")
    cell.current(S + 497_000_000, 1_000, "post1")
    assert cell.advance(3 * S) == S + 500_000_000
    trace = cell.trace_mv(S + start_us * 1_000, 300, rate_hz)
    at_ms = start_us / 1000 + np.arange(300) * 1000 / rate_hz
    # Samples at an edge, where rounding may put them on either side, are left out.
    clear = np.abs(at_ms[:, None] - [0, 30, 330, 497.001, 498]).min(axis=1) > 1e-6
    expected = np.array([_naive_mv(ms, knobs) for ms in at_ms])
    # The templates end when a microvolt is left.
    assert trace[clear] == pytest.approx(expected[clear], abs=1e-3)


def test_forgetting_keeps_what_still_shows() -> None:
    cell = ScriptedCell(ScriptedKnobs(noise_mv=0), LINES, 10, seed=1)
    for n in range(50):
        cell.epsp(n * S, "s1", 1.0)
        cell.artefact(n * S, "pre1")
    before = cell.trace_mv(49 * S, 1000, 10_000)
    cell.forget(49 * S)
    assert np.array_equal(cell.trace_mv(49 * S, 1000, 10_000), before)
    assert len(cell._epsps) == 1
