"""The box's clock as a function of world time, exact in integers, both ways."""

from __future__ import annotations

_BILLION = 1_000_000_000


class BoxClock:
    """A crystal that is off by some parts per million.

    Parameters
    ----------
    tick_ns : int
        What the box believes a tick to be.
    ppm : float
        How much too fast it runs (kept to the part per billion).
    boot_ns : int
        World time at which its count began.
    """

    def __init__(self, tick_ns: int, ppm: float, boot_ns: int) -> None:
        self.tick_ns = tick_ns
        self._fast = _BILLION + round(ppm * 1000)
        self._per_tick = _BILLION * tick_ns
        self.boot_ns = boot_ns

    def tick_at(self, at_ns: int) -> int:
        """Return the count at a world time."""
        return (at_ns - self.boot_ns) * self._fast // self._per_tick

    def first_ns_of(self, tick: int) -> int:
        """Return the first world nanosecond at which the count is ``tick``."""
        return self.boot_ns + -(-tick * self._per_tick // self._fast)

    def session_ns_at(self, at_ns: int) -> int:
        """Return the session time (box time, not cut to ticks) of a world time."""
        return (at_ns - self.boot_ns) * self._fast // _BILLION
