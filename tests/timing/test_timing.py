"""Clocks, the feeder, and clock synchronisation, on exact times."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from rigctl.session.actions import ScheduledTrigger
from rigctl.session.core import ticks_to_ns
from rigctl.timing.clock import VIRTUAL_EPOCH_UTC, MonotonicClock, VirtualClock
from rigctl.timing.feeder import Feeder
from rigctl.timing.sync import ClockSync


def test_the_virtual_clock_moves_only_when_told_and_never_back() -> None:
    clock = VirtualClock(5)
    assert clock.now_ns() == 5
    clock.sleep_until(100)
    clock.sleep_until(50)
    assert clock.now_ns() == 100
    assert clock.utc() == VIRTUAL_EPOCH_UTC


def test_the_monotonic_clock_does_not_sleep_for_what_has_passed() -> None:
    clock = MonotonicClock()
    before = clock.now_ns()
    clock.sleep_until(before - 10**12)
    assert clock.now_ns() >= before
    assert clock.utc().endswith("Z")


@given(st.integers(-(2**70), 2**70), st.integers(1, 10_000), st.integers(1, 10_000))
def test_ticks_are_rounded_half_to_even(tick: int, num: int, den: int) -> None:
    from fractions import Fraction

    assert ticks_to_ns(tick, num, den) == round(Fraction(tick * num, den))


def _triggers(*ticks: int) -> list[ScheduledTrigger]:
    return [ScheduledTrigger(n, "pre1", t, 200) for n, t in enumerate(ticks, 1)]


def test_the_feeder_uploads_within_horizon_and_credits_and_drops_the_late() -> None:
    feeder = Feeder(horizon_ticks=1000, guard_ticks=10)
    feeder.add(_triggers(5, 100, 900, 1000, 1001, 5000))
    assert feeder.next_tick() == 5 - 1000
    feed = feeder.feed(0, credits=2)
    assert [t.id for t in feed.too_late] == [1]
    assert [t.id for t in feed.upload] == [2, 3]
    assert [t.id for t in feeder.feed(0, credits=8).upload] == [4]
    assert feeder.next_tick() == 1
    assert feeder.feed(0, credits=8).upload == []
    assert [t.id for t in feeder.feed(1, credits=8).upload] == [5]


def test_without_credits_what_becomes_late_is_dropped_not_bunched() -> None:
    feeder = Feeder(horizon_ticks=1000, guard_ticks=10)
    feeder.add(_triggers(100, 200, 300))
    assert feeder.feed(50, credits=0).upload == []
    feed = feeder.feed(195, credits=3)
    assert ([t.id for t in feed.too_late], [t.id for t in feed.upload]) == ([1, 2], [3])


def test_withdrawn_triggers_do_not_leave() -> None:
    feeder = Feeder(horizon_ticks=1000, guard_ticks=10)
    feeder.add(_triggers(100, 200, 300))
    assert feeder.withdraw([2, 9]) == [2]
    assert [t.id for t in feeder.feed(0, credits=9).upload] == [1, 3]


def test_the_midpoint_is_that_of_rfc_5905() -> None:
    # RFC 5905 §8 (read there): θ = ½[(T2−T1)+(T3−T4)], δ = (T4−T1)−(T3−T2). Worked example
    # computed here: θ −946.996720 s, δ .001800 s, bounds [−946.997620, −946.995820] s.
    sync = ClockSync()
    exchange = sync.exchange(1_000_000_000_000, 53_004_180_000, 53_004_230_000, 1_000_001_850_000)
    # Ours is host minus box: the other way round.
    assert exchange.offset_ns == 946_996_720_000
    assert exchange.round_trip_ns == 1_800_000
    assert exchange.offset_ns - exchange.bound_ns == 946_995_820_000
    assert exchange.offset_ns + exchange.bound_ns == 946_997_620_000


@given(
    st.integers(-200, 200), st.integers(-(10**12), 10**12),
    st.lists(st.tuples(st.integers(1_000, 3_000_000), st.integers(1_000, 3_000_000)), min_size=3,
             max_size=60),
)  # fmt: skip
def test_the_true_offset_lies_within_every_exchanges_bound(
    ppm: int, offset_ns: int, delays: list[tuple[int, int]]
) -> None:
    sync = ClockSync()

    def box_ns(host_ns: int) -> int:
        return (host_ns - offset_ns) * (1_000_000 + ppm) // 1_000_000

    for n, (out_ns, back_ns) in enumerate(delays):
        t1 = n * 2_000_000_000
        heard = t1 + out_ns
        t4 = heard + back_ns
        exchange = sync.exchange(t1, box_ns(heard), box_ns(heard), t4)
        true_ns = heard - box_ns(heard)
        # Half a round trip, and what the box's clock gains during it.
        slack = exchange.round_trip_ns * abs(ppm) // 1_000_000 + 2
        assert abs(exchange.offset_ns - true_ns) <= exchange.bound_ns + slack
    here = sync.session_ns(t4)
    assert abs(sync.host_ns(here) - t4) <= 2


def test_skew_is_found_with_symmetric_delays() -> None:
    sync = ClockSync()
    for n in range(100):
        host = n * 2_000_000_000
        box = host * (1_000_000 + 40) // 1_000_000
        skew = sync.exchange(host - 500, box, box, host + 500).skew_ppm
    assert skew == pytest.approx(-40, abs=0.01)
    ahead = 198_000_000_000 + 30_000_000_000
    assert abs(sync.session_ns(ahead) - ahead * 1_000_040 // 1_000_000) < 2_000
