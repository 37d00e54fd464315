"""Box clock to host clock, from four-stamp exchanges, with a bound.

The offset of one exchange is the midpoint of RFC 5905 §8, wrong by at most half the round trip.
Of each stretch the exchange with the shortest round trip is kept; skew comes from a straight line
through the kept ones. Between exchanges the bound grows by what the skew may be wrong.
"""

from __future__ import annotations

from collections import deque
from typing import NamedTuple

_STRETCH_NS = 10_000_000_000
_KEPT = 60
# Until a line can be fitted a crystal may be off by this much (common practice, no source).
_FREE_SKEW_PPM = 200.0
# What is left of the skew's error after a fit over several stretches (chosen, generous).
_FITTED_SKEW_PPM = 5.0


class Exchange(NamedTuple):
    """One evaluated exchange: host time = session time + ``offset_ns``, within ± ``bound_ns``."""

    session_ns: int
    offset_ns: int
    bound_ns: int
    round_trip_ns: int
    skew_ppm: float


class ClockSync:
    """Maps session time (box) to host time and back."""

    def __init__(self) -> None:
        self._kept: deque[Exchange] = deque(maxlen=_KEPT)
        self._skew = 0.0

    @property
    def ready(self) -> bool:
        """Whether there has been an exchange."""
        return bool(self._kept)

    def exchange(self, t1_ns: int, t2_ns: int, t3_ns: int, t4_ns: int) -> Exchange:
        """Take in one exchange.

        Parameters
        ----------
        t1_ns, t4_ns : int
            Host time of sending and receiving.
        t2_ns, t3_ns : int
            Session time at which the box received and answered.
        """
        round_trip_ns = (t4_ns - t1_ns) - (t3_ns - t2_ns)
        offset_ns = ((t1_ns - t2_ns) + (t4_ns - t3_ns)) // 2
        # Half the round trip, rounded up, covers any asymmetry of the two directions.
        bound_ns = max((round_trip_ns + 1) // 2, 1)
        here = Exchange(t3_ns, offset_ns, bound_ns, round_trip_ns, self._skew * 1e6)
        last = self._kept[-1] if self._kept else None
        if last is None or t3_ns // _STRETCH_NS != last.session_ns // _STRETCH_NS:
            self._kept.append(here)
            self._fit()
        elif round_trip_ns <= last.round_trip_ns:
            self._kept[-1] = here
            self._fit()
        return here._replace(skew_ppm=self._skew * 1e6)

    def _fit(self) -> None:
        """Least squares of offset over session time, through the kept exchanges."""
        n = len(self._kept)
        if n < 3:
            return
        first = self._kept[0]
        xs = [e.session_ns - first.session_ns for e in self._kept]
        ys = [e.offset_ns - first.offset_ns for e in self._kept]
        mean_x, mean_y = sum(xs) / n, sum(ys) / n
        spread = sum((x - mean_x) ** 2 for x in xs)
        if spread > 0:
            self._skew = (
                sum((x - mean_x) * (y - mean_y) for x, y in zip(xs, ys, strict=True)) / spread
            )

    def _offset_at(self, session_ns: int) -> int:
        last = self._kept[-1]
        return last.offset_ns + round(self._skew * (session_ns - last.session_ns))

    def host_ns(self, session_ns: int) -> int:
        """Return the host time of a session time."""
        return session_ns + self._offset_at(session_ns)

    def session_ns(self, host_ns: int) -> int:
        """Return the session time of a host time."""
        last = self._kept[-1]
        since_ns = host_ns - (last.session_ns + last.offset_ns)
        return last.session_ns + round(since_ns / (1.0 + self._skew))

    def bound_ns(self, session_ns: int) -> int:
        """Return how far the mapping may be wrong at a session time."""
        last = self._kept[-1]
        ppm = _FITTED_SKEW_PPM if len(self._kept) >= 6 else _FREE_SKEW_PPM
        return last.bound_ns + round(ppm * 1e-6 * abs(session_ns - last.session_ns))
