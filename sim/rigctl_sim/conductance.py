"""The conductance cell: one compartment, integrated; spikes emerge from pulses and EPSPs.

Its kinetics, and how they were adapted, are in :mod:`rigctl_sim.membrane`. It is integrated on a
fixed grid, and only in windows: from an input until 400 ms after the last one, longer when it has
not settled within 1e-6 mV by then (slow EPSPs, or a cell that fires by itself). Current noise
starts at nothing with a window, runs at full size until 150 ms after its last input and fades out
by 180 ms; between windows the cell rests. Results do not depend on how time is cut into calls.
"""

from __future__ import annotations

import functools
import sys
from collections import deque
from collections.abc import Mapping

import numpy as np

from rigctl_sim import membrane
from rigctl_sim.compiled import COMPILED, NOT_COMPILED
from rigctl_sim.knobs import ConductanceKnobs
from rigctl_sim.membrane import PEAKED, STEP_NS, UP, Floats, V
from rigctl_sim.streams import stream, stream_key

_WINDOW = 400_000_000 // STEP_NS
_LONGER = 100_000_000 // STEP_NS
# From here on a peak may be less than two steps away.
_NEAR_PEAK_MV = -40.0
_ARTEFACT_MS = 0.25
_ARTEFACT_SHOWS_NS = 5_000_000
# Nobody asks for more: the longest sweep and what may come before its first pulse. Without an
# acquisition nobody tells the cell to forget.
_KEEP_NS = 80_000_000_000
_MINSTD_MOD = 2_147_483_647


@functools.cache
def _say_not_compiled() -> None:
    print(NOT_COMPILED, file=sys.stderr)


