"""Whole sessions on the two cells, and clocks that are far off."""

from __future__ import annotations

from pathlib import Path

import pytest

from rigctl.record.read import open_record
from rigctl.record.verify import verify
from tests.conftest import EXAMPLES, RIG_TEXT, rehearsed

CONDUCTANCE = RIG_TEXT.replace("amplitude_pa = 1500", "amplitude_pa = 700") + (
    '\n[sim]\ncell = "conductance"\n'
)


def test_the_conductance_cell_runs_a_session_and_repeats_it(tmp_path: Path) -> None:
    first = rehearsed(tmp_path / "1", rig=CONDUCTANCE)
    assert first.how == "as_planned"
    assert verify(first.record).ok
    again = rehearsed(tmp_path / "2", rig=CONDUCTANCE)
    with open_record(first.record) as a, open_record(again.record) as b:
        assert a.chain_tip == b.chain_tip
        dts = [p.delivered_dt_ns for p in a.pairings if p.delivered_dt_ns is not None]
        # The EPSP brings the spike forward a little, and it still is one spike each.
        assert len(dts) == 12
        assert all(8_000_000 < dt < 11_000_000 for dt in dts)


@pytest.mark.parametrize("ppm", [-4000, 50, 4000])
def test_the_clock_fit_finds_the_boxs_crystal(ppm: int, tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, faults=f"ppm={ppm}")
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        last = record.sync[-1]
        # Offset is host over box: a fast box makes it shrink. Bridge delays are ±0.5 ms over 70 s.
        assert last.skew_ppm == pytest.approx(-ppm, abs=30 + abs(ppm) * 0.01)
        assert all(s.bound_ns >= s.round_trip_ns // 2 for s in record.sync)


@pytest.mark.parametrize("on_since_s", [2147.4, 4294.9])
def test_a_session_runs_over_the_wrap_of_the_boxs_count(on_since_s: float, tmp_path: Path) -> None:
    # 2^32 ticks of 500 ns are 2147.48 s.
    rig = RIG_TEXT + f"\n[sim.clock]\non_since_s = {on_since_s}\n"
    ended = rehearsed(tmp_path, rig=rig)
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        assert {p.fate for p in record.pairings} == {"on_target"}
        fired = [t.fired_ns for t in record.triggers if t.fired_ns is not None]
        assert fired == sorted(fired)
        assert fired[-1] - fired[0] < 75_000_000_000


@pytest.mark.soak
def test_eight_hours_with_everything_planted(tmp_path: Path) -> None:
    protocol = (EXAMPLES / "pre_post.toml").read_text(encoding="utf-8")
    protocol = protocol.replace("duration_min = 30", "duration_min = 468")
    ended = rehearsed(
        tmp_path, protocol, faults="creep_ms=3,misses=8,doublets=3,corrupt_bytes=60,ppm=-200"
    )
    assert ended.how == "as_planned"
    verdict = verify(ended.record)
    assert verdict.ok
    with open_record(ended.record) as record:
        assert {t.fate for t in record.triggers} == {"fired"}
        # The box's count wraps every 35.8 min: 13 times.
        assert record.triggers[-1].fired_ns is not None
        assert record.triggers[-1].fired_ns > 13 * 2_147_483_648_000
