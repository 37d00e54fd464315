"""The amplitude of an evoked response in a sweep."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

_BASE_MS = (6.0, 1.0)
_SEARCH_MS = 30.0
_AVERAGE_MS = 1.0


def response_amplitude(
    values: npt.NDArray[np.float64], rate_hz: float, stimulus_ms: float, onset_ms: float
) -> float | None:
    """Return the peak of a response above the level before the stimulus, or None where void.

    Parameters
    ----------
    values : ndarray, shape (n,)
        The sweep, in the unit that the result will have.
    rate_hz : float
        Sampling rate.
    stimulus_ms, onset_ms : float
        Time of the stimulus and of the response's expected onset, from the first sample.

    Returns
    -------
    float or None
        Mean over 1 ms around the extreme of the 30 ms after the onset, minus the mean from 6 to
        1 ms before the stimulus (ahead of the artefact). Signed: a downward response is negative.
        None when the sweep does not cover both stretches, or is not finite.

    Notes
    -----
    Averaging around the extreme limits the bias that picking the largest of noisy samples has; it
    does not remove it. Windows are common practice, no source.
    """
    per_ms = rate_hz / 1000
    base = slice(
        round((stimulus_ms - _BASE_MS[0]) * per_ms), round((stimulus_ms - _BASE_MS[1]) * per_ms)
    )
    first, last = round(onset_ms * per_ms), round((onset_ms + _SEARCH_MS) * per_ms)
    width = max(1, round(_AVERAGE_MS * per_ms))
    if base.start < 0 or base.stop <= base.start or last > len(values) or last - first < width:
        return None
    level = float(values[base].mean())
    # A running mean, so that the extreme is one of averages and not of single samples.
    sums = np.concatenate(([0.0], np.cumsum(values[first:last] - level)))
    means = (sums[width:] - sums[:-width]) / width
    amplitude = float(means[np.argmax(np.abs(means))])
    return amplitude if np.isfinite(amplitude) else None
