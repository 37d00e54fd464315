"""The conductance cell: spikes emerge, and how time is cut does not matter."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

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
@given(st.lists(st.integers(1, 399_999_999), min_size=1, max_size=12), st.integers(0, 5))
def test_how_time_is_cut_does_not_matter(cuts: list[int], seed: int) -> None:
    def run(stops: list[int]) -> tuple[list[int], np.ndarray]:  # type: ignore[type-arg]
        cell = ConductanceCell(ConductanceKnobs(), PULSES, seed)
        cell.advance(S)
        cell.epsp(S, "s1", 1.0)
        cell.current(S + 9_000_000, 2_000_000, "post1")
        spikes = []
        for stop in [*stops, 400_000_000]:
            spikes += _spikes(cell, S + stop)
        return spikes, cell.trace_mv(S - 10_000_000, 4000, 10_000)

    whole, cut = run([]), run(sorted(cuts))
    assert whole[0] == cut[0]
    assert np.array_equal(whole[1], cut[1])


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
