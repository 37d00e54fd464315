"""Edges of the compiler: rounding, spacing, ends of phases, seeds, clocks."""

from __future__ import annotations

import tomllib

import msgspec
import pytest

from rigctl.errors import InputError
from rigctl.protocol.builder import PhaseBuilder, Pulses
from rigctl.protocol.checks import check_protocol
from rigctl.protocol.compile import compile_plan
from rigctl.protocol.patterns import events_per_pairing
from rigctl.protocol.plan import PlanLine
from rigctl.protocol.schema import Pairings, Protocol
from tests.conftest import EXAMPLES, RIG_TEXT, SHORT, make_plan, make_rig
from tests.protocol.sound import check_plan

LINE = PlanLine("pre1", "pre", "s1", 100, 0, 0, 0, False, "trigger")


@pytest.mark.parametrize(
    ("asked_ns", "placed_ns"),
    [(0, 0), (249, 0), (250, 0), (251, 500), (499, 500), (750, 1000), (1250, 1000), (1251, 1500)],
)
def test_times_are_rounded_half_to_even_ticks(asked_ns: int, placed_ns: int) -> None:
    builder = PhaseBuilder(500, 0, 0, "p.toml")
    builder.pairing("s1", 1, "phase[1]", asked_ns, Pulses(((LINE, 0),), ()), None, 0)
    triggers, pairings = builder.finish(1, 1)
    assert triggers[0].at_ns == pairings[0].first_ns == pairings[0].last_ns == placed_ns


def test_pulses_of_a_line_nearer_than_the_box_can_are_refused() -> None:
    text = SHORT.replace("dt_ms = 10", "pre_at_ms = [0, 0.4]\npost_at_ms = [9]")
    plan = make_plan(text, make_rig(extra="\n[box]\nmin_spacing_us = 400\n"))
    assert [t.at_ns for t in plan.phases[1].triggers if t.line == "pre1"][:2] == [0, 400_000]
    with pytest.raises(InputError, match=r"two pulses on pre1 are 400 us apart at 0.400 ms of the "
                       r"phase; the box needs 401 us"):  # fmt: skip
        make_plan(text, make_rig(extra="\n[box]\nmin_spacing_us = 401\n"))


def test_a_phase_ends_after_its_longest_pulse() -> None:
    rig = make_rig(replace={"width_us = 2000\nstimulus": "width_us = 4_000_000\nstimulus"})
    text = SHORT.replace("rate_hz = 1", "rate_hz = 0.2").replace("pairings = 12", "pairings = 2")
    plan = make_plan(text, rig)
    check_plan(plan)
    assert plan.phases[1].duration_ns == 5_009_200_000 + 4_000_000_000


def test_a_next_block_waits_for_a_long_pulse() -> None:
    rig = make_rig(replace={"width_us = 2000\nstimulus": "width_us = 4_000_000\nstimulus"})
    text = SHORT.replace(
        "pairings = 12\nrate_hz = 1",
        'pairings = 1\n[[phase.block]]\nkind = "pairings"\npathway = "s1"\npairings = 1\ndt_ms = 5',
    )
    pre = [t.at_ns for t in make_plan(text, rig).phases[1].triggers if t.line == "pre1"]
    assert pre == [0, 9_200_000 + 4_000_000_000]


def test_each_random_block_has_a_stream_of_its_own() -> None:
    block = """
[[phase.block]]
kind = "pairings"
pathway = "s1"
dt_random = { low_ms = -20, high_ms = 20, min_abs_ms = 2.5 }
pairings = 40
rate_hz = 1
"""
    start, end = SHORT.index("[[phase.block]]"), SHORT.index('[[phase]]\nkind = "follow_up"')
    pairings = make_plan(SHORT[:start] + block + block + SHORT[end:]).phases[1].pairings
    first, second = ([p.target_dt_ns or 0 for p in pairings if p.block == n] for n in (1, 2))
    assert len(first) == len(second) == 40
    assert first != second
    for dt_ns in first + second:
        assert 2_500_000 <= abs(dt_ns) <= 20_000_000
        assert dt_ns % 1_000 == 0


@pytest.mark.parametrize(
    ("low_ms", "high_ms", "gap_ms", "dts_us"),
    [
        (-0.002, 0.003, 0.0, {-2, -1, 1, 2, 3}),
        (-0.004, 0.004, 0.003, {-4, -3, 3, 4}),
        (2.3, 2.3024, 0.0, {2300, 2301, 2302}),
        # Rejecting draws until one fits would take a thousand million of them here.
        (-600_000, 600_000, 599_999.9999, {-600_000_000, 600_000_000}),
    ],
)
def test_random_delta_t_reaches_each_allowed_microsecond_and_no_other(
    low_ms: float, high_ms: float, gap_ms: float, dts_us: set[int]
) -> None:
    raw = {"low_ms": low_ms, "high_ms": high_ms, "min_abs_ms": gap_ms}
    text = SHORT.replace("dt_ms = 10", "dt_random = { low_ms = 1, high_ms = 2 }").replace(
        "pairings = 12\nrate_hz = 1", "pairings = 80\nevery_s = 1300"
    )
    protocol = make_protocol_with(text, raw)
    rig = make_rig(replace={'access = "ruptured"': 'access = "perforated"'})
    plan = compile_plan(protocol, rig, protocol_file="p.toml", rig_file="rig.toml")
    # 80 draws miss one of five values with a chance under 1e-7; seeded, so never twice.
    assert {(p.target_dt_ns or 0) / 1000 for p in plan.phases[1].pairings} == dts_us


