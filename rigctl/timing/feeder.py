"""Keeps the box's queue filled up to a horizon, by credits; drops what cannot be in time.

Pure: ticks and credits come in, batches go out.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable
from typing import NamedTuple

from rigctl.session.actions import ScheduledTrigger


class Feed(NamedTuple):
    """What to do now: upload these, in order, and report those as dropped."""

    upload: list[ScheduledTrigger]
    too_late: list[ScheduledTrigger]


class Feeder:
    """The triggers that the box does not have yet, sorted by tick.

    Parameters
    ----------
    horizon_ticks : int
        How far ahead of now triggers are uploaded.
    guard_ticks : int
        A trigger nearer than this cannot reach the box in time any more.
    """

    def __init__(self, horizon_ticks: int, guard_ticks: int) -> None:
        self._horizon_ticks = horizon_ticks
        self._guard_ticks = guard_ticks
        self._waiting: deque[ScheduledTrigger] = deque()

    def add(self, triggers: Iterable[ScheduledTrigger]) -> None:
        """Take on more triggers; all later than those already waiting."""
        self._waiting.extend(triggers)

    def feed(self, now_tick: int, credits: int) -> Feed:
        """Return what is within the horizon, as far as the box has room for it."""
        upload: list[ScheduledTrigger] = []
        too_late: list[ScheduledTrigger] = []
        waiting = self._waiting
        while waiting and waiting[0].tick <= now_tick + self._horizon_ticks:
            if waiting[0].tick < now_tick + self._guard_ticks:
                too_late.append(waiting.popleft())
            elif len(upload) < credits:
                upload.append(waiting.popleft())
            else:
                break
        return Feed(upload, too_late)

    def next_tick(self) -> int | None:
        """Return when the next waiting trigger comes within the horizon, or None."""
        return self._waiting[0].tick - self._horizon_ticks if self._waiting else None

    def withdraw(self, ids: Iterable[int]) -> list[int]:
        """Remove waiting triggers; return the ids that were still here."""
        wanted = set(ids)
        here = [t.id for t in self._waiting if t.id in wanted]
        self._waiting = deque(t for t in self._waiting if t.id not in wanted)
        return here
