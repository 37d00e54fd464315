"""The audit, against counts made by hand."""

from __future__ import annotations

import math
from functools import cache

import msgspec
import numpy as np
import pytest

from rigctl.protocol.audit import Audit, audit
from rigctl.protocol.audit_washout import washout_minutes
from rigctl.protocol.planned import planned_spikes
from rigctl.protocol.sensitivity import change_of, sensitivity
from tests.conftest import EXAMPLES, SHORT, make_plan, make_rig


@cache
def _audit(protocol: str, extra: str = "") -> Audit:
    rig = make_rig(extra)
    return audit(make_plan(protocol, rig), rig)


def _with(old: str, new: str) -> str:
    assert old in SHORT
    return SHORT.replace(old, new, 1)


def test_ten_ms_at_twenty_hz_is_also_minus_forty() -> None:
    found = _audit(_with("rate_hz = 1", "rate_hz = 20"))
    by_dt = {u.dt_ms: u.count for u in found.unintended if u.what == "between pairings"}
    # 12 pairings 50 ms apart: neighbours at 10 − 50·n and 10 + 50·n within 5·33.7 ms.
    assert by_dt == {-40: 11, 60: 11, -90: 10, 110: 10, -140: 9, 160: 9}
    assert found.reach_ms == pytest.approx(168.5)
    assert found.intended_dt_ms == [(10.0, 12)]


def test_ten_ms_at_ten_hz_is_also_minus_ninety() -> None:
    found = _audit(_with("rate_hz = 1", "rate_hz = 10"))
    # 12 pairings 100 ms apart: 10 − 100 and 10 + 100 within 168.5 ms, for 11 neighbours each.
    assert [(u.dt_ms, u.count, u.pathway) for u in found.unintended] == [
        (-90, 11, "s1"),
        (110, 11, "s1"),
    ]


def test_slow_pairings_have_no_unintended_pairs() -> None:
    assert _audit(SHORT).unintended_total == 0


def test_a_test_stimulus_near_spikes_is_a_pair() -> None:
    protocol = _with(
        '[[phase.block]]\nkind = "pairings"',
        '[[phase.test]]\npathway = "s1"\nevery_s = 60\nfirst_at_s = 0.05\nstep = false\n\n'
        '[[phase.block]]\nkind = "pairings"',
    )
    found = _audit(protocol)
    assert [(u.dt_ms, u.count, u.what) for u in found.unintended] == [
        (-40.0, 1, "test stimulus of s1")
    ]
    (forecast,) = [f for f in found.forecasts if f.pathway == "s1"]
    assert forecast.without_tests > forecast.change
    assert forecast.without_tests == pytest.approx(forecast.intended_only, rel=1e-9)


def test_a_test_of_the_other_pathway_near_spikes_is_a_pair_of_its_own() -> None:
    protocol = _with(
        '[[phase.block]]\nkind = "pairings"',
        '[[phase.test]]\npathway = "s2"\nevery_s = 60\nfirst_at_s = 0.05\nstep = false\n\n'
        '[[phase.block]]\nkind = "pairings"',
    )
    found = _audit(protocol)
    # s2 at 50 + 2.55 ms, the spike at 2.3 + 10 ms: −40.25 ms.
    assert [(u.dt_ms, u.count, u.what, u.pathway) for u in found.unintended] == [
        (-40.0, 1, "test stimulus of s2", "s2")
    ]
    change = {f.pathway: f.change for f in found.forecasts}
    assert change["s2"] == pytest.approx(-0.273 / 60 * math.exp(-40.25 / 33.7), rel=1e-9)
    (s2,) = [f for f in found.forecasts if f.pathway == "s2"]
    assert (s2.intended_only, s2.without_tests) == (0, 0)


def test_events_of_a_random_train_are_no_test_stimuli() -> None:
    text = (EXAMPLES / "poisson.toml").read_text(encoding="utf-8")
    found = _audit(text)
    induction = found.segments[1]
    pulses = {(c.line, c.phase): c.pulses for c in found.counts}
    assert induction.tests == 0
    assert induction.pairings + induction.unpaired == pulses["pre1", "induction"]
    (forecast,) = [f for f in found.forecasts if f.pathway == "s1"]
    assert forecast.without_tests == pytest.approx(forecast.change, rel=1e-9)
    assert {u.what for u in found.unintended} == {"pre event outside pairings", "between pairings"}


