"""The limits that the box itself holds a raw command to: width, spacing, rate, duty, count.

Amplitude is not among them: a box switches digital lines and cannot read a stimulator's dial.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from typing import NamedTuple


class LineLimits(NamedTuple):
    """Limits of every line, in ticks; the count is over all lines while armed."""

    min_width: int
    max_width: int
    min_spacing: int
    max_per_s: int
    max_duty_permille: int
    max_pulses: int

    def tighter(self, other: LineLimits) -> LineLimits:
        """Return the tighter of each."""
        return LineLimits(
            max(self.min_width, other.min_width),
            min(self.max_width, other.max_width),
            max(self.min_spacing, other.min_spacing),
            min(self.max_per_s, other.max_per_s),
            min(self.max_duty_permille, other.max_duty_permille),
            min(self.max_pulses, other.max_pulses),
        )


class LimitKeeper:
    """Remembers accepted pulses for a second, line by line, and says what a new one violates."""

    def __init__(self, limits: LineLimits, ticks_per_s: int, lines: int) -> None:
        self._limits = limits
        self._per_s = ticks_per_s
        self._starts: list[list[int]] = [[] for _ in range(lines)]
        self._widths: list[dict[int, int]] = [{} for _ in range(lines)]
        self._count = 0

    def take(self, line: int, tick: int, width: int) -> str:
        """Accept a pulse and return an empty string, or return the reason against it."""
        limits = self._limits
        if not limits.min_width <= width <= limits.max_width:
            return "width over the limit"
        if self._count >= limits.max_pulses:
            return "count over the limit"
        starts, widths = self._starts[line], self._widths[line]
        at = bisect_left(starts, tick)
        if at and starts[at - 1] + widths[starts[at - 1]] > tick:
            return "a pulse inside another"
        if at < len(starts) and tick + width > starts[at]:
            return "a pulse inside another"
        if at and tick - starts[at - 1] < limits.min_spacing:
            return "spacing under the limit"
        if at < len(starts) and starts[at] - tick < limits.min_spacing:
            return "spacing under the limit"
        reason = self._windows(starts, widths, at, tick, width)
        if reason:
            return reason
        starts.insert(at, tick)
        widths[tick] = width
        self._count += 1
        self._forget(starts, widths)
        return ""

    def _windows(
        self, starts: list[int], widths: dict[int, int], at: int, tick: int, width: int
    ) -> str:
        """Check every second that the new pulse would lie in, each ending at a pulse."""
        last = bisect_right(starts, tick + self._per_s - 1)
        for end in [tick, *starts[at:last]]:
            first = bisect_right(starts, end - self._per_s)
            inside = starts[first : bisect_right(starts, end)]
            if len(inside) + 1 > self._limits.max_per_s:
                return "rate over the limit"
            high = width + sum(widths[s] for s in inside)
            if high * 1000 > self._limits.max_duty_permille * self._per_s:
                return "duty over the limit"
        return ""

    def _forget(self, starts: list[int], widths: dict[int, int]) -> None:
        """Drop what lies more than four seconds before the newest: no window reaches it."""
        old = bisect_left(starts, starts[-1] - 4 * self._per_s)
        if old > 64:
            for start in starts[:old]:
                del widths[start]
            del starts[:old]

    def give_back(self, line: int, tick: int) -> None:
        """A pulse was cancelled before it fired: it does not count."""
        if self._widths[line].pop(tick, None) is not None:
            self._starts[line].remove(tick)
            self._count -= 1
