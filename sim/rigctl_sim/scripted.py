"""The scripted cell: spikes are drawn or planted, the trace is a sum of templates.

A spike pulse evokes one spike at the line's latency plus creep plus jitter; or none, or two. Creep
grows linearly with the count of spike pulses and stays at its full value after ``creep_over``.
EPSPs never fire it.
"""

from __future__ import annotations

import heapq
from collections import deque
from math import ceil, exp, log

import numpy as np
import numpy.typing as npt
from msgspec import Struct

from rigctl_sim.knobs import ScriptedKnobs
from rigctl_sim.streams import stream, stream_key

Floats = npt.NDArray[np.float64]

# How long an event of each kind still shows in the trace: until less than a microvolt is left.
_SHOWS_TAUS = 14.0
_SPIKE_SHOWS_NS = 160_000_000
_ARTEFACT_SHOWS_NS = 5_000_000
_ARTEFACT_MS = 0.25
_SPIKE_MV, _SPIKE_WIDTH_MS, _AFTER_MV, _AFTER_MS = 100.0, 0.35, 6.0, 8.0


class PulseLine(Struct, frozen=True):
    """What a line that drives post or step does to the cell."""

    current_pa: float
    evokes_spike: bool
    latency_ns: int
    latency_sd_ns: int


class ScriptedCell:
    """See :class:`rigctl_sim.interfaces.Cell`."""

    def __init__(
        self, knobs: ScriptedKnobs, lines: dict[str, PulseLine], creep_over: int, seed: int
    ) -> None:
        self._knobs = knobs
        self._lines = lines
        self._creep_over = max(2, knobs.creep_over or creep_over)
        self._rng = stream(seed, "scripted cell")
        self._noise_key = stream_key(seed, "recording noise")
        self._pulses = 0
        self._misses = frozenset(knobs.miss_at)
        self._doublets = frozenset(knobs.doublet_at)
        self._spikes: list[int] = []
        self._next_own_ns: int | None = None
        if knobs.spontaneous_hz > 0:
            self._next_own_ns = self._own_interval_ns()
        self._epsps: deque[tuple[int, float]] = deque()
        self._shown_spikes: deque[int] = deque()
        self._steps: deque[tuple[int, int, float]] = deque()
        self._artefacts: deque[int] = deque()
        self._epsp_shows_ns = round(max(knobs.rise_ms, knobs.decay_ms) * _SHOWS_TAUS * 1e6)
        self._step_shows_ns = round(knobs.membrane_tau_ms * _SHOWS_TAUS * 1e6)
        self._decays: dict[tuple[float, float], Floats] = {}

    def _own_interval_ns(self) -> int:
        return round(self._rng.exponential(1e9 / self._knobs.spontaneous_hz))

    def epsp(self, onset_ns: int, pathway: str, strength: float) -> None:
        """An EPSP begins."""
        self._epsps.append((onset_ns, strength * self._knobs.epsp_mv))

    def current(self, at_ns: int, width_ns: int, line: str) -> None:
        """A current pulse begins."""
        pulse = self._lines[line]
        self._steps.append((at_ns, width_ns, pulse.current_pa))
        if not pulse.evokes_spike:
            return
        self._pulses += 1
        knobs = self._knobs
        miss, double, jitter = self._rng.random(), self._rng.random(), self._rng.standard_normal()
        if self._pulses in self._misses or miss < knobs.miss_probability:
            return
        crept_ms = knobs.creep_ms * min(1.0, (self._pulses - 1) / (self._creep_over - 1))
        latency_ns = (
            pulse.latency_ns
            + round((knobs.latency_offset_ms + crept_ms) * 1e6)
            + round(jitter * pulse.latency_sd_ns)
        )
        peak_ns = at_ns + max(latency_ns, 300_000)
        heapq.heappush(self._spikes, peak_ns)
        if self._pulses in self._doublets or double < knobs.doublet_probability:
            heapq.heappush(self._spikes, peak_ns + round(knobs.doublet_gap_ms * 1e6))

    def artefact(self, at_ns: int, line: str) -> None:
        """A stimulus artefact."""
        self._artefacts.append(at_ns)

    def advance(self, until_ns: int) -> int | None:
        """Advance, or stop at the next spike."""
        own_ns = self._next_own_ns
        if (
            own_ns is not None
            and own_ns <= until_ns
            and (not self._spikes or own_ns < self._spikes[0])
        ):
            self._next_own_ns = own_ns + max(2_000_000, self._own_interval_ns())
            self._shown_spikes.append(own_ns)
            return own_ns
        if self._spikes and self._spikes[0] <= until_ns:
            peak_ns = heapq.heappop(self._spikes)
            self._shown_spikes.append(peak_ns)
            return peak_ns
        return None

    def trace_mv(self, start_ns: int, n: int, rate_hz: float) -> Floats:
        """Return what the amplifier shows; the noise belongs to the sweep that starts there."""
        knobs = self._knobs
        rng = np.random.default_rng([*self._noise_key, start_ns % (1 << 63)])
        trace = rng.standard_normal(n, dtype=np.float32).astype(np.float64)
        trace *= knobs.noise_mv
        trace += knobs.rest_mv
        per_ms = rate_hz / 1000

        def stretch(at_ns: int, shows_ns: int) -> tuple[Floats, float]:
            """Return the samples in which an event shows, and how long before the first it began.

            The part of the trace is a view: what is added to it is in the trace.
            """
            begun = (at_ns - start_ns) / 1e6 * per_ms
            first = max(0, ceil(begun))
            last = max(first, min(n, ceil(begun + shows_ns / 1e6 * per_ms)))
            return trace[first:last], (first - begun) / per_ms

        rise_ms, decay_ms = knobs.rise_ms, knobs.decay_ms
        if rise_ms == decay_ms:
            decay_ms *= 1.0001
        scale = 1 / _epsp_peak(rise_ms, decay_ms)
        for onset_ns, amplitude_mv in self._epsps:
            part, ms = stretch(onset_ns, self._epsp_shows_ns)
            shape = self._decay(decay_ms, ms, len(part), rate_hz)
            shape -= self._decay(rise_ms, ms, len(part), rate_hz)
            shape *= amplitude_mv * scale
            part += shape
        for at_ns, width_ns, current_pa in self._steps:
            mv_per_mohm = current_pa / 1000
            full_mv = knobs.input_resistance_mohm * mv_per_mohm
            tau_ms, width_ms = knobs.membrane_tau_ms, width_ns / 1e6
            part, ms = stretch(at_ns, width_ns)
            part -= full_mv * self._decay(tau_ms, ms, len(part), rate_hz)
            part += full_mv + knobs.series_resistance_mohm * mv_per_mohm
            part, ms = stretch(at_ns + width_ns, self._step_shows_ns)
            left_mv = full_mv * (1 - exp(-width_ms / tau_ms))
            part += left_mv * self._decay(tau_ms, ms, len(part), rate_hz)
        for at_ns in self._artefacts:
            part, ms = stretch(at_ns, _ARTEFACT_SHOWS_NS)
            part += knobs.artefact_mv * self._decay(_ARTEFACT_MS, ms, len(part), rate_hz)
        for peak_ns in self._shown_spikes:
            part, ms = stretch(peak_ns - 2_000_000, _SPIKE_SHOWS_NS)
            since_ms = np.arange(len(part)) / per_ms + (ms - 2.0)
            part += _spike_shape(since_ms)
        return trace

    def _decay(self, tau_ms: float, begun_ms: float, n: int, rate_hz: float) -> Floats:
        """Return n samples of exp(−t/τ), the first of them ``begun_ms`` after its beginning.

        One table for each time constant: an exponential shifted is an exponential scaled.
        """
        key = (tau_ms, rate_hz)
        table = self._decays.get(key)
        if table is None or len(table) < n:
            # Beyond 700 τ it is nothing, and exp would say so by underflowing.
            samples = np.arange(max(n, 1024)) * (1000 / (rate_hz * tau_ms))
            table = self._decays[key] = np.exp(-np.minimum(samples, 700.0))
        # Long after its beginning an event shows no more than 700 τ would either.
        values: Floats = table[:n] * exp(-min(begun_ms / tau_ms, 700.0))
        return values

    def forget(self, before_ns: int) -> None:
        """Drop what cannot show any more."""
        while self._epsps and self._epsps[0][0] + self._epsp_shows_ns < before_ns:
            self._epsps.popleft()
        while self._shown_spikes and self._shown_spikes[0] + _SPIKE_SHOWS_NS < before_ns:
            self._shown_spikes.popleft()
        while self._steps and sum(self._steps[0][:2]) + self._step_shows_ns < before_ns:
            self._steps.popleft()
        while self._artefacts and self._artefacts[0] + _ARTEFACT_SHOWS_NS < before_ns:
            self._artefacts.popleft()


def _epsp_peak(rise_ms: float, decay_ms: float) -> float:
    """Return the peak of a difference of exponentials."""
    peak_ms = log(decay_ms / rise_ms) * rise_ms * decay_ms / (decay_ms - rise_ms)
    return exp(-peak_ms / decay_ms) - exp(-peak_ms / rise_ms)


def _spike_shape(ms: Floats) -> Floats:
    """Return a spike's mV over the ms since its peak: a bell, then an after-hyperpolarisation."""
    shape: Floats = _SPIKE_MV * np.exp(-((ms / _SPIKE_WIDTH_MS) ** 2) / 2)
    after = np.maximum(ms, 0) / _AFTER_MS
    shape -= _AFTER_MV * after * np.exp(1 - after)
    return shape