def test_tests_beside_a_random_train_are_told_from_it() -> None:
    text = (EXAMPLES / "poisson.toml").read_text(encoding="utf-8")
    block = '[[phase.block]]\nkind = "poisson"'
    assert block in text
    beside = '[[phase.test]]\npathway = "s2"\nevery_s = 10\nfirst_at_s = 5\nstep = false\n\n'
    found = _audit(text.replace(block, beside + block))
    assert (found.segments[1].tests, found.segments[1].unpaired) == (18, 592)
    (tests,) = [s for s in found.stretches if s.phase == "induction" and s.what == "tests"]
    assert (tests.pathway, tests.count) == ("s2", 18)


def test_blocks_and_tests_have_their_own_stretches() -> None:
    found = _audit((EXAMPLES / "frequency_series.toml").read_text(encoding="utf-8"))
    blocks = [s for s in found.stretches if s.phase == "induction"]
    assert [s.what for s in blocks] == [f"block {n}" for n in range(1, 11)]
    assert [s.dt_ms for s in blocks] == [8, -8] * 5
    assert [s.count for s in blocks[:3]] == [5, 5, 25]
    induction = found.segments[1]
    # Four intervals of 10 s and one pairing of 9.2 ms between its triggers (8 + 2.3 − 3.1 is 7.2).
    assert blocks[0].start_ns == induction.start_ns
    assert blocks[0].end_ns - blocks[0].start_ns == 40_007_200_000
    assert blocks[-1].end_ns < induction.end_ns
    tests = [(s.pathway, s.count) for s in found.stretches if s.phase == "baseline"]
    assert tests == [("s1", 36), ("s2", 36)]


def test_what_a_box_rule_will_meet_is_not_made_up() -> None:
    found = _audit((EXAMPLES / "contingent.toml").read_text(encoding="utf-8"))
    assert found.intended_dt_ms == [(-8.0, 150)]
    assert found.unintended == []
    assert all(f.change == 0 and f.sensitivity is None for f in found.forecasts)
    assert ["is not planned" in note for note in found.notes] == [True]
    (s1,) = [f for f in found.forecasts if f.pathway == "s1"]
    assert s1.extrapolation == "150 pairings extrapolate: bi-poo-2001 comes from 60 pairings"


def test_burst_neighbours_take_from_the_forecast() -> None:
    text = (EXAMPLES / "burst.toml").read_text(encoding="utf-8")
    found = _audit(text)
    (forecast,) = [f for f in found.forecasts if f.pathway == "s1"]
    assert forecast.change < forecast.intended_only
    # 75 pairs at +8 ms: Bi & Poo 2001, Annu Rev Neurosci 24:139 (read second-hand), per pair.
    assert forecast.intended_only == pytest.approx(75 * 0.777 / 60 * math.exp(-8 / 16.8), rel=1e-9)
    assert forecast.extrapolation is None  # 15 pairings


def test_sensitivity_of_a_single_exponential_is_known() -> None:
    (forecast,) = [f for f in _audit(SHORT).forecasts if f.pathway == "s1"]
    s = forecast.sensitivity
    assert s is not None
    # exp(−e/16.8) = .9 → 1.770 ms later; exp(e/16.8) = 1.1 → 1.601 ms earlier; 10 % of misses
    # take 10 % (with a finite number of draws, to within a few tenths).
    assert s.constant_later_ms == pytest.approx(1.770, abs=0.005)
    assert s.constant_earlier_ms == pytest.approx(1.601, abs=0.005)
    assert s.miss_pct == pytest.approx(10, abs=1)
    assert s.jitter_sd_ms is not None
    assert s.jitter_sd_ms > 4


