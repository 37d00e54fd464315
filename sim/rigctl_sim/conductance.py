"""The conductance cell: one compartment, integrated; spikes emerge from pulses and EPSPs.

The kinetics are those of Hodgkin & Huxley 1952, adapted, not published as a neuron:

* sodium 60 and potassium 15 mS/cm² instead of 120 and 36, leak 0.04 mS/cm² with its reversal set so
  that the cell rests at −70 mV: at the usual 100 pF that is an input resistance of about 88 MΩ
  (measured by a −20 pA step) and a membrane time constant of about 8.5 ms;
* all rates four times faster (about 19 °C at a Q10 of 3);
* EPSPs are conductances (difference of exponentials, reversal 0 mV), scaled at rest.

It is integrated on a fixed grid by exponential Euler, gates from tables, and only in windows: from
an input until 400 ms after the last one. Current noise runs at full size for the first 150 ms after
an input, fades out by 180 ms, and what is left decays below 1e-6 mV by the window's end; between
windows the cell rests. Results do not depend on how time is cut into calls.
"""

from __future__ import annotations

import sys
from collections import deque
from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from rigctl_sim.compiled import COMPILED, NOT_COMPILED, compiled
from rigctl_sim.hodgkin_huxley import E_K, E_NA, rates, steady
from rigctl_sim.knobs import ConductanceKnobs
from rigctl_sim.streams import stream, stream_key

Floats = npt.NDArray[np.float64]

STEP_NS = 25_000
_DT_MS = STEP_NS / 1e6
_REST_MV = -70.0
_G_NA, _G_K, _G_LEAK = 60.0, 15.0, 0.04
_FASTER = 4.0
_E_EPSP = 0.0
_NOISE_FULL = 150_000_000 // STEP_NS
_NOISE_GONE = 180_000_000 // STEP_NS
_WINDOW = 400_000_000 // STEP_NS
_V_LOW, _V_HIGH, _PER_MV = -120.0, 80.0, 20
_SPIKE_ABOVE_MV = 0.0
_ARTEFACT_MS = 0.25
_ARTEFACT_SHOWS_NS = 5_000_000
_KEEP_STEPS = 1 << 16
_MINSTD, _MINSTD_MOD = 16_807, 2_147_483_647

# Indices into the state vector.
_V, _M, _H, _N, _RISE, _DECAY, _NOISE, _DRAW, _BEFORE, _BEFORE2, _UP = range(11)


