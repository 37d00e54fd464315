"""What the world needs to know of each line of the rig file."""

from __future__ import annotations

from typing import Literal

import numpy as np
from msgspec import Struct

from rigctl.protocol.rig import Output, Rig
from rigctl_sim.scripted import PulseLine

_LEAST_NS = 100_000
# Where the rig file gives no latency: something plausible (invented).
_USUAL_PRE_MS, _USUAL_PRE_SD_MS = 2.3, 0.15
_USUAL_POST_MS, _USUAL_POST_SD_MS = 3.1, 0.2
_PRE_EVENTS = ("epsp_onset", "field_epsp_onset")


class WorldLine(Struct, frozen=True):
    """An output line: what it drives and how late its effect truly is."""

    drives: Literal["pre", "post", "step"]
    pathway: str
    width_ns: int
    latency_ns: int
    latency_sd_ns: int
    pre_spike_ns: int
    pre_spike_sd_ns: int

    def draw_ns(self, rng: np.random.Generator) -> int:
        """Draw a latency from trigger to EPSP onset."""
        drawn = self.latency_ns + rng.standard_normal() * self.latency_sd_ns
        return max(_LEAST_NS, round(drawn))

    def draw_pre_spike_ns(self, rng: np.random.Generator) -> int:
        """Draw a latency from trigger to presynaptic spike."""
        drawn = self.pre_spike_ns + rng.standard_normal() * self.pre_spike_sd_ns
        return max(_LEAST_NS, round(drawn))


class WorldInput(Struct, frozen=True):
    """An input line."""

    detects: Literal["pre", "post"]
    pathway: str | None


def world_lines(rig: Rig) -> dict[str, WorldLine]:
    """Return every output line of a rig."""
    return {name: _world_line(output) for name, output in rig.outputs.items()}


def _world_line(output: Output) -> WorldLine:
    mean_ms, sd_ms = _USUAL_PRE_MS, _USUAL_PRE_SD_MS
    spike = output.latency.get("presynaptic_spike")
    given = next((output.latency[e] for e in _PRE_EVENTS if e in output.latency), None)
    if given is not None:
        mean_ms, sd_ms = given.mean_ms, given.sd_ms
    elif spike is not None:
        mean_ms, sd_ms = spike.mean_ms + 1.5, spike.sd_ms
    return WorldLine(
        output.drives,
        output.pathway or "",
        round(output.width_us * 1000),
        round(mean_ms * 1e6),
        round(sd_ms * 1e6),
        round((spike.mean_ms if spike else mean_ms) * 1e6),
        round((spike.sd_ms if spike else sd_ms) * 1e6),
    )


def pulse_lines(rig: Rig, jitter_ms: float | None) -> dict[str, PulseLine]:
    """Return what the lines that drive post or step do to a cell."""
    lines = {}
    for name, output in rig.outputs.items():
        if output.drives == "pre":
            continue
        stimulus = rig.stimuli.get(output.stimulus or "")
        current_pa = stimulus.amplitude_pa if stimulus is not None else None
        if current_pa is None:
            current_pa = -20.0 if output.drives == "step" else 1500.0
        latency = output.latency.get("spike_peak") or output.latency.get("spike_threshold")
        mean_ms = latency.mean_ms if latency else _USUAL_POST_MS
        sd_ms = latency.sd_ms if latency else _USUAL_POST_SD_MS
        lines[name] = PulseLine(
            current_pa,
            output.drives == "post" and output.evokes_spike,
            round(mean_ms * 1e6),
            round((sd_ms if jitter_ms is None else jitter_ms) * 1e6),
        )
    return lines
