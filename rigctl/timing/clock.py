"""Time as an interface: three methods, passed in, so that an hour can be rehearsed in a second.

A clock's zero means nothing; only differences do. Wall time appears once, in the record's header.
"""

from __future__ import annotations

import time
from datetime import UTC, datetime
from typing import Protocol

# Virtual sessions begin here, so that a rehearsal's record does not depend on the day it ran.
VIRTUAL_EPOCH_UTC = "2000-01-01T00:00:00Z"


class Clock(Protocol):
    """What the program may ask of time."""

    def now_ns(self) -> int:
        """Return the host time in nanoseconds."""
        ...

    def sleep_until(self, at_ns: int) -> None:
        """Return at ``at_ns``, or at once if that has passed."""
        ...

    def utc(self) -> str:
        """Return the wall time, UTC, RFC 3339."""
        ...


class MonotonicClock:
    """The machine's monotonic clock."""

    def now_ns(self) -> int:
        """Return the host time in nanoseconds."""
        return time.monotonic_ns()

    def sleep_until(self, at_ns: int) -> None:
        """Sleep until ``at_ns``."""
        delay_ns = at_ns - time.monotonic_ns()
        if delay_ns > 0:
            time.sleep(delay_ns / 1e9)

    def utc(self) -> str:
        """Return the wall time, UTC, RFC 3339."""
        return datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


class VirtualClock:
    """A clock that moves only when told to: exact, and part of the public test kit."""

    def __init__(self, start_ns: int = 0) -> None:
        self._now_ns = start_ns

    def now_ns(self) -> int:
        """Return the virtual time in nanoseconds."""
        return self._now_ns

    def sleep_until(self, at_ns: int) -> None:
        """Move to ``at_ns``; never backwards."""
        self._now_ns = max(self._now_ns, at_ns)

    def utc(self) -> str:
        """Return the virtual epoch."""
        return VIRTUAL_EPOCH_UTC
