"""The box's clock: exact integers both ways."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from rigctl_sim.boxclock import BoxClock

clocks = st.builds(
    BoxClock,
    tick_ns=st.sampled_from([333, 500, 1000, 62_500]),
    ppm=st.floats(-5000, 5000),
    boot_ns=st.integers(-(10**13), 0),
)


@given(clocks, st.integers(0, 10**15))
def test_the_first_ns_of_a_tick_is_where_the_count_changes(clock: BoxClock, at_ns: int) -> None:
    tick = clock.tick_at(at_ns)
    first_ns = clock.first_ns_of(tick)
    assert first_ns <= at_ns
    assert clock.tick_at(first_ns) == tick
    assert clock.tick_at(first_ns - 1) == tick - 1


def test_fifty_ppm_are_180_ms_an_hour() -> None:
    # Arithmetic: 50e-6 · 3600 s (a fact of crystals, from memory).
    clock = BoxClock(500, 50, 0)
    assert clock.session_ns_at(3600 * 10**9) == 3600 * 10**9 + 180_000_000


@given(clocks, st.integers(0, 10**15))
def test_session_time_is_the_count_to_within_a_tick(clock: BoxClock, at_ns: int) -> None:
    behind = clock.session_ns_at(at_ns) - clock.tick_at(at_ns) * clock.tick_ns
    assert 0 <= behind < clock.tick_ns
