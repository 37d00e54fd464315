"""The plan: exact times, on the grid, sorted; a hash that sees everything."""

from __future__ import annotations

import itertools
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.errors import InputError
from rigctl.protocol.compile import compile_plan
from rigctl.protocol.load import parse_protocol, parse_rig
from rigctl.protocol.plan import Plan
from tests.conftest import EXAMPLES, RIG_TEXT, SHORT, make_plan, make_rig
from tests.protocol.sound import check_plan

EXAMPLE_FILES = sorted(EXAMPLES.glob("*.toml"))
OWN_RIG = {"light": "light", "in_vivo_sensory": "in_vivo"}


def example_plan(path: Path) -> Plan:
    """Compile an example on the rig that it names."""
    rig_text = RIG_TEXT
    if path.stem in OWN_RIG:
        rig_text = (EXAMPLES / f"rigs/{OWN_RIG[path.stem]}.toml").read_text(encoding="utf-8")
    protocol = parse_protocol(path.read_text(encoding="utf-8"), path.name)
    rig = parse_rig(rig_text, "rig.toml")
    return compile_plan(protocol, rig, protocol_file=path.name, rig_file="rig.toml")


@pytest.mark.parametrize("path", EXAMPLE_FILES, ids=lambda p: p.stem)
def test_every_example_compiles_into_a_sound_plan(path: Path) -> None:
    plan = example_plan(path)
    check_plan(plan)
    assert plan.hash() == example_plan(path).hash()


# Field notes turned into numbers by hand: pairings, spike pairs, pre and post triggers in the
# induction of each example.
COUNTS = {
    "pre_post": (75, 75, 75, 75),
    "post_pre": (80, 80, 80, 80),
    "culture_rate": (60, 60, 60, 60),
    "burst": (15, 75, 75, 75),
    "post_burst": (60, 180, 60, 180),
    "theta_burst_pairing": (3, 60, 120, 60),
    "triplet_pre_post_pre": (60, 120, 120, 60),
    "triplet_post_pre_post": (60, 120, 60, 120),
    "quadruplet": (60, 120, 120, 120),
    "frequency_series": (210, 210, 210, 210),
    "random_dt": (120, 120, 120, 120),
    "control_pre_only": (75, 0, 75, 0),
    "control_post_only": (75, 0, 0, 75),
    "control_subthreshold": (75, 0, 75, 75),
    "light": (60, 60, 60, 60),
    "in_vivo_sensory": (60, 60, 60, 60),
}


@pytest.mark.parametrize(("name", "counts"), COUNTS.items())
def test_counts_of_the_examples(name: str, counts: tuple[int, int, int, int]) -> None:
    plan = example_plan(EXAMPLES / f"{name}.toml")
    drives = {line.name: line.drives for line in plan.lines}
    phase = next(p for p in plan.phases if p.kind == "induction")
    sides = [drives[t.line] for t in phase.triggers if t.pairing is not None]
    pairs = sum(len(p.pairs) for p in phase.pairings)
    assert (len(phase.pairings), pairs, sides.count("pre"), sides.count("post")) == counts


def test_pre_post_to_the_nanosecond() -> None:
    plan = example_plan(EXAMPLES / "pre_post.toml")
    baseline, induction, follow_up = plan.phases
    # Onset 2.30 ms after its trigger, peak 3.10 ms after its: +10 ms needs triggers 9.2 ms apart.
    first, second = induction.triggers[:2]
    assert (first.line, first.at_ns) == ("pre1", 0)
    assert (second.line, second.at_ns) == ("post1", 9_200_000)
    assert [t.at_ns for t in induction.triggers if t.line == "pre1"] == [
        n * 5_000_000_000 for n in range(75)
    ]
    assert [t.at_ns for t in baseline.triggers[:4]] == [
        0, 150_000_000, 5_000_000_000, 5_150_000_000,
    ]  # fmt: skip
    assert [t.line for t in baseline.triggers[:4]] == ["pre1", "step1", "pre2", "step1"]
    assert (baseline.duration_ns, follow_up.duration_ns) == (360 * 10**9, 1800 * 10**9)
    # Last post trigger + 15 ms window + 0.5 s, after which tests resume.
    assert induction.duration_ns == 370_009_200_000 + 15_000_000 + 500_000_000
    assert {p.target_dt_ns for p in induction.pairings} == {10_000_000}


