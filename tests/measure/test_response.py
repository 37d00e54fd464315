"""The response amplitude: known truth, and void where there is nothing to measure."""

from __future__ import annotations

import numpy as np
import pytest

from rigctl.measure.response import response_amplitude


def _sweep(amplitude_mv: float, noise_mv: float, seed: int) -> np.ndarray:  # type: ignore[type-arg]
    rng = np.random.default_rng(seed)
    ms = np.arange(5000) / 10
    since = np.maximum(ms - 52.3, 0)
    shape = np.exp(-since / 14) - np.exp(-since / 1.2)
    trace = -70 + amplitude_mv * shape / shape.max() + rng.standard_normal(5000) * noise_mv
    trace[500:510] += 15 * np.exp(-np.arange(10) / 2.5)  # the artefact at 50 ms
    return trace


def test_without_noise_it_is_the_peak() -> None:
    found = response_amplitude(_sweep(3.0, 0.0, 0), 10_000, 50.0, 52.3)
    assert found == pytest.approx(3.0, abs=0.02)
    down = response_amplitude(-_sweep(3.0, 0.0, 0), 10_000, 50.0, 52.3)
    assert down == pytest.approx(-3.0, abs=0.02)


def test_bias_and_spread_under_noise_are_small_and_known() -> None:
    found = [response_amplitude(_sweep(3.0, 0.12, s), 10_000, 50.0, 52.3) for s in range(200)]
    values = np.array(found, dtype=float)
    # Picking the largest average leaves a bias of a few hundredths of a mV.
    assert 0 <= values.mean() - 3.0 < 0.08
    assert values.std() < 0.06


@pytest.mark.parametrize(("stimulus_ms", "onset_ms"), [(3.0, 5.3), (490.0, 492.3), (700, 702)])
def test_it_is_void_where_the_sweep_does_not_cover_it(stimulus_ms: float, onset_ms: float) -> None:
    assert response_amplitude(_sweep(3.0, 0.1, 1), 10_000, stimulus_ms, onset_ms) is None


def test_it_is_void_where_the_sweep_is_not_finite() -> None:
    trace = _sweep(3.0, 0.1, 1)
    trace[600] = np.nan
    assert response_amplitude(trace, 10_000, 50.0, 52.3) is None