def make_protocol_with(text: str, random: dict[str, float]) -> Protocol:
    """Return a checked protocol whose ``dt_random`` holds these numbers."""
    raw = tomllib.loads(text)
    raw["phase"][1]["block"][0]["dt_random"] = random
    protocol = msgspec.convert(raw, Protocol)
    check_protocol(protocol, "p.toml")
    return protocol


@pytest.mark.parametrize(("deliver", "events"), [("both", 12), ("pre", 4), ("post", 8)])
def test_triggers_of_a_pairing_are_counted_for_what_is_delivered(deliver: str, events: int) -> None:
    raw = {
        "kind": "pairings", "pathway": "s1", "pairings": 1, "pre_at_ms": [0], "post_at_ms": [5, 9],
        "repeat": [{"times": 4, "every_ms": 50}], "deliver": deliver,
    }  # fmt: skip
    assert events_per_pairing(msgspec.convert(raw, Pairings)) == events


def test_several_delta_t_in_a_pairing_have_no_target_of_the_whole() -> None:
    for name, targets in (("triplet_pre_post_pre", [8, -8]), ("quadruplet", [-6, 6])):
        plan = make_plan((EXAMPLES / f"{name}.toml").read_text(encoding="utf-8"))
        pairing = plan.phases[1].pairings[0]
        assert pairing.target_dt_ns is None
        assert [p.target_dt_ns // 1_000_000 for p in pairing.pairs] == targets


@pytest.mark.parametrize("seed", range(4))
def test_poisson_with_a_negative_lag_begins_within_its_phase(seed: int) -> None:
    text = (EXAMPLES / "poisson.toml").read_text(encoding="utf-8")
    for old, new in (
        ("plan_seed = 3", f"plan_seed = {seed}"),
        ("shared_dt_ms = 8", "shared_dt_ms = -900"),
        ("shared_fraction = 0.2", "shared_fraction = 1"),
    ):
        assert old in text
        text = text.replace(old, new)
    plan = make_plan(text)
    check_plan(plan)
    assert len(plan.phases[1].pairings) > 500


def test_a_poisson_rate_that_its_dead_time_cannot_reach_is_refused() -> None:
    text = (EXAMPLES / "poisson.toml").read_text(encoding="utf-8")
    text = text.replace("dead_time_ms = 4", "dead_time_ms = 250")
    with pytest.raises(InputError, match=r"pre_rate_hz = 4.0: with a dead time of 250 ms less "
                       r"than 4 Hz is possible"):  # fmt: skip
        make_plan(text)


def test_a_contingent_rule_stands_alone_and_keeps_its_rate() -> None:
    text = (EXAMPLES / "contingent.toml").read_text(encoding="utf-8")
    rule = make_plan(text.replace("max_min = 7", "max_min = 7\nmax_rate_hz = 0.5")).phases[1].rule
    assert rule is not None
    assert rule.min_interval_ns == 2_000_000_000
    block = text[text.index("[[phase.block]]") : text.index('[[phase]]\nkind = "follow_up"')]
    with pytest.raises(InputError, match="a contingent block stands alone in its induction"):
        make_plan(text.replace(block, block + block))


def test_two_lines_that_make_spikes_need_a_choice() -> None:
    second = RIG_TEXT + (
        '\n[output.post2]\ndrives = "post"\nwidth_us = 2000\nlatency.spike_peak = { mean_ms = 4 }\n'
    )
    rig = make_rig(extra=second.removeprefix(RIG_TEXT))
    with pytest.raises(InputError, match=r"block\[1\].post_line: needed, .*several: post1, post2"):
        make_plan(rig=rig)
    said = SHORT.replace("dt_ms = 10", 'dt_ms = 10\npost_line = "post2"')
    assert [t.at_ns for t in make_plan(said, rig).phases[1].triggers[:2]] == [0, 8_300_000]


def test_the_washout_clock_allows_its_last_moment() -> None:
    # One minute before the plan and seven of baseline: exactly the eight that are allowed.
    text = SHORT.replace("duration_min = 0.5", "duration_min = 7", 1)
    assert make_plan(text).washout["start_by_ns"] == 8 * 60_000_000_000
    with pytest.raises(InputError, match=r"starts 8\.01 min after break-in"):
        make_plan(SHORT.replace("duration_min = 0.5", "duration_min = 7.01", 1))
