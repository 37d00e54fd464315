"""The conductance cell: spikes emerge, and how time is cut does not matter."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.errors import InputError
from rigctl_sim.conductance import ConductanceCell
from rigctl_sim.knobs import ConductanceKnobs

S = 1_000_000_000
QUIET = ConductanceKnobs(noise_pa=0, recording_noise_mv=0, series_resistance_mohm=0, artefact_mv=0)
PULSES = {"post1": 700.0, "step1": -20.0}


def _spikes(cell: ConductanceCell, until_ns: int) -> list[int]:
    found = []
    while (peak_ns := cell.advance(until_ns)) is not None:
        found.append(peak_ns)
    return found


def test_it_rests_at_minus_seventy_and_an_epsp_is_three_mv() -> None:
    cell = ConductanceCell(QUIET, PULSES, seed=1)
    cell.epsp(S, "s1", 1.0)
    assert _spikes(cell, 2 * S) == []
    trace = cell.trace_mv(S - 10_000_000, 4000, 10_000)
    assert trace[:100] == pytest.approx(-70.0, abs=1e-6)
    assert trace.max() == pytest.approx(-67.0, abs=0.02)
    # Settled at the window's end, as the cell's own description says.
    assert abs(cell._state[0] + 70.0) < 1e-6


def test_a_pulse_evokes_one_spike_and_a_weak_one_none() -> None:
    cell = ConductanceCell(QUIET, {"post1": 700.0, "weak": 250.0}, seed=1)
    cell.current(S, 2_000_000, "post1")
    (peak_ns,) = _spikes(cell, 2 * S)
    assert 2.0 < (peak_ns - S) / 1e6 < 4.5
    cell.advance(3 * S)
    cell.current(3 * S, 2_000_000, "weak")
    assert _spikes(cell, 4 * S) == []


def test_a_large_epsp_fires_the_cell_by_itself() -> None:
    cell = ConductanceCell(QUIET, PULSES, seed=1)
    cell.epsp(S, "s1", 12.0)
    assert len(_spikes(cell, 2 * S)) >= 1


def test_an_epsp_before_the_pulse_brings_the_spike_forward() -> None:
    alone = ConductanceCell(QUIET, PULSES, seed=1)
    alone.current(S, 2_000_000, "post1")
    paired = ConductanceCell(QUIET, PULSES, seed=1)
    paired.epsp(S - 6_000_000, "s1", 1.0)
    assert paired.advance(S) is None
    paired.current(S, 2_000_000, "post1")
    assert _spikes(paired, 2 * S)[0] < _spikes(alone, 2 * S)[0]


def test_input_and_series_resistance_show_in_the_test_step() -> None:
    knobs = ConductanceKnobs(noise_pa=0, recording_noise_mv=0, series_resistance_mohm=15)
    cell = ConductanceCell(knobs, PULSES, seed=1)
    cell.current(S, 300_000_000, "step1")
    cell.advance(2 * S)
    trace = cell.trace_mv(S - 5_000_000, 5000, 10_000)
    # At once: −20 pA through 15 MΩ; settled: and through the cell.
    assert trace[51] - trace[49] == pytest.approx(-0.3, abs=0.05)
    settled_mohm = (trace[2500:3000].mean() - trace[:49].mean()) / -20e-3
    assert settled_mohm - 15 == pytest.approx(90, abs=10)


@settings(max_examples=25, deadline=None)
@given(
    st.lists(st.integers(1, 399_999_999), min_size=1, max_size=12),
    st.integers(0, 5),
    # A sweep begins anywhere: the box's clock has a crystal of its own.
    st.integers(0, 99_999),
    st.sampled_from([10_000.0, 33_333.0, 50_000.0]),
)
def test_how_time_is_cut_does_not_matter(
    cuts: list[int], seed: int, offset_ns: int, rate_hz: float
) -> None:
    def run(stops: list[int]) -> tuple[list[int], np.ndarray]:  # type: ignore[type-arg]
        cell = ConductanceCell(ConductanceKnobs(), PULSES, seed)
        cell.advance(S)
        cell.epsp(S, "s1", 1.0)
        cell.current(S + 9_000_000, 2_000_000, "post1")
        spikes = []
        for stop in [*stops, 400_000_000]:
            spikes += _spikes(cell, S + stop)
        trace = cell.trace_mv(S - 10_000_000 - offset_ns, round(0.4 * rate_hz), rate_hz)
        return spikes, trace

    whole, cut = run([]), run(sorted(cuts))
    assert whole[0] == cut[0]
    assert np.array_equal(whole[1], cut[1])


@pytest.mark.parametrize("after_ns", range(-60_000, 61_000, 5_000))
def test_a_spike_is_told_when_time_reaches_its_peak(after_ns: int) -> None:
    def pulsed() -> ConductanceCell:
        cell = ConductanceCell(QUIET, PULSES, seed=1)
        cell.current(S, 2_000_000, "post1")
        return cell

    peak_ns = pulsed().advance(2 * S)
    assert peak_ns is not None
    cell = pulsed()
    # Never after the world has gone past it, never before, and once.
    found = cell.advance(peak_ns + after_ns)
    assert found == (peak_ns if after_ns >= 0 else None)
    assert _spikes(cell, 2 * S) == ([] if found else [peak_ns])


# Amplitudes whose peaks lie in either half of a step of the grid.
@pytest.mark.parametrize("amplitude_pa", [680.0, 700.0, 720.0, 740.0])
@pytest.mark.parametrize("after_ns", [0, 5_000, 30_000])
def test_an_input_right_after_a_peak_acts_the_same_however_time_is_cut(
    amplitude_pa: float, after_ns: int
) -> None:
    def run(until_ns: int) -> tuple[int, np.ndarray]:  # type: ignore[type-arg]
        cell = ConductanceCell(QUIET, {"post1": amplitude_pa, "big": 3000.0}, seed=1)
        cell.current(S, 2_000_000, "post1")
        peak_ns = cell.advance(until_ns)
        assert peak_ns is not None
        cell.current(peak_ns + after_ns, 500_000, "big")
        _spikes(cell, 2 * S)
        return peak_ns, cell.trace_mv(S, 1000, 40_000)

    peak_ns, whole = run(2 * S)
    assert np.array_equal(run(peak_ns)[1], whole)


@pytest.mark.parametrize("decay_ms", [4.0, 100.0, 400.0])
def test_a_window_lasts_until_the_cell_has_settled(decay_ms: float) -> None:
    knobs = ConductanceKnobs(decay_ms=decay_ms, noise_pa=30, recording_noise_mv=0)
    cell = ConductanceCell(knobs, PULSES, seed=1)
    cell.epsp(S, "s1", 1.0)
    _spikes(cell, 30 * S)
    seconds = round(2 + 18 * decay_ms / 1000)
    trace = cell.trace_mv(S, seconds * 10_000, 10_000)
    # No jump where the window ends; the last of an EPSP of 400 ms is 1e-6 mV after seven seconds.
    tail = trace[2000:]
    assert np.abs(np.diff(tail)).max() < 0.05
    assert abs(trace[-1] + 70.0) < 1e-5


def test_far_below_the_tables_the_gates_stay_gates() -> None:
    cell = ConductanceCell(QUIET, {"down": -3000.0}, seed=1)
    cell.current(S, 300_000_000, "down")
    cell.advance(S + 300_000_000)
    # Sodium and potassium are shut: what is left is the leak, 4 nS at 100 pF.
    volts = cell.trace_mv(S + 290_000_000, 10, 10_000)
    assert volts[-1] == pytest.approx(-70.0 - 3000 / 4.0, rel=0.02)


@pytest.mark.parametrize("capacitance_pf", [20.0, 100.0, 5000.0])
def test_the_epsp_has_its_size_in_small_and_large_cells(capacitance_pf: float) -> None:
    knobs = ConductanceKnobs(
        capacitance_pf=capacitance_pf, noise_pa=0, recording_noise_mv=0, epsp_mv=6
    )
    cell = ConductanceCell(knobs, PULSES, seed=1)
    cell.epsp(S, "s1", 1.0)
    cell.advance(2 * S)
    assert cell.trace_mv(S, 1000, 10_000).max() == pytest.approx(-64.0, abs=0.02)


def test_a_holding_current_moves_the_rest_and_leaves_it_a_rest() -> None:
    knobs = ConductanceKnobs(
        holding_pa=-100, noise_pa=0, recording_noise_mv=0, series_resistance_mohm=0
    )
    cell = ConductanceCell(knobs, PULSES, seed=1)
    cell.epsp(S, "s1", 0.0)
    cell.advance(2 * S)
    trace = cell.trace_mv(S - 10_000_000, 8000, 10_000)
    assert -95 < trace[0] < -75
    assert np.ptp(trace) < 1e-6


@pytest.mark.parametrize(
    ("knobs", "sentence"),
    [
        (ConductanceKnobs(holding_pa=10_000), "has a resting potential from -20"),
        (ConductanceKnobs(holding_pa=-300), "conductance.holding_pa = -300"),
        (ConductanceKnobs(decay_ms=0.5), "above rise_ms = 0.5"),
        (ConductanceKnobs(rise_ms=50, decay_ms=100, epsp_mv=50), "reaches at most 48.8 mV"),
    ],
)
def test_knobs_that_contradict_each_other_get_a_sentence(
    knobs: ConductanceKnobs, sentence: str
) -> None:
    with pytest.raises(InputError) as caught:
        ConductanceCell(knobs, PULSES, seed=1)
    assert sentence in str(caught.value)


def test_noise_differs_by_seed_and_is_the_same_for_one() -> None:
    def peaks(seed: int) -> list[int]:
        cell = ConductanceCell(ConductanceKnobs(), PULSES, seed)
        found = []
        for n in range(1, 6):
            cell.advance(n * S)
            cell.current(n * S, 2_000_000, "post1")
            found += _spikes(cell, n * S + 900_000_000)
        return found

    assert peaks(1) == peaks(1)
    assert peaks(1) != peaks(2)


def test_history_is_let_go() -> None:
    cell = ConductanceCell(ConductanceKnobs(), PULSES, seed=1)
    for n in range(1, 40):
        cell.advance(n * S)
        cell.current(n * S, 2_000_000, "post1")
        _spikes(cell, n * S + 900_000_000)
        cell.forget(n * S)
    assert sum(len(values) for _, values in cell._segments) < 40_000
    assert len(cell._pulses) <= 2


def test_history_is_bounded_when_nobody_tells_it_to_forget() -> None:
    cell = ConductanceCell(ConductanceKnobs(), PULSES, seed=1)
    for n in range(1, 200):
        at_ns = 5 * n * S
        cell.artefact(at_ns, "pre1")
        cell.epsp(at_ns, "s1", 1.0)
        _spikes(cell, at_ns + 900_000_000)
    assert cell._segments[0][0] * 25_000 > 5 * 199 * S - 90 * S
    assert max(len(cell._events), len(cell._artefacts)) < 30