def test_sensitivity_counts_far_spikes_where_the_rule_reaches_far() -> None:
    own = (
        'rule = "pair-all"\na_plus = 0.01\na_minus = 0.001\ntau_plus_ms = 16.8\ntau_minus_ms = 5000'
    )
    # Depression reaches the tests seconds after the last spike.
    plan = make_plan(SHORT.replace('rule = "pair-all"\nset = "bi-poo-2001"', own), make_rig())
    spikes = planned_spikes(plan)
    pre = np.array([s.at_ns for s in spikes if s.pathway == "s1"], dtype=np.float64)
    post = np.array([s.at_ns for s in spikes if s.side == "post"], dtype=np.float64)
    (choice,) = plan.forecasts
    found = sensitivity(choice, spikes, "s1")
    assert found is not None
    assert found.constant_later_ms is not None
    base = change_of(choice, pre, post)
    moved = change_of(choice, pre, post + found.constant_later_ms * 1e6)
    assert abs(moved - base) == pytest.approx(0.1 * abs(base), rel=0.01)


def test_washout_minutes() -> None:
    found = _audit((EXAMPLES / "pre_post.toml").read_text(encoding="utf-8"))
    assert [m.what for m in found.washout[:3]] == ["before the plan", "baseline", "baseline"]
    assert found.washout[7].what == "induction"
    assert [m.minute for m in found.washout if m.flag] == [13, 14]
    assert [m.inducing for m in found.washout] == [False] * 7 + [True] * 7
    perforated = make_rig(replace={'access = "ruptured"': 'access = "perforated"'})
    assert washout_minutes(make_plan(rig=perforated)) == []


def test_a_minute_is_late_only_while_the_induction_lasts() -> None:
    # The induction lasts from 7 to 13.18 min after break-in; minute 14 outlasts it.
    text = (EXAMPLES / "pre_post.toml").read_text(encoding="utf-8")
    for warn_at, late in ((13.1, [14]), (13.2, []), (13, [14]), (12.99, [13, 14])):
        rig = make_rig(f"\n[washout]\nwarn_at_min = {warn_at}\nend_by_min = 13.5\n")
        minutes = washout_minutes(make_plan(text, rig))
        assert [m.minute for m in minutes if m.flag] == late
        assert {m.flag for m in minutes} <= {"", "late"}


def test_counts_and_finish() -> None:
    found = _audit(SHORT)
    counts = {(c.line, c.phase): c.pulses for c in found.counts}
    assert counts["pre1", "induction"] == counts["post1", "induction"] == 12
    assert counts["pre1", "baseline"] == 8
    assert counts["pre2", "baseline"] == 7
    assert counts["step1", "baseline"] == 15
    assert found.segments[-1].end_ns == found.duration_ns
    assert [s.pairings for s in found.segments] == [0, 12, 0]


def test_what_is_not_stated_is_listed() -> None:
    text = (EXAMPLES / "no_rule_named.toml").read_text(encoding="utf-8")
    replace = {
        "sd_ms = 0.15, n = 20": "n = 3",
        "balanced = true\namplitude_ua = 60\n": "",
        'diameter_um = 125\nmaterial = "PtIr"': "",
        "amplitude_pa = 1500": "",
    }
    rig = make_rig(replace=replace)
    missing = " / ".join(audit(make_plan(text, rig), rig).not_stated)
    for words in ("preparation", "no preparation named", "approval", "latency of pre1 with n of 10",
                  "SD of the latency of pre1", "amplitude of isolator_a", "charge balance of",
                  "diameter or area of the electrode bipolar", "material of the electrode bipolar",
                  "amplitude of spike_pulse", "washout clock"):  # fmt: skip
        assert words in missing
    assert "latency of pre2" not in missing


def test_nothing_is_missing_where_all_is_stated() -> None:
    clock = "\n[washout]\nstart_by_min = 8\nend_by_min = 15\n"
    rig = make_rig(clock, {'access = "ruptured"': 'access = "ruptured"\napproval = "A-1"'})
    assert audit(make_plan(rig=rig), rig).not_stated == []


def test_the_audit_is_plain_data() -> None:
    assert msgspec.json.decode(msgspec.json.encode(_audit(SHORT)), type=Audit) == _audit(SHORT)
