"""The knobs of the simulated rig: the rig file's ``[sim]`` table, typed, with sane defaults."""

from __future__ import annotations

from typing import Annotated, Any, Literal

import msgspec
from msgspec import Meta, Struct, field

from rigctl.errors import InputError, nearest

Ms = Annotated[float, Meta(ge=-1_000, le=1_000)]
Ordinal = Annotated[int, Meta(ge=1)]
Fraction = Annotated[float, Meta(ge=0, le=1)]


class Knobs(Struct, frozen=True, forbid_unknown_fields=True):
    """Base of all knob tables."""


class ClockKnobs(Knobs, frozen=True):
    """The box's crystal."""

    ppm: Annotated[
        float, Meta(ge=-5_000, le=5_000, description="how much too fast the box's clock runs")
    ] = 23.0
    on_since_s: Annotated[
        float, Meta(ge=0, le=1e7, description="the box was switched on this long before")
    ] = 3.0


class WireKnobs(Knobs, frozen=True):
    """The serial line."""

    us_per_byte: Annotated[float, Meta(ge=0, le=10_000, description="20 at 500 kbaud")] = 20.0
    delay_min_us: Annotated[float, Meta(ge=0, le=1e6, description="least bridge delay")] = 200.0
    delay_spread_us: Annotated[
        float, Meta(ge=0, le=1e6, description="on top, uniform between 0 and this")
    ] = 1_000.0


class ScriptedKnobs(Knobs, frozen=True):
    """The cell whose latencies, misses and doublets are drawn."""

    creep_ms: Annotated[
        float,
        Meta(ge=-20, le=20, description="spike latency creeps by this over creep_over pulses"),
    ] = 0.0
    creep_over: (
        Annotated[
            int, Meta(ge=2, le=10_000_000, description="default: the spike pulses of the plan")
        ]
        | None
    ) = None
    latency_offset_ms: Annotated[
        Ms, Meta(description="true spike latency minus the rig file's")
    ] = 0.0
    miss_probability: Annotated[Fraction, Meta(description="a spike pulse evokes none")] = 0.0
    doublet_probability: Annotated[Fraction, Meta(description="… evokes two")] = 0.0
    miss_at: Annotated[
        list[Ordinal], Meta(description="ordinals of spike pulses, from 1, that evoke none")
    ] = field(default_factory=list)
    doublet_at: Annotated[list[Ordinal], Meta(description="… that evoke two")] = field(
        default_factory=list
    )
    doublet_gap_ms: Annotated[
        float, Meta(gt=0, le=100, description="from the first spike of a doublet to the second")
    ] = 6.0
    spontaneous_hz: Annotated[
        float, Meta(ge=0, le=100, description="rate of spontaneous spikes")
    ] = 0.0
    rest_mv: Annotated[float, Meta(ge=-120, le=0, description="resting potential")] = -70.0
    epsp_mv: Annotated[float, Meta(ge=0, le=50, description="for strength 1")] = 3.0
    rise_ms: Annotated[
        float, Meta(gt=0, le=100, description="time constant of the EPSP's rise")
    ] = 1.2
    decay_ms: Annotated[float, Meta(gt=0, le=1_000, description="… of its decay")] = 14.0
    input_resistance_mohm: Annotated[
        float, Meta(gt=0, le=10_000, description="as a long step sees it")
    ] = 150.0
    series_resistance_mohm: Annotated[
        float, Meta(ge=0, le=1_000, description="not bridge-balanced")
    ] = 15.0
    membrane_tau_ms: Annotated[
        float, Meta(gt=0, le=1_000, description="how slowly a step charges the cell")
    ] = 18.0
    noise_mv: Annotated[float, Meta(ge=0, le=10, description="SD of the recorded noise")] = 0.12
    artefact_mv: Annotated[
        float, Meta(ge=-500, le=500, description="stimulus artefact at its beginning")
    ] = 15.0


