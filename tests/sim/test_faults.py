"""Faults: drawn from the seed, planted where that is said, exactly as often as asked."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from rigctl.errors import InputError
from rigctl.record.read import open_record
from rigctl.record.verify import verify
from rigctl_sim.faults import Faults, WireFaults, parse, plant, spike_pulses
from rigctl_sim.knobs import SimKnobs
from tests.conftest import RIG_TEXT, SHORT, make_plan, rehearsed

S = 1_000_000_000
DURATION_NS = 1_000 * S

# Two inductions, so that the ordinals of the second begin where those of the first end.
TWICE = SHORT.replace(
    '[[phase]]\nkind = "follow_up"',
    SHORT[
        SHORT.index('[[phase]]\nkind = "induction"') : SHORT.index('[[phase]]\nkind = "follow')
    ].replace('kind = "induction"', 'kind = "induction"\nname = "again"')
    + '[[phase]]\nkind = "follow_up"',
)

PLAN = make_plan()


def test_ordinals_count_the_pulses_that_should_evoke_a_spike() -> None:
    # Steps and presynaptic pulses of the baseline are none of them.
    assert spike_pulses(make_plan(), induction_only=True) == list(range(1, 13))
    assert spike_pulses(make_plan(TWICE), induction_only=True) == list(range(1, 25))


@given(
    seed=st.integers(0, 2**32),
    misses=st.integers(0, 6),
    doublets=st.integers(0, 6),
)
def test_planted_ordinals_are_distinct_within_range_and_from_the_seed(
    seed: int, misses: int, doublets: int
) -> None:
    faults = Faults(misses=misses, doublets=doublets)
    planted = plant(faults, SimKnobs(), PLAN, seed).scripted
    both = planted.miss_at + planted.doublet_at
    assert (len(planted.miss_at), len(planted.doublet_at)) == (misses, doublets)
    assert len(set(both)) == misses + doublets
    assert set(both) <= set(range(1, 13))
    assert plant(faults, SimKnobs(), PLAN, seed).scripted == planted


def test_other_seeds_plant_elsewhere() -> None:
    faults = Faults(misses=4)
    drawn = {tuple(plant(faults, SimKnobs(), PLAN, seed).scripted.miss_at) for seed in range(20)}
    assert len(drawn) > 10


def test_more_than_there_are_pulses_is_refused() -> None:
    with pytest.raises(InputError, match="13 in all; the induction has 12"):
        plant(Faults(misses=7, doublets=6), SimKnobs(), PLAN, 1)


def test_what_concerns_the_cell_and_the_clock_is_set_in_their_knobs() -> None:
    faults = parse("creep_ms=-2.5, spontaneous_hz=0.5, ppm=50")
    knobs = plant(faults, SimKnobs(), PLAN, 1)
    assert (knobs.scripted.creep_ms, knobs.scripted.spontaneous_hz) == (-2.5, 0.5)
    assert knobs.clock.ppm == 50


def _carried(faults: Faults, seed: int) -> list[tuple[bool, bytes, bytes]]:
    """Send a chunk each way every second; return those that arrived changed."""
    wire = WireFaults(faults, DURATION_NS, seed)
    chunk = bytes(range(1, 30))
    sent = [(way, n * S) for n in range(DURATION_NS // S + 1) for way in (True, False)]
    arrived = [(way, wire.on_the_way(chunk, way, at_ns)) for way, at_ns in sent]
    return [(way, chunk, got) for way, got in arrived if got != chunk]


@given(seed=st.integers(0, 2**32), flips=st.integers(0, 9), drops=st.integers(0, 9))
def test_as_many_bytes_are_hurt_as_asked_in_both_directions(
    seed: int, flips: int, drops: int
) -> None:
    hurt = _carried(Faults(corrupt_bytes=flips, drop_bytes=drops), seed)
    lost = sum(len(sent) - len(got) for _, sent, got in hurt)
    assert lost == drops
    flipped = [
        a ^ b
        for _, sent, got in hurt
        if len(sent) == len(got)
        for a, b in zip(sent, got, strict=True)
        if a != b
    ]
    # Two in one second may hit the same chunk, or one bit twice; otherwise it is one bit each.
    assert len(flipped) <= flips
    if len(hurt) == flips + drops:
        assert len(flipped) == flips
        assert all(bits.bit_count() == 1 for bits in flipped)
        assert sum(way for way, _, _ in hurt) == -(-flips // 2) + -(-drops // 2)


def test_no_fault_no_change() -> None:
    assert _carried(Faults(), 1) == []


# --- through whole sessions ---------------------------------------------------------------------


def test_a_short_standstill_of_the_link_costs_nothing(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, faults="stall_ms=120")
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        assert {t.fate for t in record.triggers} == {"fired"}
        # Nothing was late either: the triggers had been uploaded ahead.
        assert {p.fate for p in record.pairings} == {"on_target"}


@pytest.mark.parametrize("stall_ms", [300, 3_000])
def test_a_long_standstill_disarms_the_box(stall_ms: int, tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, faults=f"stall_ms={stall_ms}")
    assert (ended.how, ended.exit_code) == ("box_disarmed", 5)
    with open_record(ended.record) as record:
        assert record.bodies("ended")[0]["text"] == "keep-alive lost"
        fates = {t.fate for t in record.triggers}
        assert "dropped_late" not in fates
        assert "cancelled" in fates
    assert verify(ended.record).ok


def test_spontaneous_spikes_are_in_the_record_and_belong_to_no_pairing(tmp_path: Path) -> None:
    quiet, firing = (
        rehearsed(tmp_path / str(hz), faults=f"spontaneous_hz={hz}").record for hz in (0, 0.2)
    )
    with open_record(quiet) as record:
        assert not [s for s in record.spikes if s.side == "post" and s.pairing is None]
    with open_record(firing) as record:
        own = [s for s in record.spikes if s.side == "post" and s.pairing is None]
        assert {s.source for s in own} == {"detector"}
        # Some 75 s at 0.2 Hz: 15, with an SD of about 4.
        assert 1 <= len(own) <= 35


def test_without_jitter_every_spike_is_where_the_rig_file_says(tmp_path: Path) -> None:
    ended = rehearsed(
        tmp_path, rig=RIG_TEXT + "\n[sim]\ndetector_jitter_ms = 0\n", faults="jitter_ms=0,ppm=0"
    )
    with open_record(ended.record) as record:
        fired = {t.pairing: t.fired_ns for t in record.triggers if t.line == "post1" and t.fired_ns}
        peaks = {s.pairing: s.at_ns for s in record.spikes if s.side == "post"}
        assert len(peaks) == 12
        assert {peaks[n] - fired[n] for n in peaks} == {3_100_000}
        assert {p.delivered_dt_ns for p in record.pairings} == {10_000_000}