class ConductanceCell:
    """See :class:`rigctl_sim.interfaces.Cell`.

    Parameters
    ----------
    knobs : ConductanceKnobs
    pulses_pa : mapping of str to float
        Current of each line that drives post or step.
    seed : int

    Raises
    ------
    InputError
        When the knobs contradict each other: no rest, no such EPSP without a spike.
    """

    def __init__(self, knobs: ConductanceKnobs, pulses_pa: Mapping[str, float], seed: int) -> None:
        if not COMPILED:
            _say_not_compiled()
        self._knobs = knobs
        self._pulses_pa = dict(pulses_pa)
        self._tables = membrane.gate_tables()
        self._par = membrane.parameters(knobs, 0)
        membrane.check(knobs, self._par, self._tables)
        self._g_per_strength = membrane.epsp_ns_per_strength(knobs, self._par, self._tables)
        self._noise_key = stream_key(seed, "recording noise")
        draw = float(stream(seed, "membrane noise").integers(1, _MINSTD_MOD - 1))
        self._rest = membrane.rest_mv(self._par, self._tables)
        self._state = membrane.resting_state(self._rest, draw, self._tables)
        # The step integrated to; the window's last input and its end (None: the cell rests).
        self._step = 0
        self._last_input = 0
        self._end: int | None = None
        # The step at which the last spike's peak was seen: inputs act from there on.
        self._peak_seen = 0
        self._events: deque[tuple[int, float]] = deque()
        self._pulses: deque[tuple[int, int, float]] = deque()
        self._artefacts: deque[int] = deque()
        self._segments: deque[tuple[int, Floats]] = deque()

    # --- inputs -----------------------------------------------------------------------------

    def _input(self, at_ns: int) -> int:
        """Open a window, or keep it open; return the step at which the input takes effect."""
        step = max(self._step, self._peak_seen, -(-at_ns // STEP_NS))
        opens = self._end is None
        if self._knobs.leak_drift_pct_per_min:
            self._par = membrane.parameters(self._knobs, step)
            self._rest = membrane.rest_mv(self._par, self._tables)
        if opens:
            # The world may stand still for minutes between windows: begin where the input is.
            self._step = step
            draw = float(self._state[membrane.DRAW])
            self._state = membrane.resting_state(self._rest, draw, self._tables)
        self._keep_open(step)
        self.forget(at_ns - _KEEP_NS)
        return step

    def _keep_open(self, step: int) -> None:
        self._last_input = step if self._end is None else max(self._last_input, step)
        self._end = max(self._end or 0, self._last_input + _WINDOW)

    def epsp(self, onset_ns: int, pathway: str, strength: float) -> None:
        """An EPSP begins."""
        self._events.append((self._input(onset_ns), strength * self._g_per_strength))

    def current(self, at_ns: int, width_ns: int, line: str) -> None:
        """A current pulse begins."""
        on = self._input(at_ns)
        off = on + max(1, round(width_ns / STEP_NS))
        self._pulses.append((on, off, self._pulses_pa[line]))
        self._keep_open(off)

    def artefact(self, at_ns: int, line: str) -> None:
        """A stimulus artefact."""
        self._artefacts.append(at_ns)

    # --- time -------------------------------------------------------------------------------

    def advance(self, until_ns: int) -> int | None:
        """Advance, or stop at the next spike."""
        target = until_ns // STEP_NS
        while self._end is not None:
            last = min(target, self._end)
            if last > self._step:
                self._step, values = self._integrate(self._state, last)
                self._segments.append((self._step - len(values), values))
                if self._state[UP] == PEAKED:
                    self._state[UP] = 0.0
                    return membrane.peak_ns(self._state, self._step)
            if self._step < self._end:
                return self._peak_ahead(until_ns)
            if membrane.is_settled(self._state, self._rest, self._tables):
                self._end = None
            else:
                self._end += _LONGER
                self.forget(self._step * STEP_NS - _KEEP_NS)
        return None

    def _peak_ahead(self, until_ns: int) -> int | None:
        """Return the peak that lies before ``until_ns`` but shows only in the steps after it.

        Otherwise the world would hear of a spike after it has gone past it.
        """
        if self._state[V] < _NEAR_PEAK_MV:
            return None
        ahead = self._state.copy()
        reached, _ = self._integrate(ahead, self._step + 2)
        if ahead[UP] != PEAKED:
            return None
        peak_ns = membrane.peak_ns(ahead, reached)
        if peak_ns > until_ns:
            return None
        self._state[UP] = 0.0
        self._peak_seen = reached
        return peak_ns

    def _integrate(self, state: Floats, last: int) -> tuple[int, Floats]:
        """Integrate ``state`` from where the cell stands; return the step reached and the trace."""
        first = self._step
        out = np.empty(last - first)
        events = [(at, g) for at, g in self._events if at >= first]
        pulses = [p for p in self._pulses if p[1] > first]
        reached = membrane.run(
            state,
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
        return reached, out[: reached - first]

    # --- the trace --------------------------------------------------------------------------

    def trace_mv(self, start_ns: int, n: int, rate_hz: float) -> Floats:
        """Return what the amplifier shows."""
        knobs = self._knobs
        rng = np.random.default_rng([*self._noise_key, start_ns % (1 << 63)])
        at_ns = start_ns + np.arange(n) * (1e9 / rate_hz)
        trace = self._membrane_mv(at_ns / STEP_NS - 1.0)
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

    def _membrane_mv(self, position: Floats) -> Floats:
        """Return the potential at positions on the grid (k: the end of step k), interpolated.

        Each segment is joined to the one before it, so that it does not matter where one ends.
        """
        trace = np.full(len(position), self._rest)
        ended, last_mv = -1, self._rest
        for first, values in self._segments:
            joined = np.concatenate(([last_mv if ended == first else self._rest], values))
            ended, last_mv = first + len(values), values[-1]
            begin = np.searchsorted(position, first - 1)
            end = np.searchsorted(position, ended - 1, side="right")
            if end > begin:
                grid = np.arange(first - 1, ended)
                trace[begin:end] = np.interp(position[begin:end], grid, joined)
        if self._end is not None and ended == self._step:
            # Less than a step is not integrated yet.
            trace[np.searchsorted(position, ended - 1, side="right") :] = last_mv
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
