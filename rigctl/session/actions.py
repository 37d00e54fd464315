"""What the session core asks of the world around it. The runtime carries these out."""

from __future__ import annotations

from msgspec import Struct


class Action(Struct, frozen=True):
    """Base of all actions."""


class SayHello(Action, frozen=True):
    """Ask the box who it is."""


class Arm(Action, frozen=True):
    """Arm the box for this plan: both steps. The record is durable before the bytes leave."""

    plan_hash: str
    expiry_ms: int
    limits: dict[str, int]


class ScheduledTrigger(Struct, frozen=True, array_like=True):
    """A trigger with its absolute time in ticks of this boot (unwrapped)."""

    id: int
    line: str
    tick: int
    width_ticks: int


class Schedule(Action, frozen=True):
    """Have these triggers fired; sorted by tick."""

    triggers: tuple[ScheduledTrigger, ...]


class Withdraw(Action, frozen=True):
    """Take these triggers back; each is answered by Cancelled, or fires after all."""

    ids: tuple[int, ...]


class Probe(Action, frozen=True):
    """Ask the box for everything it has seen so far; answered by Complete."""


class AskOperator(Action, frozen=True):
    """Show the operator what a gate waits for; answered by the command ``go``."""

    phase: str
    text: str


class Disarm(Action, frozen=True):
    """Outputs low, queue empty, disarmed."""


class Finish(Action, frozen=True):
    """The session is closed: the runtime may end."""
