"""The session's states and the one table of transitions between them.

Tests walk this table, ``DEVELOPERS.md`` shows it (:func:`as_markdown`), and the session core moves
by nothing else.
"""

from __future__ import annotations

from typing import Literal, NamedTuple, get_args

State = Literal[
    "idle",
    "checked",
    "connected",
    "armed",
    "baseline",
    "induction",
    "follow_up",
    "paused",
    "closing",
    "closed",
]
STATES: tuple[State, ...] = get_args(State)
RUNNING: tuple[State, ...] = ("baseline", "induction", "follow_up")


class Transition(NamedTuple):
    """One row of the table. ``to`` is ``None`` where the session goes back to what it paused."""

    source: State
    cause: str
    to: State | None
    meaning: str


def _rows() -> list[Transition]:
    rows = [
        Transition("idle", "plan_checked", "checked", "the plan compiled and passed its limits"),
        Transition("checked", "box_answered", "connected", "the box's hello agrees with the plan"),
        Transition("checked", "box_disagrees", "closing", "the box cannot do what the plan asks"),
        Transition("connected", "box_armed", "armed", "both arming steps done, bound to the hash"),
    ]
    for source in ("armed", *RUNNING):
        rows += [Transition(source, f"{to}_begins", to, f"a phase of kind {to}") for to in RUNNING]
        rows.append(Transition(source, "gate_failed", "closing", "a frozen start gate said no"))
    for source in RUNNING:
        rows += [
            Transition(source, "pause", "paused", "stop at the next pairing boundary"),
            Transition(source, "plan_done", "closing", "the last phase reached its declared end"),
        ]
    rows.append(Transition("paused", "resume", None, "go on with what was paused, shifted"))
    for source in ("checked", "connected", "armed", *RUNNING, "paused"):
        rows += [
            Transition(source, "abandon", "closing", "the operator gives the cell up"),
            Transition(source, "link_lost", "closing", "nothing valid came from the box any more"),
            Transition(source, "box_reset", "closing", "the box started anew; never resumed"),
            Transition(source, "box_disarmed", "closing", "the box disarmed itself or was stopped"),
        ]
    rows.append(Transition("closing", "record_complete", "closed", "all that the box knows is in"))
    return rows


TRANSITIONS: tuple[Transition, ...] = tuple(_rows())
_TABLE: dict[tuple[State, str], State | None] = {(t.source, t.cause): t.to for t in TRANSITIONS}


class NotAllowed(Exception):
    """A cause that the state does not know."""


def follow(state: State, cause: str, back_to: State | None = None) -> State:
    """Return the state after ``cause``.

    Parameters
    ----------
    state : State
    cause : str
    back_to : State, optional
        The state that was paused, for ``resume``.

    Raises
    ------
    NotAllowed
        The table has no such row.
    """
    try:
        to = _TABLE[state, cause]
    except KeyError:
        raise NotAllowed(f"{cause} is not possible in state {state}") from None
    if to is None:
        if back_to is None:
            raise NotAllowed(f"{cause} in state {state}: nothing to go back to")
        return back_to
    return to


def allowed(state: State, cause: str) -> bool:
    """Tell whether ``state`` knows ``cause``."""
    return (state, cause) in _TABLE


def as_markdown() -> str:
    """Return the table as Markdown, as it stands in DEVELOPERS.md."""
    lines = ["| from | on | to | meaning |", "|---|---|---|---|"]
    lines += [
        f"| {t.source} | {t.cause} | {t.to or 'the paused state'} | {t.meaning} |"
        for t in TRANSITIONS
    ]
    return "\n".join(lines)
