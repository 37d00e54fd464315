"""The rig file: what is wired to what, what it delivers, how late it is, and what it may do.

Decoded from TOML by :mod:`rigctl.protocol.load`. Amplitudes are *declared*: the box switches
digital lines and cannot read a stimulator's dial, so limits derived from amplitude hold for what is
written here.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from msgspec import Meta, Struct, field

from rigctl.protocol.schema import Name

PositiveUs = Annotated[float, Meta(gt=0, le=60_000_000)]
SmallMs = Annotated[float, Meta(ge=-1_000, le=1_000)]
Positive = Annotated[float, Meta(gt=0, le=1e9)]


class Latency(Struct, frozen=True, forbid_unknown_fields=True):
    """From a trigger's edge to a reference event, as measured on this rig."""

    mean_ms: SmallMs
    sd_ms: Annotated[float, Meta(ge=0, le=1_000)] = 0.0
    n: Annotated[int, Meta(ge=0, le=1_000_000)] = 0


class Output(Struct, frozen=True, forbid_unknown_fields=True):
    """One output line of the box and what it drives.

    ``latency`` maps a reference event (``epsp_onset``, ``spike_peak``, ``presynaptic_spike``, …)
    to the measured latency from this line's trigger.
    """

    drives: Annotated[
        Literal["pre", "post", "step"],
        Meta(description="pre: a pathway; post: a spike in the cell; step: the test step"),
    ]
    width_us: PositiveUs
    pathway: Name | None = None
    socket: str | None = None
    latency: dict[str, Latency] = field(default_factory=dict)
    evokes_spike: Annotated[
        bool, Meta(description="false for a subthreshold post pulse: no spike is expected")
    ] = True
    stimulus: Annotated[str | None, Meta(description="a table under [stimulus]")] = None


class Input(Struct, frozen=True, forbid_unknown_fields=True):
    """One input line of the box: a detector's edge, and what in the trace it marks."""

    detects: Literal["pre", "post"]
    pathway: Name | None = None
    socket: str | None = None
    reference: Annotated[
        str, Meta(description="the event that edge + edge_to_reference_ms stands for")
    ] = "peak"
    edge_to_reference_ms: SmallMs = 0.0
    blind_after_pre_ms: Annotated[
        float,
        Meta(ge=0, le=100, description="blanked this long after a pre trigger: spikes hidden"),
    ] = 0.0


class Stimulus(Struct, frozen=True, forbid_unknown_fields=True):
    """What one pulse delivers, as declared by the person who set the dial."""

    kind: Literal["current_pulse", "current_clamp", "light", "sensory", "field"]
    stimulator: str | None = None
    polarity: Literal["monophasic", "biphasic"] = "monophasic"
    balanced: Annotated[
        bool | None, Meta(description="zero net charge per pulse (biphasic, or capacitor-coupled)")
    ] = None
    amplitude_ua: Positive | None = None
    amplitude_pa: Annotated[float, Meta(ge=-1e6, le=1e6)] | None = None
    electrode: Annotated[str | None, Meta(description="a table under [electrode]")] = None
    power_mw: Positive | None = None
    spot_diameter_um: Positive | None = None


class Electrode(Struct, frozen=True, forbid_unknown_fields=True):
    """A stimulating electrode's charge-delivering surface."""

    diameter_um: Positive | None = None
    area_um2: Positive | None = None
    material: Literal["Pt", "PtIr", "AIROF", "SIROF", "TiN", "PEDOT", "W", "steel", "other"] = (
        "other"
    )
    micro: Annotated[
        bool | None,
        Meta(description="judge by charge per phase as well; default: area up to 2000 um2"),
    ] = None


class Limits(Struct, frozen=True, forbid_unknown_fields=True):
    """Limits of this rig; each may be set tighter or looser, and is frozen in the plan hash."""

    max_width_us: Positive = 400_000.0
    min_spacing_us: Positive = 100.0
    max_rate_hz: Positive = 200.0
    max_duty: Annotated[float, Meta(gt=0, le=1)] = 0.5
    max_pulses: Annotated[int, Meta(ge=1, le=10_000_000)] = 100_000
    max_amplitude_ua: Positive = 500.0
    max_density_uc_cm2: Positive | None = None
    max_k: Annotated[float, Meta(ge=-10, le=10)] = 1.5
    max_micro_charge_nc: Positive = 2.0
    max_light_mw_mm2: Positive = 10.0
    max_light_duty: Annotated[float, Meta(gt=0, le=1)] = 0.1
    max_light_heat_c: Positive = 1.0


class Washout(Struct, frozen=True, forbid_unknown_fields=True):
    """The clock that starts at break-in; an induction too late in it is refused."""

    before_plan_min: Annotated[
        float, Meta(ge=0, le=600, description="from break-in to the start of the plan")
    ] = 1.0
    start_by_min: Positive | None = None
    end_by_min: Positive | None = None
    warn_at_min: Positive | None = None


class Box(Struct, frozen=True, forbid_unknown_fields=True):
    """What the plan may assume of the box; its hello must agree, or the session does not start."""

    tick_ns: Annotated[int, Meta(ge=1, le=1_000_000)] = 500
    min_width_us: Positive = 30.0
    min_spacing_us: Positive = 100.0
    min_rule_delay_us: Positive = 100.0


class Rig(Struct, frozen=True, forbid_unknown_fields=True):
    """A whole rig file."""

    name: Annotated[str, Meta(min_length=1, max_length=200)]
    outputs: dict[Name, Output] = field(name="output")
    backend: Annotated[str, Meta(description="how the box is reached: a backend plugin")] = "sim"
    inputs: dict[Name, Input] = field(default_factory=dict, name="input")
    stimuli: dict[Name, Stimulus] = field(default_factory=dict, name="stimulus")
    electrodes: dict[Name, Electrode] = field(default_factory=dict, name="electrode")
    limits: Limits = Limits()
    box: Box = Box()
    access: Literal["ruptured", "perforated", "sharp", "in_vivo", "extracellular"] = "ruptured"
    washout: Washout = Washout()
    preparation: str | None = None
    approval: Annotated[str | None, Meta(description="animal-care approval number")] = None
    forecast_set: Annotated[
        str | None, Meta(description="published parameter set where the protocol names none")
    ] = None
    backend_options: Annotated[
        dict[str, Any], Meta(description="knobs of the backend; checked by the backend itself")
    ] = field(default_factory=dict, name="sim")
