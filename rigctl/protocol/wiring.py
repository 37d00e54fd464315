"""Which line of the rig serves which part of the protocol, and how late its effect is."""

from __future__ import annotations

from typing import Literal

from rigctl.errors import InputError, nearest
from rigctl.protocol.plan import PlanInput, PlanLine
from rigctl.protocol.rig import Output, Rig
from rigctl.protocol.schema import Protocol


class Wiring:
    """Looks lines up, with a sentence for what is not there.

    Parameters
    ----------
    protocol, rig
        Checked files.
    protocol_file, rig_file : str
        Their names, for the sentences.
    """

    def __init__(self, protocol: Protocol, rig: Rig, protocol_file: str, rig_file: str) -> None:
        self._protocol = protocol
        self._rig = rig
        self._protocol_file = protocol_file
        self._rig_file = rig_file
        self._used: dict[str, PlanLine] = {}

    def pre(self, pathway: str, override: str | None, path: str) -> PlanLine:
        """Return the line that stimulates ``pathway``."""
        found = [
            name
            for name, output in self._rig.outputs.items()
            if output.drives == "pre" and output.pathway == pathway
        ]
        if override is not None:
            if override not in found:
                raise InputError.at(
                    self._protocol_file,
                    f"{path}.pre_line",
                    override,
                    f"{self._rig_file} has no output of that name driving pathway {pathway}"
                    f"{nearest(override, found)}",
                )
            return self._line(override, "pre")
        if not found:
            pathways = sorted({o.pathway for o in self._rig.outputs.values() if o.pathway})
            raise InputError.at(
                self._protocol_file,
                f"{path}.pathway",
                pathway,
                f"{self._rig_file} drives no such pathway, only {', '.join(pathways)}",
            )
        if len(found) > 1:
            raise InputError(
                f"{self._protocol_file}: {path}.pre_line: needed, since {self._rig_file} has "
                f"several lines for pathway {pathway}: {', '.join(found)}."
            )
        return self._line(found[0], "pre")

    def post(self, override: str | None, path: str) -> PlanLine:
        """Return the line that makes the cell spike."""
        posts = {n: o for n, o in self._rig.outputs.items() if o.drives == "post"}
        if override is not None:
            if override not in posts:
                raise InputError.at(
                    self._protocol_file,
                    f"{path}.post_line",
                    override,
                    f"{self._rig_file} has no such output that drives post"
                    f"{nearest(override, list(posts))}",
                )
            return self._line(override, "post")
        spiking = [name for name, output in posts.items() if output.evokes_spike]
        if not spiking:
            raise InputError(
                f"{self._rig_file}: output: no line drives post with a spike, which {path} of "
                f"{self._protocol_file} needs."
            )
        if len(spiking) > 1:
            raise InputError(
                f"{self._protocol_file}: {path}.post_line: needed, since {self._rig_file} has "
                f"several: {', '.join(spiking)}."
            )
        return self._line(spiking[0], "post")

    def step(self, needed: bool, path: str) -> PlanLine | None:
        """Return the line of the test step, where the rig has one; refuse if it is asked for."""
        for name, output in self._rig.outputs.items():
            if output.drives == "step":
                return self._line(name, "step")
        if needed:
            raise InputError(
                f"{self._protocol_file}: {path}.step = true: {self._rig_file} has no output that "
                "drives step."
            )
        return None

    def used(self) -> tuple[PlanLine, ...]:
        """Return every line looked up so far, by name."""
        return tuple(self._used[name] for name in sorted(self._used))

    def inputs(self) -> tuple[PlanInput, ...]:
        """Return the rig's input lines."""
        return tuple(
            PlanInput(
                name,
                line.detects,
                line.pathway,
                line.reference,
                round(line.edge_to_reference_ms * 1e6),
                round(line.blind_after_pre_ms * 1e6),
            )
            for name, line in sorted(self._rig.inputs.items())
        )

    def _line(self, name: str, drives: Literal["pre", "post", "step"]) -> PlanLine:
        if name not in self._used:
            output = self._rig.outputs[name]
            latency_ns, sd_ns, n, reference = self._latency(name, output)
            self._used[name] = PlanLine(
                name,
                drives,
                output.pathway,
                round(output.width_us * 1000),
                latency_ns,
                sd_ns,
                n,
                output.evokes_spike and drives == "post",
                reference,
            )
        return self._used[name]

    def _latency(self, name: str, output: Output) -> tuple[int, int, int, str]:
        if output.drives == "step" or (output.drives == "post" and not output.evokes_spike):
            return 0, 0, 0, "trigger"
        reference = self._protocol.reference
        event = reference.pre if output.drives == "pre" else reference.post
        if event == "trigger":
            return 0, 0, 0, event
        latency = output.latency.get(event)
        if latency is None:
            raise InputError(
                f"{self._rig_file}: output.{name}.latency.{event}: needed, since "
                f"{self._protocol_file} counts Δt from {event}; measure it on the rig."
            )
        return round(latency.mean_ms * 1e6), round(latency.sd_ms * 1e6), latency.n, event
