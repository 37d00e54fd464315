"""The virtual world: one event after another, in integer ns of true time.

The host's clock is true time; the box's is a function of it. Bytes take their time on the wire.
Output edges act on the cell through the lines' latencies, spikes come back as detector edges. The
cell is never advanced past an input that it has not been given.
"""

from __future__ import annotations

import heapq
from collections import deque
from collections.abc import Callable, Mapping

from rigctl.box import Box, BoxConfig
from rigctl.errors import LinkError
from rigctl.timing.clock import VirtualClock
from rigctl_sim.acquisition import SimAcquisition
from rigctl_sim.boxclock import BoxClock
from rigctl_sim.faults import Faults, WireFaults
from rigctl_sim.interfaces import Cell, Synapse
from rigctl_sim.knobs import SimKnobs
from rigctl_sim.lines import WorldInput, WorldLine
from rigctl_sim.streams import stream

_DETECTOR_PULSE_NS = 500_000
_NEVER = 1 << 62
_DRAWN = 512


class World:
    """The simulated rig behind the link. It is the link's end as well (``LinkEnd``)."""

    def __init__(
        self,
        knobs: SimKnobs,
        box_config: BoxConfig,
        lines: Mapping[str, WorldLine],
        inputs: Mapping[str, WorldInput],
        cell: Cell,
        synapses: Mapping[str, Synapse],
        clock: VirtualClock,
        box_clock: BoxClock,
        faults: Faults,
        duration_ns: int,
        seed: int,
    ) -> None:
        self.clock = clock
        self._box_clock = box_clock
        self._box_config = box_config
        self._box = Box(box_config)
        self._lines = lines
        self._inputs = inputs
        self._cell = cell
        self._synapses = synapses
        self.acquisition = SimAcquisition(knobs.acquisition, box_clock, cell)
        self._wire = knobs.wire
        self._wire_faults = WireFaults(faults, duration_ns, seed)
        self._damaging = bool(faults.corrupt_bytes or faults.drop_bytes)
        self._to_box: deque[tuple[int, bytes]] = deque()
        self._to_host: deque[tuple[int, bytes]] = deque()
        self._last_arrival = {True: 0, False: 0}
        self._effects: list[tuple[int, int, Callable[[int], None]]] = []
        self._seq = 0
        self._rng_wire = stream(seed, "wire")
        self._rng_latency = stream(seed, "latencies")
        self._delays: list[float] = []
        self._detector_delay_ns = round(knobs.detector_delay_ms * 1e6)
        self._detector_jitter_ns = round(knobs.detector_jitter_ms * 1e6)
        self._reset_at_ns = _from_s(faults.box_reset_at_s)
        self._dead_at_ns = _from_s(faults.cable_pull_at_s)
        self._post_inputs = [n for n, i in inputs.items() if i.detects == "post"]
        self._pre_inputs = {i.pathway: n for n, i in inputs.items() if i.detects == "pre"}
        # When the box wants to run next, and whether it has been spoken to since that was noted.
        self._box_ns = _NEVER
        self._box_touched = True
        self._collect(0)

    # --- the link's end ---------------------------------------------------------------------

    def write(self, data: bytes) -> None:
        """Send bytes to the box."""
        now_ns = self.clock.now_ns()
        self._check_cable(now_ns)
        self._to_box.append((self._arrival(len(data), True, now_ns), data))

    def wait(self, until_ns: int) -> bytes:
        """Let the world run until something has arrived, at latest until ``until_ns``."""
        clock, to_host, acquisition = self.clock, self._to_host, self.acquisition
        last_ns = min(until_ns, self._dead_at_ns)
        now_ns = clock.now_ns()
        while not (to_host and to_host[0][0] <= now_ns):
            if now_ns >= until_ns or acquisition.waiting:
                return b""
            self._step(last_ns, now_ns)
            now_ns = clock.now_ns()
            self._check_cable(now_ns)
        return self._arrived(now_ns)

    def close(self) -> None:
        """Nothing holds the simulated link."""

    def _check_cable(self, now_ns: int) -> None:
        if now_ns >= self._dead_at_ns:
            raise LinkError("the link to the box is gone: no bytes pass any more")

    def _arrived(self, now_ns: int) -> bytes:
        data = b""
        while self._to_host and self._to_host[0][0] <= now_ns:
            data += self._to_host.popleft()[1]
        return data

    def _arrival(self, size: int, to_box: bool, now_ns: int) -> int:
        """Return when bytes sent now arrive: in order, after bridge delay and bit time."""
        if not self._delays:
            self._delays = self._rng_wire.random(_DRAWN).tolist()
        wire = self._wire
        delay_us = wire.delay_min_us + wire.delay_spread_us * self._delays.pop()
        delay_us += wire.us_per_byte * size
        arrival_ns = now_ns + round(delay_us * 1000)
        faults = self._wire_faults
        if faults.stall_from_ns <= arrival_ns < faults.stall_to_ns:
            arrival_ns = faults.stall_to_ns
        arrival_ns = max(arrival_ns, self._last_arrival[to_box] + 1)
        self._last_arrival[to_box] = arrival_ns
        return arrival_ns

    # --- one event after another ------------------------------------------------------------

    def _step(self, until_ns: int, now_ns: int) -> None:
        """Run the world to its next event, or to ``until_ns``.

        Most steps carry a keep-alive or nothing: what was not touched is not asked.
        """
        at_ns = min(until_ns, self._box_ns, self._reset_at_ns, self.acquisition.due_ns)
        if self._to_box and self._to_box[0][0] < at_ns:
            at_ns = self._to_box[0][0]
        if self._to_host and self._to_host[0][0] < at_ns:
            at_ns = self._to_host[0][0]
        if self._effects and self._effects[0][0] < at_ns:
            at_ns = self._effects[0][0]
        if at_ns < now_ns:
            at_ns = now_ns
        peak_ns = self._cell.advance(at_ns)
        if peak_ns is not None:
            self.clock.sleep_until(peak_ns)
            self._spike(peak_ns)
            return
        self.clock.sleep_until(at_ns)
        while self._effects and self._effects[0][0] <= at_ns:
            heapq.heappop(self._effects)[2](at_ns)
        if self._box_ns <= at_ns:
            self._run_box(at_ns)
        if self._to_box and self._to_box[0][0] <= at_ns:
            self._deliver(self._to_box.popleft()[1], at_ns)
        if self.acquisition.due_ns <= at_ns:
            self.acquisition.complete()
        if at_ns >= self._reset_at_ns:
            self._reset_box(at_ns)
        if self._box_touched:
            self._collect(at_ns)

    def _deliver(self, data: bytes, at_ns: int) -> None:
        """Bytes reach the box; what a stop or a disarm has set low takes effect at once."""
        if self._damaging:
            data = self._wire_faults.on_the_way(data, True, at_ns)
        self._box.receive(data, self._box_clock.tick_at(at_ns))
        self._box_touched = True
        if self._box.edges_waiting:
            self._run_box(at_ns)

    def _run_box(self, now_ns: int) -> None:
        """Let the box catch up with the world; what it fires acts on the cell."""
        self._box_touched = True
        for line, level, tick in self._box.advance(self._box_clock.tick_at(now_ns)):
            if level:
                self._output(line, self._box_clock.first_ns_of(tick))

    def _collect(self, now_ns: int) -> None:
        """Take what the box sends, and note when it wants to run next."""
        self._box_touched = False
        data = self._box.take_output()
        tick = self._box.next_event_tick()
        self._box_ns = _NEVER if tick is None else self._box_clock.first_ns_of(tick)
        if data:
            if self._damaging:
                data = self._wire_faults.on_the_way(data, False, now_ns)
            self._to_host.append((self._arrival(len(data), False, now_ns), data))

    def _reset_box(self, now_ns: int) -> None:
        """The box loses everything and counts from 0 again."""
        self._reset_at_ns = _NEVER
        config = self._box_config
        self._box = Box(
            type(config)(
                **{f: getattr(config, f) for f in config.__struct_fields__ if f != "boot"},
                boot=config.boot + 1,
            )
        )
        self._box_clock.boot_ns = now_ns
        self._box_touched = True

    def _at(self, at_ns: int, effect: Callable[[int], None]) -> None:
        self._seq += 1
        heapq.heappush(self._effects, (at_ns, self._seq, effect))

    # --- what pulses and spikes do ----------------------------------------------------------

    def _output(self, name: str, at_ns: int) -> None:
        """An output line rose."""
        line = self._lines[name]
        self.acquisition.pulse(at_ns)
        if line.drives != "pre":
            self._cell.current(at_ns, line.width_ns, name)
            return
        self._cell.artefact(at_ns, name)
        delay_ns = line.draw_ns(self._rng_latency)
        pathway = line.pathway
        if pathway in self._pre_inputs:
            # The presynaptic spike is detected; its EPSP follows by what is left of the latency.
            spike_ns = at_ns + line.draw_pre_spike_ns(self._rng_latency)
            self._detector(self._pre_inputs[pathway], spike_ns)
            onset_ns = spike_ns + max(200_000, line.latency_ns - line.pre_spike_ns)
        else:
            onset_ns = at_ns + delay_ns
        self._at(onset_ns, lambda now_ns: self._epsp(now_ns, pathway))

    def _epsp(self, at_ns: int, pathway: str) -> None:
        strength = self._synapses[pathway].release(at_ns)
        if strength > 0:
            self._cell.epsp(at_ns, pathway, strength)

    def _spike(self, peak_ns: int) -> None:
        """The cell has spiked: synapses learn of it, the detector tells the box a little later."""
        for synapse in self._synapses.values():
            synapse.post_spike(peak_ns)
        for name in self._post_inputs:
            self._detector(name, peak_ns)

    def _detector(self, name: str, event_ns: int) -> None:
        jitter_ns = round(self._rng_latency.standard_normal() * self._detector_jitter_ns)
        edge_ns = event_ns + max(0, self._detector_delay_ns + jitter_ns)
        self._at(edge_ns, lambda now_ns: self._input(name, True, edge_ns))
        self._at(
            edge_ns + _DETECTOR_PULSE_NS,
            lambda now_ns: self._input(name, False, edge_ns + _DETECTOR_PULSE_NS),
        )

    def _input(self, name: str, level: bool, at_ns: int) -> None:
        tick = self._box_clock.tick_at(at_ns)
        if tick >= 0:
            self._run_box(at_ns)
            self._box.input_edge(name, level, tick)


def _from_s(at_s: float | None) -> int:
    return _NEVER if at_s is None else round(at_s * 1e9)
