"""What is awaited: presentations, each to be judged once everything about it can be heard."""

from __future__ import annotations

import heapq
from collections import deque
from collections.abc import Iterable
from typing import NamedTuple

from rigctl.protocol.plan import PlanPairing


class Presentation(NamedTuple):
    """A pairing, or a single test stimulus (``pairing`` is None).

    Whatever belongs to it happens from ``first_ns`` on and before ``due_ns``.
    """

    due_ns: int
    first_ns: int
    pairing: PlanPairing | None


class Agenda:
    """The presentations that have not been judged, in the order in which they fall due."""

    def __init__(self, presentations: Iterable[Presentation] = ()) -> None:
        self._due = deque(sorted(presentations, key=lambda p: (p.due_ns, p.first_ns)))
        self._begins = [p.first_ns for p in self._due]
        heapq.heapify(self._begins)
        self._judged: list[int] = []

    def __len__(self) -> int:
        return len(self._due)

    def next_due_ns(self) -> int | None:
        """Return when the next one falls due."""
        return self._due[0].due_ns if self._due else None

    def take_due(self, through_ns: int) -> list[Presentation]:
        """Remove and return what falls due up to ``through_ns``."""
        taken = []
        while self._due and self._due[0].due_ns <= through_ns:
            taken.append(self._due.popleft())
            heapq.heappush(self._judged, taken[-1].first_ns)
        return taken

    def earliest_begin_ns(self) -> int | None:
        """Return when the earliest of those still awaited begins.

        No spike from then on may be called unplanned yet.
        """
        # Begins of judged ones leave the heap lazily, in equal pairs.
        while self._judged and self._begins[0] == self._judged[0]:
            heapq.heappop(self._begins)
            heapq.heappop(self._judged)
        return self._begins[0] if self._begins else None

    def begun_before(self, at_ns: int) -> list[Presentation]:
        """Return those that begin before ``at_ns``."""
        return [p for p in self._due if p.first_ns < at_ns]

    def rest(self) -> list[Presentation]:
        """Return all that is still awaited."""
        return list(self._due)
