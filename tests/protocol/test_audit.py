"""The audit, against counts made by hand and against a naive double loop."""

from __future__ import annotations

import math
from collections import Counter

import msgspec
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.protocol.audit import Audit, audit
from rigctl.protocol.planned import planned_spikes
from tests.conftest import EXAMPLES, SHORT, make_plan, make_rig


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
        (-40.0, 1, "test stimulus or unpaired pre")
    ]
    (forecast,) = [f for f in found.forecasts if f.pathway == "s1"]
    assert forecast.without_tests > forecast.change
    assert forecast.without_tests == pytest.approx(forecast.intended_only, rel=1e-9)


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


def test_washout_minutes() -> None:
    found = _audit((EXAMPLES / "pre_post.toml").read_text(encoding="utf-8"))
    assert [m.what for m in found.washout[:3]] == ["before the plan", "baseline", "baseline"]
    assert found.washout[7].what == "induction"
    assert [m.minute for m in found.washout if m.flag] == [13, 14]
    perforated = make_rig(replace={'access = "ruptured"': 'access = "perforated"'})
    assert audit(make_plan(rig=perforated), perforated).washout == []


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
    rig = make_rig(replace={"sd_ms = 0.15, n = 20": "n = 3", "amplitude_ua = 60\n": ""})
    missing = " / ".join(audit(make_plan(text, rig), rig).not_stated)
    for words in ("preparation", "no preparation named", "approval", "latency of pre1 with n of 10",
                  "SD of the latency of pre1", "amplitude of isolator_a"):  # fmt: skip
        assert words in missing


@settings(max_examples=20, deadline=None)
@given(st.sampled_from([3.0, 7.0, 20.0, 40.0]), st.integers(2, 20), st.floats(1, 15))
def test_the_pair_search_against_a_double_loop(rate_hz: float, count: int, dt_ms: float) -> None:
    protocol = (
        SHORT.replace("rate_hz = 1", f"rate_hz = {rate_hz}")
        .replace("pairings = 12", f"pairings = {count}")
        .replace("dt_ms = 10", f"dt_ms = {dt_ms}")
    )
    rig = make_rig()
    plan = make_plan(protocol, rig)
    found = audit(plan, rig)
    meant = {
        (p.pre_trigger, p.post_trigger)
        for phase in plan.phases
        for x in phase.pairings
        for p in x.pairs
    }
    spikes = planned_spikes(plan)
    naive: Counter[float] = Counter()
    for pre in spikes:
        for post in spikes:
            if (pre.side, pre.pathway, post.side) != ("pre", "s1", "post"):
                continue
            gap_ns = post.at_ns - pre.at_ns
            if gap_ns and abs(gap_ns) <= found.reach_ms * 1e6:
                naive[float(round(gap_ns / 1e6))] += (pre.trigger, post.trigger) not in meant
    search: Counter[float] = Counter()
    for u in found.unintended:
        search[u.dt_ms] += u.count
    assert +search == +naive


def test_the_audit_is_plain_data() -> None:
    assert msgspec.json.decode(msgspec.json.encode(_audit(SHORT)), type=Audit) == _audit(SHORT)
