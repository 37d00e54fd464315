"""The protocol file: what the experimenter writes, typed.

TOML is decoded into these structs by :mod:`rigctl.protocol.load`. Every key carries its unit, every
number its range, and the JSON Schema that editors use is generated from here. A protocol speaks of
*reference events at the synapse* (an EPSP's onset, a spike's peak), never of trigger times, unless
``offsets = "triggers"`` asks for it.
"""

from __future__ import annotations

from typing import Annotated, Literal

from msgspec import Meta, Struct, field

# One upper bound for everything written in ms, s or min: longer than any session is a typing error.
Ms = Annotated[float, Meta(ge=-600_000, le=600_000)]
PositiveMs = Annotated[float, Meta(gt=0, le=600_000)]
PositiveS = Annotated[float, Meta(gt=0, le=86_400)]
NonNegativeS = Annotated[float, Meta(ge=0, le=86_400)]
PositiveMin = Annotated[float, Meta(gt=0, le=1_440)]
RateHz = Annotated[float, Meta(gt=0, le=1_000)]
Count = Annotated[int, Meta(ge=1, le=10_000_000)]
Name = Annotated[str, Meta(pattern=r"^[A-Za-z][A-Za-z0-9_-]{0,31}$")]

PreReference = Literal["epsp_onset", "presynaptic_spike", "field_epsp_onset", "trigger"]
PostReference = Literal["spike_peak", "spike_threshold", "trigger"]
Gate = Literal["auto", "operator", "stable"]


class Reference(Struct, frozen=True, forbid_unknown_fields=True):
    """The two reference events between which every Δt of this file is written."""

    pre: PreReference = "epsp_onset"
    post: PostReference = "spike_peak"


class Judging(Struct, frozen=True, forbid_unknown_fields=True):
    """How a delivered pairing is judged; frozen in the plan hash."""

    on_target_within_ms: Annotated[
        float, Meta(gt=0, le=100, description="|delivered Δt − target Δt| up to this is on target")
    ] = 2.0
    response_window_ms: Annotated[
        float,
        Meta(gt=0, le=500, description="a spike this long after its post trigger answers it"),
    ] = 15.0
    context_ms: Annotated[
        float, Meta(gt=0, le=1_000, description="unplanned spikes this near are logged with it")
    ] = 50.0


class Forecast(Struct, frozen=True, forbid_unknown_fields=True):
    """One rule to run online on the delivered spikes.

    Either a published set by name (``set``), or the parameters themselves.
    """

    rule: Annotated[str, Meta(description="pair-all or pair-nearest")]
    set: Annotated[str | None, Meta(description="a published parameter set")] = None
    nearest: Literal["symmetric", "presynaptic"] | None = None
    weight: Literal["additive", "multiplicative", "power"] | None = None
    a_plus: Annotated[float, Meta(ge=0, le=10)] | None = None
    a_minus: Annotated[float, Meta(ge=0, le=10)] | None = None
    tau_plus_ms: Annotated[float, Meta(gt=0, le=10_000)] | None = None
    tau_minus_ms: Annotated[float, Meta(gt=0, le=10_000)] | None = None
    mu: Annotated[float, Meta(ge=0, le=1)] | None = None
    w_start: Annotated[float, Meta(gt=0, le=1_000)] | None = None
    w_min: Annotated[float, Meta(ge=0, le=1_000)] | None = None
    w_max: Annotated[float, Meta(gt=0, le=1_000)] | None = None


class TestSeries(Struct, frozen=True, forbid_unknown_fields=True):
    """Single test stimuli of one pathway at a steady interval."""

    pathway: Name
    every_s: PositiveS = 10.0
    first_at_s: NonNegativeS = 0.0
    step: Annotated[
        bool | None,
        Meta(description="the test current step in each sweep; default: where the rig has one"),
    ] = None
    pre_line: Name | None = None


class Repeat(Struct, frozen=True, forbid_unknown_fields=True):
    """One level of repetition inside a pairing, innermost first."""

    times: Annotated[int, Meta(ge=1, le=100_000)]
    every_ms: PositiveMs | None = None
    rate_hz: RateHz | None = None


class RandomDt(Struct, frozen=True, forbid_unknown_fields=True):
    """Δt drawn anew for each pairing, uniform, seeded by the protocol's ``plan_seed``."""

    low_ms: Ms
    high_ms: Ms
    min_abs_ms: Annotated[float, Meta(ge=0, le=600_000)] = 0.0


