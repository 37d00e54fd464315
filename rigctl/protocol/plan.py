"""The plan: what will happen, in integer nanoseconds, and the hash that names it.

Compiled from a protocol and a rig by :mod:`rigctl.protocol.compile`. Within a phase every time is
relative to the phase's start, so that nothing accumulates; when a phase starts is decided at run
time and logged.
"""

from __future__ import annotations

import hashlib
from typing import Any, Literal

import msgspec
from msgspec import Struct

PhaseKind = Literal["baseline", "induction", "follow_up"]


class PlanLine(Struct, frozen=True):
    """An output line as the plan uses it.

    ``latency_ns`` runs from the trigger's edge to the protocol's reference event of this side.
    """

    name: str
    drives: Literal["pre", "post", "step"]
    pathway: str | None
    width_ns: int
    latency_ns: int
    latency_sd_ns: int
    latency_n: int
    evokes_spike: bool
    reference: str


class PlanInput(Struct, frozen=True):
    """An input line: ``edge + offset_ns`` is the reference event."""

    name: str
    detects: Literal["pre", "post"]
    pathway: str | None
    reference: str
    offset_ns: int
    blind_after_pre_ns: int


class PlanTrigger(Struct, frozen=True, array_like=True, gc=False):
    """One pulse. ``at_ns`` is relative to the phase's start and lies on the box's tick grid."""

    id: int
    line: str
    at_ns: int
    width_ns: int
    pairing: int | None
    pathway: str | None


class PlanSpikePair(Struct, frozen=True, array_like=True, gc=False):
    """One intended Δt: which triggers bring its two events about, ``k`` counted from 1."""

    k: int
    pre_trigger: int
    post_trigger: int
    target_dt_ns: int


class PlanPairing(Struct, frozen=True, array_like=True):
    """One presentation. Its triggers are those with its id; ``pairs`` is empty for a control.

    ``first_ns`` and ``last_ns`` are the first and last trigger edges, relative to the phase.
    """

    id: int
    pathway: str
    block: int
    target_dt_ns: int | None
    first_ns: int
    last_ns: int
    pairs: tuple[PlanSpikePair, ...]


class ContingentRule(Struct, frozen=True):
    """A rule that runs on the box: input edge → output pulse after a delay."""

    on_input: str
    line: str
    pathway: str
    target_dt_ns: int
    delay_ns: int
    width_ns: int
    silence_ns: int
    lockout_ns: int
    max_pairings: int
    duration_ns: int
    min_interval_ns: int


class PlanPhase(Struct, frozen=True):
    """One phase: a start gate, its own schedule or rule, and its end.

    ``duration_ns`` is the declared end: the phase is over when it has passed (for an induction:
    when the last block's last response window, or the rule's time or count, has passed).
    Triggers are sorted by ``at_ns``, then by line.
    """

    index: int
    name: str
    kind: PhaseKind
    gate: Literal["auto", "operator", "stable"]
    duration_ns: int
    triggers: tuple[PlanTrigger, ...]
    pairings: tuple[PlanPairing, ...]
    rule: ContingentRule | None = None


class RuleChoice(Struct, frozen=True):
    """A forecast rule, resolved: parameters are complete, nothing is looked up later.

    ``parameter_set`` is the published set's name, or ``"own"``.
    """

    rule: str
    parameter_set: str
    parameters: dict[str, float | str | None]
    source: str
    preparation: str | None
    source_pairings: int | None


class Plan(Struct, frozen=True):
    """Everything that the session core needs; what its hash covers."""

    plan_version: int
    title: str
    preparation: str | None
    pre_reference: str
    post_reference: str
    tick_ns: int
    lines: tuple[PlanLine, ...]
    inputs: tuple[PlanInput, ...]
    phases: tuple[PlanPhase, ...]
    forecasts: tuple[RuleChoice, ...]
    on_target_within_ns: int
    response_window_ns: int
    context_ns: int
    gate_max_trend_pct: float
    gate_interval_pct: float
    gate_min_sweeps: int
    box_limits: dict[str, int]
    declared: dict[str, Any]
    washout: dict[str, int | None]
    plan_seed: int

    def hash(self) -> str:
        """Return the plan hash: SHA-256 (hex) over the plan's canonical JSON."""
        return hashlib.sha256(msgspec.json.encode(self, order="deterministic")).hexdigest()

    def line(self, name: str) -> PlanLine:
        """Return the output line called ``name``."""
        for line in self.lines:
            if line.name == name:
                return line
        raise KeyError(name)

    @property
    def duration_ns(self) -> int:
        """Sum of the phases' durations, as if every gate passed at once."""
        return sum(phase.duration_ns for phase in self.phases)
