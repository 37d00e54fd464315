"""What may enter the session core. Each input becomes one row of the record's event table.

``at_ns`` is the session time at which the program learnt of it; times and ticks of the happening
itself are fields of their own. Replay decodes these rows and feeds them to a fresh core.
"""

from __future__ import annotations

from typing import Literal

import msgspec
from msgspec import Struct


class Input(Struct, frozen=True):
    """Base of all inputs."""

    at_ns: int


class Header(Input, frozen=True, tag="header"):
    """The first input: the whole header of the record."""

    header: dict[str, str]


class Connected(Input, frozen=True, tag="connected"):
    """The box answered hello."""

    firmware: str
    boot: int
    tick_num: int
    tick_den: int
    queue_slots: int
    outputs: tuple[str, ...]
    inputs: tuple[str, ...]
    min_width_ticks: int
    max_width_ticks: int
    min_spacing_ticks: int


class Armed(Input, frozen=True, tag="armed"):
    """Both arming steps are done."""

    boot: int


class Fired(Input, frozen=True, tag="fired"):
    """The box fired a trigger at ``tick`` (unwrapped)."""

    trigger: int
    tick: int
    boot: int


class DroppedLate(Input, frozen=True, tag="dropped_late"):
    """A trigger could not be in time: dropped, by the box or before it was uploaded."""

    trigger: int
    by: Literal["box", "feeder"]


class TriggerRefused(Input, frozen=True, tag="refused"):
    """The box refused a trigger by a limit of its own."""

    trigger: int
    reason: str


class Cancelled(Input, frozen=True, tag="cancelled"):
    """A withdrawn trigger will not fire."""

    trigger: int


class Edge(Input, frozen=True, tag="edge"):
    """A rising edge on an input line at ``tick`` (unwrapped)."""

    line: str
    tick: int
    boot: int


class Complete(Input, frozen=True, tag="complete"):
    """Everything that the box saw up to ``through_tick`` has been told."""

    through_tick: int


class SweepTaken(Input, frozen=True, tag="sweep"):
    """A sweep arrived; its samples enter by their hash."""

    start_ns: int
    cell: str | None
    clamp: str | None
    rate_hz: float
    unit: str
    scale: float
    n: int
    sha256: str


class Synced(Input, frozen=True, tag="sync"):
    """One clock exchange, evaluated."""

    offset_ns: int
    bound_ns: int
    skew_ppm: float
    round_trip_ns: int


class Woke(Input, frozen=True, tag="woke"):
    """The time that the core asked to be woken at has come."""


class LinkFault(Input, frozen=True, tag="link_fault"):
    """The link mended something: a damaged frame, a repeated request."""

    what: str
    count: int


class LinkLost(Input, frozen=True, tag="link_lost"):
    """The box does not answer any more."""

    what: str


class BoxReset(Input, frozen=True, tag="box_reset"):
    """The box started anew in the middle of a session."""

    boot: int


class BoxDisarmed(Input, frozen=True, tag="box_disarmed"):
    """The box is disarmed, and why it says so."""

    reason: str


class Operator(Input, frozen=True, tag="operator"):
    """A command from the person at the rig (or the rehearsal's stand-in)."""

    command: Literal["go", "pause", "resume", "end_induction", "abandon", "note", "mark"]
    text: str = ""


AnyInput = (
    Header
    | Connected
    | Armed
    | Fired
    | DroppedLate
    | TriggerRefused
    | Cancelled
    | Edge
    | Complete
    | SweepTaken
    | Synced
    | Woke
    | LinkFault
    | LinkLost
    | BoxReset
    | BoxDisarmed
    | Operator
)

_encoder = msgspec.json.Encoder(order="deterministic")
_decoder = msgspec.json.Decoder(AnyInput)
INPUT_KINDS: frozenset[str] = frozenset(str(cls.__struct_config__.tag) for cls in AnyInput.__args__)


def encode(item: AnyInput) -> tuple[str, str]:
    """Return an input as ``(kind, body)``: its tag and its JSON."""
    return str(type(item).__struct_config__.tag), _encoder.encode(item).decode()


def decode(body: str) -> AnyInput:
    """Return the input that :func:`encode` wrote.

    Raises
    ------
    msgspec.ValidationError
        The body is not an input of this version.
    """
    return _decoder.decode(body)