@compiled
def _run(
    state: Floats, tables: Floats, par: Floats, first: int, last: int, noise_from: int,
    event_at: npt.NDArray[np.int64], event_g: Floats,
    pulse_on: npt.NDArray[np.int64], pulse_off: npt.NDArray[np.int64], pulse_pa: Floats,
    out: Floats,
) -> int:  # fmt: skip
    """Integrate steps ``first`` to ``last`` (not included); stop after a spike's peak.

    Returns
    -------
    int
        The step reached: ``last``, or the one after the peak was seen (then ``state[_UP]`` is 2).
    """
    c, g_na, g_k, g_leak, e_leak, holding, rise_keep, decay_keep, g_norm, noise_keep, noise_step = (
        par[0], par[1], par[2], par[3], par[4], par[5], par[6], par[7], par[8], par[9], par[10]
    )  # fmt: skip
    v, m, h, n = state[0], state[1], state[2], state[3]
    rise, decay, noise, draw = state[4], state[5], state[6], state[7]
    before, before2, up = state[8], state[9], state[10]
    rows = tables.shape[1] - 2
    e = 0
    while e < len(event_at) and event_at[e] < first:
        e += 1
    k = first
    while k < last:
        while e < len(event_at) and event_at[e] <= k:
            rise += event_g[e]
            decay += event_g[e]
            e += 1
        current = holding
        for p in range(len(pulse_on)):
            if pulse_on[p] <= k and k < pulse_off[p]:
                current += pulse_pa[p]
        draw = (16807.0 * draw) % 2147483647.0
        since = k - noise_from
        size = 1.0
        if since > 6000:
            size = max(0.0, (7200.0 - since) / 1200.0)
        noise = noise * noise_keep + noise_step * (draw / 2147483647.0 - 0.5)
        current += noise * size
        x = (v + 120.0) * 20.0
        i = int(x)
        if i < 0:
            i = 0
        if i > rows:
            i = rows
        f = x - i
        m_inf = tables[0, i] + f * (tables[0, i + 1] - tables[0, i])
        m_keep = tables[1, i] + f * (tables[1, i + 1] - tables[1, i])
        h_inf = tables[2, i] + f * (tables[2, i + 1] - tables[2, i])
        h_keep = tables[3, i] + f * (tables[3, i + 1] - tables[3, i])
        n_inf = tables[4, i] + f * (tables[4, i + 1] - tables[4, i])
        n_keep = tables[5, i] + f * (tables[5, i + 1] - tables[5, i])
        m = m_inf + (m - m_inf) * m_keep
        h = h_inf + (h - h_inf) * h_keep
        n = n_inf + (n - n_inf) * n_keep
        g1 = g_na * m * m * m * h
        g2 = g_k * n * n * n * n
        g3 = g_norm * (decay - rise)
        total = g1 + g2 + g_leak + g3
        v_inf = (g1 * 50.0 + g2 * -77.0 + g_leak * e_leak + g3 * 0.0 + current) / total
        v = v_inf + (v - v_inf) * np.exp(-0.025 * total / c)
        rise *= rise_keep
        decay *= decay_keep
        out[k - first] = v
        k += 1
        if v > 0.0 and before <= 0.0:
            up = 1.0
        if up == 1.0 and v < before and before >= before2:
            up = 2.0
        before2 = before
        before = v
        if up == 2.0:
            break
    state[0], state[1], state[2], state[3] = v, m, h, n
    state[4], state[5], state[6], state[7] = rise, decay, noise, draw
    state[8], state[9], state[10] = before, before2, up
    return k


def _tables() -> Floats:
    """Return settled value and one step's persistence of each gate over the potential."""
    volts = np.arange(round((_V_HIGH - _V_LOW) * _PER_MV) + 2) / _PER_MV + _V_LOW
    tables = np.empty((6, len(volts)))
    for column, v in enumerate(volts):
        alpha_beta = rates(float(v))
        for gate in range(3):
            alpha, beta = alpha_beta[2 * gate], alpha_beta[2 * gate + 1]
            tables[2 * gate, column] = alpha / (alpha + beta)
            tables[2 * gate + 1, column] = np.exp(-_DT_MS * _FASTER * (alpha + beta))
    return tables