class Pairings(Struct, frozen=True, forbid_unknown_fields=True, tag_field="kind", tag="pairings"):
    """A number of equal pairings at a steady rate.

    Short form: ``dt_ms`` with ``pre_count``/``post_count`` (and their rates) for bursts.
    Long form: ``pre_at_ms`` and ``post_at_ms``, when the reference events happen within the
    pairing, and ``spike_pairs``, which of them belong together (``[pre, post]``, counted from 1).
    ``repeat`` repeats the whole pattern inside one pairing. ``deliver`` turns a block into its
    control.
    """

    pathway: Name
    pairings: Count
    rate_hz: RateHz | None = None
    every_s: PositiveS | None = None
    dt_ms: Ms | None = None
    dt_random: RandomDt | None = None
    pre_count: Annotated[int, Meta(ge=1, le=1_000)] = 1
    pre_rate_hz: RateHz | None = None
    post_count: Annotated[int, Meta(ge=1, le=1_000)] = 1
    post_rate_hz: RateHz | None = None
    pre_at_ms: list[Ms] | None = None
    post_at_ms: list[Ms] | None = None
    spike_pairs: list[tuple[int, int]] | None = None
    repeat: list[Repeat] = field(default_factory=list)
    deliver: Literal["both", "pre", "post"] = "both"
    pre_line: Name | None = None
    post_line: Name | None = None
    step: Annotated[bool, Meta(description="trigger the test current step in each pairing")] = False
    after_s: Annotated[NonNegativeS, Meta(description="rest before this block")] = 0.0
    offsets: Literal["reference_events", "triggers"] = "reference_events"


class Poisson(Struct, frozen=True, forbid_unknown_fields=True, tag_field="kind", tag="poisson"):
    """Independent Poisson pre and post trains with a share of events tied together at a lag.

    Each shared event is one pairing; the others belong to none. Drawn from ``plan_seed``.
    """

    pathway: Name
    duration_s: PositiveS
    pre_rate_hz: RateHz
    post_rate_hz: RateHz
    dead_time_ms: PositiveMs
    shared_fraction: Annotated[float, Meta(ge=0, le=1)] = 0.0
    shared_dt_ms: Ms | None = None
    pre_line: Name | None = None
    post_line: Name | None = None
    after_s: NonNegativeS = 0.0


class Contingent(
    Struct, frozen=True, forbid_unknown_fields=True, tag_field="kind", tag="contingent"
):
    """The box answers a spontaneous post spike with a pre stimulus (so Δt is negative)."""

    pathway: Name
    on_input: Name
    dt_ms: Ms
    silence_ms: Annotated[float, Meta(ge=0, le=600_000)]
    lockout_s: PositiveS
    max_pairings: Count
    max_min: PositiveMin
    max_rate_hz: RateHz | None = None
    pre_line: Name | None = None
    after_s: NonNegativeS = 0.0


Block = Pairings | Poisson | Contingent


class Baseline(Struct, frozen=True, forbid_unknown_fields=True, tag_field="kind", tag="baseline"):
    """Test stimuli before the induction."""

    duration_min: PositiveMin
    name: Name = "baseline"
    start: Gate = "auto"
    tests: list[TestSeries] = field(default_factory=list, name="test")


class Induction(Struct, frozen=True, forbid_unknown_fields=True, tag_field="kind", tag="induction"):
    """The pairings: blocks one after another, with or without tests going on beside them."""

    blocks: list[Block] = field(name="block")
    name: Name = "induction"
    start: Gate = "auto"
    tests: list[TestSeries] = field(default_factory=list, name="test")


class FollowUp(Struct, frozen=True, forbid_unknown_fields=True, tag_field="kind", tag="follow_up"):
    """Test stimuli after the induction."""

    duration_min: PositiveMin
    name: Name = "follow_up"
    start: Gate = "auto"
    tests: list[TestSeries] = field(default_factory=list, name="test")


Phase = Baseline | Induction | FollowUp


class Gates(Struct, frozen=True, forbid_unknown_fields=True):
    """What the start gate ``stable`` asks of the phase before it; frozen in the plan hash."""

    max_trend_pct: Annotated[float, Meta(gt=0, le=100)] = 10.0
    interval_pct: Annotated[float, Meta(ge=50, lt=100)] = 95.0
    min_sweeps: Annotated[int, Meta(ge=3, le=10_000)] = 12


class AcrossCells(Struct, frozen=True, forbid_unknown_fields=True):
    """One protocol for several cells, each cell getting one of these target Δt.

    The arm's Δt replaces ``dt_ms`` in every pairings block that states one. ``check`` compiles
    every arm; ``rehearse --arm K`` rehearses one.
    """

    dt_ms: Annotated[list[Ms], Meta(min_length=2, max_length=64)]
    cells_per_arm: Annotated[int, Meta(ge=1, le=1_000)] = 1
    permuted_block: Annotated[int, Meta(ge=1, le=640)] | None = None


class Protocol(Struct, frozen=True, forbid_unknown_fields=True):
    """A whole protocol file."""

    title: Annotated[str, Meta(min_length=1, max_length=200)]
    phases: Annotated[list[Phase], Meta(min_length=1, max_length=100)] = field(name="phase")
    shows: Annotated[str | None, Meta(description="one line: what this file is for")] = None
    preparation: Annotated[str | None, Meta(description="e.g. rat neocortex L5, slice, P14")] = None
    plan_seed: Annotated[int, Meta(ge=0, le=2**62)] = 0
    reference: Reference = Reference()
    judging: Judging = Judging()
    gates: Gates = Gates()
    forecasts: list[Forecast] = field(default_factory=list, name="forecast")
    across_cells: AcrossCells | None = None
