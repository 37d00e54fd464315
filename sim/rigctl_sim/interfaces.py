"""The seams of the simulated rig: a cell and a synapse, behind one interface each.

World time (``at_ns``) is the true time of the simulated world, in integer nanoseconds; the host's
and the box's clocks are functions of it.
"""

from __future__ import annotations

from typing import Protocol

import numpy as np
import numpy.typing as npt


class Synapse(Protocol):
    """One pathway's synapses: presynaptic event in, EPSP strength out; hidden plasticity."""

    def release(self, at_ns: int) -> float:
        """Return the EPSP strength of a presynaptic event at ``at_ns``, relative to the first
        average response at rest (1.0); 0.0 is a failure of transmission. Events come in
        non-decreasing time. Includes short-term depression, binomial failures and the expressed
        plastic change.
        """
        ...

    def post_spike(self, at_ns: int) -> None:
        """Tell the synapse of a postsynaptic spike (for the hidden rule)."""
        ...


class Cell(Protocol):
    """A cell under the electrode, told of inputs in non-decreasing time, advanced in between.

    The world never advances past an input that it has not delivered yet. Results do not depend on
    how the time is cut into calls of ``advance``.
    """

    def epsp(self, onset_ns: int, pathway: str, strength: float) -> None:
        """An EPSP begins at ``onset_ns`` (not before the time advanced to)."""
        ...

    def current(self, at_ns: int, width_ns: int, line: str) -> None:
        """A current pulse through the electrode begins at ``at_ns``: the pulse of ``line``."""
        ...

    def artefact(self, at_ns: int, line: str) -> None:
        """The stimulus artefact of ``line`` appears in the trace at ``at_ns``."""
        ...

    def advance(self, until_ns: int) -> int | None:
        """Advance to ``until_ns``, or stop at the next spike and return its peak time.

        After a spike at p ≤ ``until_ns`` the cell stands at p: call again to go on. Returns None
        when ``until_ns`` was reached without a spike.
        """
        ...

    def trace_mv(self, start_ns: int, n: int, rate_hz: float) -> npt.NDArray[np.float64]:
        """Return the recorded membrane potential, shape (n,), mV: what the amplifier shows
        (electrode, series resistance, artefact and noise included). The last sample must not lie
        after the time advanced to.
        """
        ...

    def forget(self, before_ns: int) -> None:
        """Let go of history before ``before_ns``; it will not be asked for again."""
        ...
