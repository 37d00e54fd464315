"""The amplifier's acquisition: sweeps around the box's pulses, timed on the session clock."""

from __future__ import annotations

import numpy as np

from rigctl.session.sweeps import Sweep
from rigctl_sim.boxclock import BoxClock
from rigctl_sim.interfaces import Cell
from rigctl_sim.knobs import AcquisitionKnobs

_RAIL = 32_767
_NEVER = 1 << 62


class SimAcquisition:
    """Starts a sweep shortly before a pulse, ends it well after the last one in it.

    A stretch of pulses longer than ``longest_s`` goes on in the next sweep.
    """

    def __init__(self, knobs: AcquisitionKnobs, clock: BoxClock, cell: Cell) -> None:
        self._knobs = knobs
        self._clock = clock
        self._cell = cell
        self._before_ns = round(knobs.before_ms * 1e6)
        self._after_ns = round(knobs.after_ms * 1e6)
        self._longest_ns = round(knobs.longest_s * 1e9)
        self._start_ns: int | None = None
        self._start_session_ns = 0
        self._free_from_ns: int | None = None
        self._wanted_ns = 0
        # World time at which the running sweep is complete.
        self.due_ns = _NEVER
        self._done: list[Sweep] = []

    def pulse(self, at_ns: int) -> None:
        """An output edge rose at ``at_ns`` (world time)."""
        if not self._knobs.on:
            return
        if self._start_ns is None:
            start_ns = at_ns - self._before_ns
            if self._free_from_ns is not None:
                # No sample is recorded twice: where sweeps would overlap, they follow each other.
                start_ns = max(start_ns, self._free_from_ns)
            self._begin(start_ns)
        self._wanted_ns = at_ns + self._after_ns
        self._plan_end()

    def _begin(self, start_ns: int) -> None:
        self._start_ns = start_ns
        # Asked now: the box may begin its count anew before the sweep is complete.
        self._start_session_ns = self._clock.session_ns_at(start_ns)

    def _plan_end(self) -> None:
        assert self._start_ns is not None
        self.due_ns = min(self._wanted_ns, self._start_ns + self._longest_ns)

    def complete(self) -> None:
        """Cut the sweep that is due; the cell has been advanced to its end."""
        start_ns, end_ns = self._start_ns, self.due_ns
        assert start_ns is not None
        n = (end_ns - start_ns) * round(self._knobs.rate_hz) // 1_000_000_000
        scale = self._knobs.mv_per_count
        counts = self._cell.trace_mv(start_ns, n, self._knobs.rate_hz)
        counts /= scale
        np.clip(np.rint(counts, out=counts), -_RAIL, _RAIL, out=counts)
        self._done.append(
            Sweep(
                self._start_session_ns,
                self._knobs.rate_hz,
                "mV",
                scale,
                counts.astype("<i2").tobytes(),
            )
        )
        self._free_from_ns = end_ns
        if self._wanted_ns > end_ns:
            self._begin(end_ns)
            self._plan_end()
        else:
            self._start_ns = None
            self.due_ns = _NEVER
        self._cell.forget(end_ns)

    @property
    def waiting(self) -> bool:
        """Whether a sweep waits to be taken."""
        return bool(self._done)

    def take(self) -> list[Sweep]:
        """Return the sweeps completed since the last call."""
        done, self._done = self._done, []
        return done
