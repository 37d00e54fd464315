"""Response amplitudes of the test stimuli, from sweeps as they come in."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable

from rigctl.measure.response import response_amplitude
from rigctl.protocol.plan import Plan, PlanLine
from rigctl.session.rows import MeasureRow, Row
from rigctl.session.sweeps import Sweep


class Responses:
    """Matches test stimuli with the sweeps that cover them."""

    def __init__(self, plan: Plan) -> None:
        self._kind = (
            "field_epsp_amplitude" if plan.pre_reference == "field_epsp_onset" else "epsp_amplitude"
        )
        self._waiting: deque[tuple[PlanLine, int]] = deque()
        self._of_phase: dict[str, list[float]] = {}

    def begin_phase(self) -> None:
        """Forget the responses of the phase before."""
        self._of_phase = {}

    def of_phase(self) -> dict[str, list[float]]:
        """Return this phase's responses by pathway, in order."""
        return self._of_phase

    def test_fired(self, line: PlanLine, at_ns: int) -> None:
        """A test stimulus was delivered at ``at_ns``; its sweep comes later."""
        self._waiting.append((line, at_ns))

    def measure(self, sweep: Sweep, spike_between: Callable[[int, int], bool]) -> list[Row]:
        """Measure the test responses that lie in ``sweep``; void ones give no row."""
        values = None
        end_ns = sweep.at_ns + round(len(sweep.samples) // 2 * 1e9 / sweep.rate_hz)
        rows: list[Row] = []
        while self._waiting and self._waiting[0][1] < end_ns:
            line, fired_ns = self._waiting.popleft()
            if fired_ns < sweep.at_ns:
                continue
            if values is None:
                values = sweep.values()
            fired_ms = (fired_ns - sweep.at_ns) / 1e6
            amplitude = response_amplitude(
                values, sweep.rate_hz, fired_ms, fired_ms + line.latency_ns / 1e6
            )
            onset_ns = fired_ns + line.latency_ns
            if amplitude is None or spike_between(onset_ns, onset_ns + 30_000_000):
                continue
            pathway = line.pathway or ""
            self._of_phase.setdefault(pathway, []).append(amplitude)
            rows.append(
                MeasureRow(
                    onset_ns, sweep.cell, pathway, 0, sweep.clamp, self._kind, amplitude, sweep.unit
                )
            )
        return rows