class ConductanceCell:
    """See :class:`rigctl_sim.interfaces.Cell`.

    Parameters
    ----------
    knobs : ConductanceKnobs
    pulses_pa : mapping of str to float
        Current of each line that drives post or step.
    seed : int
    """

    def __init__(self, knobs: ConductanceKnobs, pulses_pa: Mapping[str, float], seed: int) -> None:
        if not COMPILED:
            print(NOT_COMPILED, file=sys.stderr)
        self._knobs = knobs
        self._pulses_pa = dict(pulses_pa)
        self._tables = _tables()
        self._noise_key = stream_key(seed, "recording noise")
        self._draw = float(stream(seed, "membrane noise").integers(1, _MINSTD_MOD - 1))
        self._events: deque[tuple[int, float]] = deque()
        self._pulses: deque[tuple[int, int, float]] = deque()
        self._artefacts: deque[int] = deque()
        self._segments: deque[tuple[int, Floats]] = deque()
        self._step = 0
        self._last_input: int | None = None
        self._par = self._parameters(0)
        self._rest = self._find_rest()
        self._state = self._resting_state()
        self._g_per_strength = 1.0
        self._g_per_strength = self._calibrate()

    # --- parameters and rest ----------------------------------------------------------------

    def _parameters(self, at_step: int) -> Floats:
        """Return the kernel's parameters; nS, pF, pA, mV (1 mS/cm² on 1 µF/cm² is 1 nS per pF)."""
        knobs = self._knobs
        c = knobs.capacitance_pf
        m, h, n = steady(_REST_MV)
        g_na, g_k = _G_NA * c, _G_K * c
        minutes = at_step * STEP_NS / 6e10
        drift = 1.0 + knobs.leak_drift_pct_per_min / 100.0 * minutes
        leak = _G_LEAK * c
        # The reversal that balances the other currents at −70 mV, without holding or drift.
        active = g_na * m**3 * h * (_REST_MV - E_NA) + g_k * n**4 * (_REST_MV - E_K)
        e_leak = _REST_MV + active / leak
        rise_keep = np.exp(-_DT_MS / knobs.rise_ms)
        decay_keep = np.exp(-_DT_MS / max(knobs.decay_ms, knobs.rise_ms * 1.001))
        noise_keep = np.exp(-_DT_MS / knobs.noise_tau_ms)
        # Uniform steps of this size give the stationary SD; over many steps they sum to a normal.
        noise_step = knobs.noise_pa * np.sqrt(12.0 * (1.0 - noise_keep**2))
        return np.array(
            [c, g_na, g_k, max(leak * drift, leak * 0.05), e_leak, knobs.holding_pa, rise_keep,
             decay_keep, 1.0, noise_keep, noise_step]
        )  # fmt: skip

    def _find_rest(self) -> float:
        _c, g_na, g_k, g_leak, e_leak, holding = self._par[:6].tolist()
        low, high = -110.0, -45.0
        for _ in range(80):
            v = (low + high) / 2
            m, h, n = steady(v)
            inward = holding - (
                g_na * m**3 * h * (v - E_NA) + g_k * n**4 * (v - E_K) + g_leak * (v - e_leak)
            )
            low, high = (v, high) if inward > 0 else (low, v)
        return (low + high) / 2

    def _resting_state(self) -> Floats:
        m, h, n = steady(self._rest)
        v = self._rest
        return np.array([v, m, h, n, 0.0, 0.0, 0.0, self._draw, v, v, 0.0])

    def _calibrate(self) -> float:
        """Return the conductance, nS, that makes strength 1 an EPSP of the wanted size."""
        quiet = self._par.copy()
        quiet[10] = 0.0
        none = np.zeros(0, dtype=np.int64)
        steps = 60_000_000 // STEP_NS

        def peak(g: float) -> float:
            state = self._resting_state()
            # The kernel stops at a spike: what it does not write must not be read as a peak.
            out = np.full(steps, self._rest)
            at, size = np.array([0], dtype=np.int64), np.array([g])
            _run(state, self._tables, quiet, 0, steps, 0, at, size, none, none,
                 np.zeros(0), out)  # fmt: skip
            return float(out.max()) - self._rest

        if self._knobs.epsp_mv == 0:
            return 0.0
        low, high = 0.0, 200.0
        for _ in range(40):
            g = (low + high) / 2
            low, high = (low, g) if peak(g) > self._knobs.epsp_mv else (g, high)
        return (low + high) / 2

    # --- inputs -----------------------------------------------------------------------------

    def _input(self, at_ns: int) -> int:
        """Open a window, or keep it open; return the step at which the input takes effect."""
        step = max(self._step, -(-at_ns // STEP_NS))
        if self._last_input is None:
            # The world may stand still for minutes between windows: begin where the input is.
            self._step = step
            self._par = self._parameters(step)
            if self._knobs.leak_drift_pct_per_min:
                self._rest = self._find_rest()
            self._draw = float(self._state[_DRAW])
            self._state = self._resting_state()
        self._last_input = max(self._last_input or 0, step)
        return step

    def epsp(self, onset_ns: int, pathway: str, strength: float) -> None:
        """An EPSP begins."""
        self._events.append((self._input(onset_ns), strength * self._g_per_strength))

    def current(self, at_ns: int, width_ns: int, line: str) -> None:
        """A current pulse begins."""
        on = self._input(at_ns)
        off = on + max(1, round(width_ns / STEP_NS))
        self._pulses.append((on, off, self._pulses_pa[line]))
        self._last_input = max(self._last_input or 0, off)

    def artefact(self, at_ns: int, line: str) -> None:
        """A stimulus artefact."""
        self._artefacts.append(at_ns)

    # --- time -------------------------------------------------------------------------------

    def advance(self, until_ns: int) -> int | None:
        """Advance, or stop at the next spike."""
        target = until_ns // STEP_NS
        if self._last_input is None:
            return None
        if target <= self._step:
            return None
        end = self._last_input + _WINDOW
        last = min(target, end)
        peak_ns = self._integrate(last)
        if peak_ns is not None:
            return peak_ns
        if self._step >= end:
            self._last_input = None
        return None

    def _integrate(self, last: int) -> int | None:
        assert self._last_input is not None
        first = self._step
        out = np.empty(last - first)
        events = [(at, g) for at, g in self._events if at >= first]
        pulses = [p for p in self._pulses if p[1] > first]
        reached = _run(
            self._state,
            self._tables,
            self._par,
            first,
            last,
            self._last_input,
            np.array([at for at, _ in events], dtype=np.int64),
            np.array([g for _, g in events]),
            np.array([p[0] for p in pulses], dtype=np.int64),
            np.array([p[1] for p in pulses], dtype=np.int64),
            np.array([p[2] for p in pulses]),
            out,
        )
        self._step = reached
        self._segments.append((first, out[: reached - first]))
        if self._state[_UP] != 2.0:
            return None
        self._state[_UP] = 0.0
        return self._peak_ns()

    def _peak_ns(self) -> int:
        """Return the peak just passed, between grid points by a parabola through three of them."""
        after, top, before = (
            self._at(self._step - 1),
            self._at(self._step - 2),
            self._at(self._step - 3),
        )
        bend = after - 2.0 * top + before
        shift = 0.0 if bend == 0 else 0.5 * (before - after) / bend
        # A potential written at step k is the one at the end of that step.
        return round((self._step - 1 + shift) * STEP_NS)

    def _at(self, step: int) -> float:
        for first, values in reversed(self._segments):
            if first <= step < first + len(values):
                return float(values[step - first])
        return self._rest

    # --- the trace --------------------------------------------------------------------------

    def trace_mv(self, start_ns: int, n: int, rate_hz: float) -> Floats:
        """Return what the amplifier shows."""
        knobs = self._knobs
        rng = np.random.default_rng([*self._noise_key, start_ns % (1 << 63)])
        trace = np.full(n, self._rest)
        at_ns = start_ns + np.arange(n) * (1e9 / rate_hz)
        position = at_ns / STEP_NS - 1.0
        for first, values in self._segments:
            begin, end = np.searchsorted(position, [first, first + len(values)])
            if end > begin:
                # The last point stands for the stretch up to the next segment's first.
                x = position[begin:end] - first
                trace[begin:end] = np.interp(x, np.arange(len(values)), values)
        electrode_pa = np.full(n, knobs.holding_pa)
        for on, off, current_pa in self._pulses:
            begin, end = np.searchsorted(at_ns, [on * STEP_NS, off * STEP_NS])
            electrode_pa[begin:end] += current_pa
        trace += electrode_pa * knobs.series_resistance_mohm / 1000
        for artefact_ns in self._artefacts:
            begin, end = np.searchsorted(at_ns, [artefact_ns, artefact_ns + _ARTEFACT_SHOWS_NS])
            since_ms = (at_ns[begin:end] - artefact_ns) / 1e6
            trace[begin:end] += knobs.artefact_mv * np.exp(-since_ms / _ARTEFACT_MS)
        trace += rng.standard_normal(n, dtype=np.float32) * knobs.recording_noise_mv
        return trace

    def forget(self, before_ns: int) -> None:
        """Drop what lies before ``before_ns``."""
        before = before_ns // STEP_NS
        while self._segments and self._segments[0][0] + len(self._segments[0][1]) < before:
            self._segments.popleft()
        while self._pulses and self._pulses[0][1] < min(before, self._step):
            self._pulses.popleft()
        while self._events and self._events[0][0] < min(before, self._step):
            self._events.popleft()
        while self._artefacts and self._artefacts[0] + _ARTEFACT_SHOWS_NS < before_ns:
            self._artefacts.popleft()
