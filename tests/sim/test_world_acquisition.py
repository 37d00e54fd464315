"""Sweeps: where they begin and end, on which clock, and that no sample is recorded twice."""

from __future__ import annotations

import itertools

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rigctl.session.sweeps import Sweep
from rigctl_sim.acquisition import SimAcquisition
from rigctl_sim.boxclock import BoxClock
from rigctl_sim.knobs import AcquisitionKnobs

MS = 1_000_000
S = 1_000_000_000


class Ramp:
    """A cell whose trace is the world time, in µV per ms: every sample says when it was taken."""

    def __init__(self, mv_per_s: float = 1.0) -> None:
        self.mv_per_s = mv_per_s
        self.forgotten_ns = 0

    def trace_mv(self, start_ns: int, n: int, rate_hz: float) -> npt.NDArray[np.float64]:
        assert start_ns >= self.forgotten_ns
        return (start_ns / 1e9 + np.arange(n) / rate_hz) * self.mv_per_s

    def forget(self, before_ns: int) -> None:
        self.forgotten_ns = before_ns


def _run(
    pulses_ns: list[int], ppm: float = 0.0, cell: Ramp | None = None, **knobs: float | bool
) -> list[Sweep]:
    """Let pulses come; complete each sweep when it is due, as the world does."""
    acquisition = SimAcquisition(
        AcquisitionKnobs(**knobs),  # type: ignore[arg-type]
        BoxClock(500, ppm, -3 * S),
        cell or Ramp(),  # type: ignore[arg-type]
    )
    taken: list[Sweep] = []
    for at_ns in [*sorted(pulses_ns), 1 << 60]:
        while acquisition.due_ns <= at_ns and acquisition.due_ns < 1 << 60:
            acquisition.complete()
            assert acquisition.waiting
            taken += acquisition.take()
            assert not acquisition.waiting
        if at_ns < 1 << 60:
            acquisition.pulse(at_ns)
    return taken


def _mv(sweep: Sweep) -> npt.NDArray[np.float64]:
    return np.frombuffer(sweep.samples, "<i2") * sweep.scale


def test_a_sweep_surrounds_its_pulses() -> None:
    (sweep,) = _run([10 * S, 10 * S + 150 * MS])
    # 50 ms before the first, 400 ms after the last; the box was on 3 s before.
    assert sweep.at_ns == 13 * S - 50 * MS
    assert len(sweep.samples) // 2 == 6_000
    assert (sweep.rate_hz, sweep.unit) == (10_000, "mV")
    assert _mv(sweep)[[0, -1]] == pytest.approx([9.95, 10.5499], abs=sweep.scale)


def test_sweeps_that_would_overlap_follow_each_other() -> None:
    # The second pulse comes 10 ms after the first sweep's end.
    first, second = _run([10 * S, 10 * S + 410 * MS])
    assert second.at_ns == first.at_ns + 450 * MS
    assert len(second.samples) // 2 == 4_100


def test_a_long_train_goes_on_in_the_next_sweep() -> None:
    sweeps = _run([10 * S + n * 100 * MS for n in range(251)], longest_s=10)
    assert [len(s.samples) // 2 for s in sweeps] == [100_000, 100_000, 54_500]
    assert [b.at_ns - a.at_ns for a, b in itertools.pairwise(sweeps)] == [10 * S, 10 * S]


@given(
    gaps_ms=st.lists(st.integers(1, 3_000), min_size=1, max_size=40),
    ppm=st.sampled_from([-4_000.0, 0.0, 50.0]),
)
def test_every_pulse_lies_in_exactly_one_sweep(gaps_ms: list[int], ppm: float) -> None:
    clock = BoxClock(500, ppm, -3 * S)
    pulses = [5 * S + at * MS for at in itertools.accumulate(gaps_ms)]
    spans = [
        # On the box's clock a sample lasts a little longer or shorter than on the true one.
        (s.at_ns, s.at_ns + len(s.samples) / 2 / s.rate_hz * 1e9 * (1 + ppm * 1e-6))
        for s in _run(pulses, ppm, longest_s=2)
    ]
    assert all(a[1] <= b[0] + 1 for a, b in itertools.pairwise(spans))
    for at_ns in map(clock.session_ns_at, pulses):
        assert sum(begin <= at_ns < end for begin, end in spans) == 1


def test_the_first_sample_is_timed_on_the_boxs_clock() -> None:
    (sweep,) = _run([3600 * S], ppm=50)
    # 50 ppm of 3603 s less 50 ms.
    assert sweep.at_ns == 3603 * S - 50 * MS + 180_147_500


def test_a_reset_of_the_box_does_not_move_the_sweep_that_had_begun() -> None:
    clock = BoxClock(500, 0, 0)
    acquisition = SimAcquisition(AcquisitionKnobs(), clock, Ramp())  # type: ignore[arg-type]
    acquisition.pulse(10 * S)
    clock.boot_ns = 10 * S + 1
    acquisition.complete()
    (sweep,) = acquisition.take()
    assert sweep.at_ns == 10 * S - 50 * MS


def test_beyond_the_rails_it_is_clipped() -> None:
    (sweep,) = _run([100 * S], cell=Ramp(mv_per_s=-1e6))
    assert set(np.frombuffer(sweep.samples, "<i2").tolist()) == {-32_767}


def test_switched_off_there_are_none() -> None:
    assert _run([10 * S], on=False) == []


def test_history_is_let_go() -> None:
    cell = Ramp()
    _run([10 * S, 20 * S], cell=cell)
    assert cell.forgotten_ns == 20 * S + 400 * MS
