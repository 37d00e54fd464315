"""The backend plugin that opens the simulated rig."""

from __future__ import annotations

import importlib.metadata
from typing import Any

import msgspec

from rigctl import __version__
from rigctl.backends.base import Connection, OpenOptions
from rigctl.box import BoxConfig
from rigctl.errors import InputError
from rigctl.protocol.plan import Plan
from rigctl.protocol.rig import Rig
from rigctl.timing.clock import Clock, MonotonicClock, VirtualClock
from rigctl_sim import faults as fault_list
from rigctl_sim.boxclock import BoxClock
from rigctl_sim.interfaces import Cell
from rigctl_sim.knobs import SimKnobs, SynapseKnobs, knobs_of
from rigctl_sim.lines import WorldInput, pulse_lines, world_lines
from rigctl_sim.scripted import ScriptedCell
from rigctl_sim.synapse import SimSynapse
from rigctl_sim.world import World


class PacedWorld:
    """The same world, held back to the pace of the wall clock."""

    def __init__(self, world: World, wall: Clock) -> None:
        self._world = world
        self._wall = wall
        self._ahead_ns = wall.now_ns() - world.clock.now_ns()

    def write(self, data: bytes) -> None:
        """Send bytes to the box."""
        self._world.write(data)

    def wait(self, until_ns: int) -> bytes:
        """Wait in virtual time, then until the wall clock has caught up."""
        data = self._world.wait(until_ns)
        self._wall.sleep_until(self._world.clock.now_ns() + self._ahead_ns)
        return data

    def close(self) -> None:
        """Let go."""
        self._world.close()


class SimBackend:
    """Opens a simulated rig for one session."""

    simulated = True

    def open(self, rig: Rig, plan: Plan, options: OpenOptions) -> Connection:
        """Make a world from the rig file's knobs, the faults and the seed."""
        faults = fault_list.parse(options.faults)
        knobs = fault_list.plant(faults, knobs_of(rig.backend_options), plan, options.seed)
        pathways = sorted({o.pathway for o in rig.outputs.values() if o.pathway})
        unknown = sorted(set(knobs.synapse) - set(pathways))
        if unknown:
            raise InputError(
                f"rig file, table [sim]: synapse.{unknown[0]}: no such pathway; the outputs drive "
                f"{', '.join(pathways)}."
            )
        clock = VirtualClock()
        box_clock = BoxClock(rig.box.tick_ns, knobs.clock.ppm, -round(knobs.clock.on_since_s * 1e9))
        world = World(
            knobs,
            BoxConfig(
                outputs=tuple(rig.outputs),
                inputs=tuple(rig.inputs),
                tick_num=rig.box.tick_ns,
                min_width_ticks=round(rig.box.min_width_us * 1000 / rig.box.tick_ns),
                min_spacing_ticks=round(rig.box.min_spacing_us * 1000 / rig.box.tick_ns),
                seed=options.seed,
            ),
            world_lines(rig),
            {n: WorldInput(i.detects, i.pathway) for n, i in rig.inputs.items()},
            self._cell(rig, plan, knobs, faults, options.seed),
            {
                p: SimSynapse(knobs.synapse.get(p, SynapseKnobs()), options.seed, p)
                for p in pathways
            },
            clock,
            box_clock,
            faults,
            plan.duration_ns,
            options.seed,
        )
        about = {
            "sim_version": __version__,
            "sim_knobs": msgspec.json.encode(knobs, order="deterministic").decode(),
            "numpy_version": importlib.metadata.version("numpy"),
        }
        return Connection(
            clock=clock,
            link=PacedWorld(world, MonotonicClock()) if options.real_time else world,
            acquisition=world.acquisition,
            simulated=True,
            about=about,
        )

    def describe_faults(self) -> list[tuple[str, str, str]]:
        """Return (key, unit, what it does) for every fault that can be injected."""
        return fault_list.describe()

    def knobs_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the rig file's ``[sim]`` table."""
        return msgspec.json.schema(SimKnobs)

    def _cell(
        self, rig: Rig, plan: Plan, knobs: SimKnobs, faults: fault_list.Faults, seed: int
    ) -> Cell:
        lines = pulse_lines(rig, faults.jitter_ms)
        if knobs.cell == "scripted":
            pulses = len(fault_list.spike_pulses(plan, induction_only=False))
            return ScriptedCell(knobs.scripted, lines, pulses, seed)
        # Imported only now: it compiles its integrator where numba is installed.
        from rigctl_sim.conductance import ConductanceCell

        return ConductanceCell(
            knobs.conductance, {n: line.current_pa for n, line in lines.items()}, seed
        )