class ConductanceKnobs(Knobs, frozen=True):
    """The cell that is integrated; see :mod:`rigctl_sim.conductance`."""

    epsp_mv: Annotated[float, Meta(ge=0, le=50, description="for strength 1, at rest")] = 3.0
    rise_ms: Annotated[float, Meta(gt=0, le=100, description="… of the conductance's rise")] = 0.5
    decay_ms: Annotated[float, Meta(gt=0, le=1_000, description="… of its decay")] = 4.0
    capacitance_pf: Annotated[
        float,
        Meta(gt=1, le=10_000, description="of the whole cell; scales its conductances and EPSPs"),
    ] = 100.0
    holding_pa: Annotated[
        float, Meta(ge=-10_000, le=10_000, description="constant current through the electrode")
    ] = 0.0
    series_resistance_mohm: Annotated[
        float, Meta(ge=0, le=1_000, description="not bridge-balanced")
    ] = 15.0
    leak_drift_pct_per_min: Annotated[
        float, Meta(ge=-20, le=20, description="the leak conductance drifts by this")
    ] = 0.0
    noise_pa: Annotated[
        float, Meta(ge=0, le=1_000, description="SD of the current noise inside a window")
    ] = 30.0
    noise_tau_ms: Annotated[
        float, Meta(gt=0, le=1_000, description="correlation time of the current noise")
    ] = 3.0
    recording_noise_mv: Annotated[
        float, Meta(ge=0, le=10, description="SD of the recorded noise")
    ] = 0.1
    artefact_mv: Annotated[
        float, Meta(ge=-500, le=500, description="stimulus artefact at its beginning")
    ] = 15.0


class SynapseKnobs(Knobs, frozen=True):
    """One pathway's synapses."""

    use: Annotated[float, Meta(gt=0, le=1, description="U of Tsodyks & Markram 1997")] = 0.5
    tau_rec_ms: Annotated[float, Meta(gt=0, le=100_000, description="recovery from depression")] = (
        800.0
    )
    tau_inact_ms: Annotated[
        float, Meta(ge=0, le=1_000, description="inactivation of what was released")
    ] = 3.0
    sites: Annotated[int, Meta(ge=1, le=10_000, description="release sites")] = 12
    quantal_cv: Annotated[
        float, Meta(ge=0, le=2, description="coefficient of variation of one quantum")
    ] = 0.2
    plasticity_scale: Annotated[
        float, Meta(ge=0, le=10, description="0 switches the hidden rule off")
    ] = 1.0
    expression_tau_min: Annotated[
        float, Meta(gt=0, le=600, description="how slowly a change shows")
    ] = 4.0
    washout_tau_min: Annotated[
        float, Meta(gt=0, le=10_000, description="plasticity fades with dialysis")
    ] = 20.0


class AcquisitionKnobs(Knobs, frozen=True):
    """Sweeps around the pulses."""

    on: Annotated[bool, Meta(description="record sweeps at all")] = True
    rate_hz: Annotated[float, Meta(ge=100, le=200_000, description="samples per second")] = 10_000.0
    before_ms: Annotated[
        float, Meta(ge=0, le=10_000, description="a sweep begins so long before its first pulse")
    ] = 50.0
    after_ms: Annotated[
        float, Meta(gt=0, le=10_000, description="and ends so long after its last one began")
    ] = 400.0
    longest_s: Annotated[
        float, Meta(ge=0.1, le=60, description="a longer one goes on as the next sweep")
    ] = 10.0
    mv_per_count: Annotated[float, Meta(gt=0, le=1, description="resolution of the converter")] = (
        0.005
    )


class SimKnobs(Knobs, frozen=True):
    """The whole ``[sim]`` table."""

    cell: Annotated[
        Literal["scripted", "conductance"],
        Meta(description="spikes drawn, or integrated from conductances"),
    ] = "scripted"
    clock: ClockKnobs = ClockKnobs()
    wire: WireKnobs = WireKnobs()
    scripted: ScriptedKnobs = ScriptedKnobs()
    conductance: ConductanceKnobs = ConductanceKnobs()
    synapse: dict[str, SynapseKnobs] = field(default_factory=dict)
    acquisition: AcquisitionKnobs = AcquisitionKnobs()
    detector_delay_ms: Annotated[
        float, Meta(ge=0, le=100, description="peak → edge; the rig file should agree")
    ] = 0.15
    detector_jitter_ms: Annotated[float, Meta(ge=0, le=10, description="SD")] = 0.005


def knobs_of(options: dict[str, Any]) -> SimKnobs:
    """Return the knobs that a rig file's ``[sim]`` table sets.

    Raises
    ------
    InputError
    """
    try:
        return msgspec.convert(options, SimKnobs)
    except msgspec.ValidationError as error:
        text = str(error)
        hint = ""
        if "unknown field `" in text:
            word = text.split("unknown field `")[1].split("`")[0]
            hint = nearest(word, _all_names(SimKnobs))
        raise InputError(f"rig file, table [sim]: {text}{hint or '.'}") from None


def _all_names(struct: type[Struct]) -> list[str]:
    names = list(struct.__struct_fields__)
    for inner in msgspec.structs.fields(struct):
        if isinstance(inner.type, type) and issubclass(inner.type, Struct):
            names += _all_names(inner.type)
    return [*names, *SynapseKnobs.__struct_fields__]