def test_theta_burst_spikes_come_6_ms_after_pulses_one_and_three() -> None:
    plan = example_plan(EXAMPLES / "theta_burst_pairing.toml")
    phase = plan.phases[1]
    lines = {line.name: line for line in plan.lines}
    events = [
        (t.line, t.at_ns + lines[t.line].latency_ns) for t in phase.triggers if t.pairing == 1
    ]
    pres = [at for line, at in events if line == "pre1"]
    posts = [at for line, at in events if line == "post1"]
    assert len(pres) == 40
    assert [b - a for a, b in itertools.pairwise(pres[:4])] == [10_000_000] * 3
    assert pres[4] - pres[0] == 200_000_000
    for burst in range(10):
        assert posts[2 * burst] - pres[4 * burst] == pytest.approx(6_000_000, abs=500)
        assert posts[2 * burst + 1] - pres[4 * burst + 2] == pytest.approx(6_000_000, abs=500)
    trains = [p.first_ns for p in phase.pairings]
    assert [b - a for a, b in itertools.pairwise(trains)] == [20_000_000_000] * 2


def test_random_dt_keeps_its_bounds_and_its_seed() -> None:
    plan = example_plan(EXAMPLES / "random_dt.toml")
    dts = [p.target_dt_ns or 0 for p in plan.phases[1].pairings]
    assert all(2_000_000 <= abs(dt) <= 35_000_000 for dt in dts)
    assert min(dts) < -20_000_000
    assert max(dts) > 20_000_000
    text = (EXAMPLES / "random_dt.toml").read_text(encoding="utf-8")
    other = make_plan(text.replace("plan_seed = 7", "plan_seed = 8"))
    assert [p.target_dt_ns for p in other.phases[1].pairings] != dts


def test_poisson_rates_dead_time_and_shared_events() -> None:
    plan = example_plan(EXAMPLES / "poisson.toml")
    phase = plan.phases[1]
    pre = [t.at_ns for t in phase.triggers if t.line == "pre1"]
    post = [t.at_ns for t in phase.triggers if t.line == "post1"]
    # 4 Hz over 180 s are 720 events; 4 SD of a Poisson count are 107.
    assert abs(len(pre) - 720) < 107
    assert abs(len(post) - 720) < 107
    for train in (pre, post):
        assert min(b - a for a, b in itertools.pairwise(train)) >= 4_000_000 - 500
    assert {p.target_dt_ns for p in phase.pairings} == {8_000_000}
    assert abs(len(phase.pairings) - 0.2 * len(pre)) < 4 * (0.16 * len(pre)) ** 0.5


def test_the_contingent_rule_is_compiled() -> None:
    rule = example_plan(EXAMPLES / "contingent.toml").phases[1].rule
    assert rule is not None
    # Peak + 8 ms onset: the edge is 0.15 ms after the peak, the onset 2.3 ms after its trigger.
    assert rule.delay_ns == 8_000_000 - 2_300_000 - 150_000
    assert (rule.max_pairings, rule.duration_ns) == (150, 420_000_000_000)
    assert (rule.lockout_ns, rule.silence_ns) == (1_000_000_000, 300_000_000)


