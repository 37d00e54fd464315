"""The transition table, walked."""

from __future__ import annotations

from collections import deque
from pathlib import Path

import pytest

from rigctl.session.states import (
    RUNNING,
    STATES,
    TRANSITIONS,
    NotAllowed,
    State,
    allowed,
    as_markdown,
    follow,
)

DEVELOPERS = Path(__file__).parents[2] / "DEVELOPERS.md"


def test_every_row_is_followed_and_no_row_stands_twice() -> None:
    seen = set()
    for row in TRANSITIONS:
        assert (row.source, row.cause) not in seen
        seen.add((row.source, row.cause))
        assert follow(row.source, row.cause, back_to="induction") == (row.to or "induction")


def test_what_is_not_in_the_table_is_not_possible() -> None:
    causes = {row.cause for row in TRANSITIONS}
    rows = {(row.source, row.cause) for row in TRANSITIONS}
    refused = 0
    for state in STATES:
        for cause in causes:
            assert allowed(state, cause) == ((state, cause) in rows)
            if (state, cause) not in rows:
                refused += 1
                with pytest.raises(NotAllowed, match=cause):
                    follow(state, cause)
    assert refused > len(rows)


def test_every_state_is_reached_from_idle_and_closed_is_reached_from_every_state() -> None:
    def reach(start: State) -> set[State]:
        seen, todo = {start}, deque([start])
        while todo:
            here = todo.popleft()
            for row in TRANSITIONS:
                targets = RUNNING if row.to is None else (row.to,)
                if row.source == here:
                    for to in targets:
                        if to not in seen:
                            seen.add(to)
                            todo.append(to)
        return seen

    assert reach("idle") == set(STATES)
    for state in STATES:
        assert "closed" in reach(state)


def test_nothing_pulses_before_arming_or_after_closing() -> None:
    into_running = {row.source for row in TRANSITIONS if row.to in RUNNING}
    assert into_running == {"armed", *RUNNING}
    assert {row.to for row in TRANSITIONS if row.source == "closing"} == {"closed"}
    assert not [row for row in TRANSITIONS if row.source == "closed"]


def test_resume_needs_something_to_go_back_to() -> None:
    with pytest.raises(NotAllowed, match="nothing to go back to"):
        follow("paused", "resume")


def test_the_guide_shows_this_very_table() -> None:
    text = DEVELOPERS.read_text(encoding="utf-8")
    shown = text.split("<!-- states -->")[1].split("<!-- /states -->")[0].strip()
    assert shown == as_markdown()