def test_across_cells_has_an_arm_for_each_delta_t() -> None:
    path = EXAMPLES / "across_cells.toml"
    protocol = parse_protocol(path.read_text(encoding="utf-8"), path.name)

    def compiled(arm: int | None) -> Plan:
        return compile_plan(
            protocol, make_rig(), protocol_file=path.name, rig_file="rig.toml", arm=arm
        )

    dts = [compiled(arm).phases[1].pairings[0].target_dt_ns for arm in range(1, 9)]
    assert dts == [dt * 1_000_000 for dt in (-60, -30, -15, -5, 5, 15, 30, 60)]
    assert compiled(None).hash() == compiled(1).hash()
    with pytest.raises(InputError, match="arm 9: 1 to 8 are there"):
        compiled(9)
    with pytest.raises(InputError, match="has no \\[across_cells\\]"):
        compile_plan(
            parse_protocol(SHORT, "p.toml"), make_rig(), protocol_file="p.toml",
            rig_file="rig.toml", arm=1,
        )  # fmt: skip


def test_bare_trigger_offsets_only_when_asked_for() -> None:
    plan = make_plan(SHORT.replace("dt_ms = 10", 'dt_ms = 10\noffsets = "triggers"'))
    first, second = plan.phases[1].triggers[:2]
    assert second.at_ns - first.at_ns == 10_000_000
    # What those triggers bring about is not 10 ms: the latencies differ by 0.8 ms.
    assert plan.phases[1].pairings[0].target_dt_ns == 10_800_000


CHANGES = [
    ("dt_ms = 10", "dt_ms = 10.1"),
    ("pairings = 12", "pairings = 11"),
    ("rate_hz = 1", "rate_hz = 1.01"),
    ("duration_min = 0.5", "duration_min = 0.6"),
    ('title = "short"', 'title = "other"\nplan_seed = 5'),
    ('title = "short"', 'title = "short"\njudging = { on_target_within_ms = 1.5 }'),
    ('title = "short"', 'title = "short"\ngates = { max_trend_pct = 9 }'),
    ('set = "bi-poo-2001"', 'set = "froemke-dan-2002"'),
    ('kind = "induction"', 'kind = "induction"\nstart = "operator"'),
]
RIG_CHANGES = [
    ("mean_ms = 2.30", "mean_ms = 2.31"),
    ("amplitude_ua = 60", "amplitude_ua = 61"),
    ("diameter_um = 125", "diameter_um = 126"),
    ("width_us = 100", "width_us = 101"),
]


@pytest.mark.parametrize(("old", "new"), CHANGES)
def test_the_hash_sees_every_change_of_the_protocol(old: str, new: str) -> None:
    assert old in SHORT
    assert make_plan(SHORT.replace(old, new, 1)).hash() != make_plan().hash()


@pytest.mark.parametrize(("old", "new"), RIG_CHANGES)
def test_the_hash_sees_declared_values_of_the_rig(old: str, new: str) -> None:
    changed = parse_rig(RIG_TEXT.replace(old, new, 1), "rig.toml")
    assert make_plan(rig=changed).hash() != make_plan().hash()


def test_the_hash_does_not_see_comments() -> None:
    assert make_plan("# a comment\n" + SHORT).hash() == make_plan().hash()


@settings(max_examples=60, deadline=None)
@given(
    dt_ms=st.floats(-40, 40).filter(lambda x: abs(x) > 0.01),
    pre_ms=st.floats(0, 30),
    post_ms=st.floats(0, 30),
    count=st.integers(1, 4),
    tick_ns=st.sampled_from([500, 1000, 62_500, 333]),
)
def test_any_delta_t_and_latencies_give_a_sound_plan(
    dt_ms: float, pre_ms: float, post_ms: float, count: int, tick_ns: int
) -> None:
    rig = make_rig(
        replace={
            "mean_ms = 2.30": f"mean_ms = {pre_ms}",
            "mean_ms = 3.10": f"mean_ms = {post_ms}",
        },
        extra=f"\n[box]\ntick_ns = {tick_ns}\n",
    )
    protocol = SHORT.replace("dt_ms = 10", f"dt_ms = {dt_ms}").replace("rate_hz = 1", "rate_hz = 2")
    if count > 1:
        protocol = protocol.replace(
            "pairings = 12",
            f"pairings = 12\npre_count = {count}\npre_rate_hz = 20\n"
            f"post_count = {count}\npost_rate_hz = 20",
        )
    check_plan(make_plan(protocol, rig))
