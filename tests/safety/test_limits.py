"""Limits: just under, just over, and what is not stated is never a pass."""

from __future__ import annotations

import pytest

from rigctl.errors import Refused
from rigctl.safety.limits import PASSING_IS_NO_PERMISSION, Verdict, refuse, verdicts
from rigctl.safety.timing import worst_second
from tests.conftest import SHORT, make_plan, make_rig


def _verdict(name: str, line: str, limits: str = "", **replace: str) -> Verdict:
    rig = make_rig(f"\n[limits]\n{limits}\n", replace)
    plan = make_plan(rig=rig)
    return next(v for v in verdicts(plan, rig) if (v.name, v.line) == (name, line))


@pytest.mark.parametrize(
    ("name", "line", "under", "over"),
    [
        ("width", "pre1", "max_width_us = 100", "max_width_us = 99.9"),
        # The last pairing at 11 s, its post trigger 9.2 ms later, 15 ms of response window and
        # 500 ms until the first test: 524.2 ms from pulse to pulse, two of them in a second.
        ("spacing", "pre1", "min_spacing_us = 524_200", "min_spacing_us = 524_201"),
        ("rate", "pre1", "max_rate_hz = 2", "max_rate_hz = 1.9"),
        ("duty", "step1", "max_duty = 0.3", "max_duty = 0.29"),
        ("amplitude", "pre1", "max_amplitude_ua = 60", "max_amplitude_ua = 59"),
        ("charge density", "pre1", "max_density_uc_cm2 = 48.9", "max_density_uc_cm2 = 48.8"),
        ("k", "pre1", "max_k = -0.532", "max_k = -0.533"),
        ("count", "all lines", "max_pulses = 84", "max_pulses = 83"),
    ],
)
def test_each_limit_just_under_and_just_over(name: str, line: str, under: str, over: str) -> None:
    assert _verdict(name, line, under).ok is True
    refused = _verdict(name, line, over)
    assert refused.ok is False
    with pytest.raises(Refused, match=f"refused: {name} of {line} is ") as caught:
        refuse([refused])
    assert caught.value.exit_code == 3
    assert str(caught.value).endswith("Nothing runs.")


def test_every_verdict_names_formula_and_source() -> None:
    rig = make_rig()
    for v in verdicts(make_plan(rig=rig), rig):
        assert v.formula
        assert v.source
        assert v.ok is not True or v.value is not None or v.note


@pytest.mark.parametrize(
    ("old", "new", "name"),
    [
        ("amplitude_ua = 60\n", "", "amplitude"),
        ("amplitude_ua = 60\n", "", "charge per phase"),
        ("diameter_um = 125\n", "", "k"),
        ("diameter_um = 125\n", "", "charge density"),
        ('stimulus = "isolator_a"\n', "", "stimulus"),
    ],
)
def test_what_is_not_stated_is_never_a_pass(old: str, new: str, name: str) -> None:
    rig = make_rig(replace={old: new})
    found = [v for v in verdicts(make_plan(rig=rig), rig) if v.line == "pre1" and v.name == name]
    assert [(v.ok, v.value) for v in found] == [(None, None)]
    assert found[0].note


def test_charge_balance_declared_unbalanced_is_refused_and_unstated_is_open() -> None:
    balanced = "balanced = true\namplitude_ua = 60"
    assert _verdict("charge balance", "pre1").ok is True
    unstated = _verdict("charge balance", "pre1", **{balanced: "amplitude_ua = 60"})
    assert (unstated.ok, "not stated" in unstated.note) == (None, True)
    declared = _verdict(
        "charge balance", "pre1", **{balanced: "balanced = false\namplitude_ua = 60"}
    )
    assert declared.ok is False
    with pytest.raises(Refused) as caught:
        refuse([declared, declared])
    assert str(caught.value).startswith(
        "refused: charge balance of pre1: declared unbalanced: every pulse leaves charge behind"
    )
    assert "(1 more). Nothing runs." in str(caught.value)


def test_a_charge_without_an_electrode_has_a_value_and_is_open() -> None:
    found = _verdict("charge per phase", "pre1", **{'electrode = "bipolar"\n': ""})
    assert (found.ok, found.value) == (None, pytest.approx(6.0))
    assert "whether this is a microelectrode" in found.note
    declared = _verdict("charge per phase", "pre1", **{"diameter_um = 125": "micro = true"})
    assert (declared.ok, declared.limit) == (False, 2.0)


def test_a_material_without_a_published_limit_is_open_until_the_rig_sets_one() -> None:
    tungsten = {'material = "PtIr"': 'material = "W"'}
    found = _verdict("charge density", "pre1", **tungsten)
    assert (found.ok, found.limit, found.value) == (None, None, pytest.approx(48.89, abs=0.01))
    assert _verdict("charge density", "pre1", "max_density_uc_cm2 = 48", **tungsten).ok is False


def test_a_source_is_never_named_for_a_limit_that_the_rig_changed() -> None:
    assert _verdict("k", "pre1").source.startswith("Shannon 1992")
    looser = _verdict("k", "pre1", "max_k = 1.8").source
    assert looser.startswith("this rig's own limit, looser than 1.5 (Shannon 1992")
    tighter = _verdict("spacing", "pre1", "min_spacing_us = 200").source
    assert tighter == "this rig's own limit, tighter than 100 (common practice, no source)"
    assert _verdict("rate", "pre1").source == "common practice, no source"


def test_what_has_no_limit_here_is_said() -> None:
    rig = make_rig(replace={
        'kind = "current_clamp"\namplitude_pa = 1500': 'kind = "sensory"',
        'stimulus = "test_step"\n': "",
    })  # fmt: skip
    found = {(v.line, v.name): v for v in verdicts(make_plan(rig=rig), rig)}
    assert found["post1", "stimulus"].ok is None
    assert found["step1", "stimulus"].ok is None
    pipette = _verdict("amplitude", "post1")
    assert (pipette.value, pipette.limit) == (1500, None)
    assert pipette.note.startswith("for information")


LIGHT = """
[stimulus.led]
kind = "light"
power_mw = {power}
spot_diameter_um = 400
"""


def _light(power: float, name: str) -> Verdict:
    isolator = 'stimulus = "isolator_a"'
    rig = make_rig(LIGHT.format(power=power), {isolator: 'stimulus = "led"'})
    found = verdicts(make_plan(rig=rig), rig)
    return next(v for v in found if (v.name, v.line) == (name, "pre1"))


def test_light_density_is_power_over_spot() -> None:
    # π·0.2² mm² is 0.1257 mm²: 10 mW/mm² (typical maximum, from memory) is 1.257 mW.
    assert _light(1.25, "light density").ok is True
    assert _light(1.26, "light density").ok is False
    assert _light(1.0, "light density").value == pytest.approx(7.96, abs=0.01)


@pytest.mark.parametrize(
    ("name", "under", "over"),
    [
        # Two pulses of 100 µs a second; a mean of 0.2 µW per mW heats by 5e-5 °C.
        ("light duty", "max_light_duty = 2e-4", "max_light_duty = 1.9e-4"),
        ("light heating", "max_light_heat_c = 5e-5", "max_light_heat_c = 4.9e-5"),
        ("light density", "max_light_mw_mm2 = 7.96", "max_light_mw_mm2 = 7.95"),
    ],
)
def test_light_limits_just_under_and_just_over(name: str, under: str, over: str) -> None:
    led = {'stimulus = "isolator_a"': 'stimulus = "led"'}
    for limit, ok in ((under, True), (over, False)):
        rig = make_rig(LIGHT.format(power=1.0) + f"\n[limits]\n{limit}\n", led)
        found = verdicts(make_plan(rig=rig), rig)
        assert [v.ok for v in found if (v.name, v.line) == (name, "pre1")] == [ok]


def test_light_that_is_not_stated_is_open() -> None:
    led = {'stimulus = "isolator_a"': 'stimulus = "led"'}
    rig = make_rig('\n[stimulus.led]\nkind = "light"\n', led)
    found = {v.name: v for v in verdicts(make_plan(rig=rig), rig) if v.line == "pre1"}
    assert found["light heating"].ok is None
    assert found["light density"].note == "not stated: power_mw and spot_diameter_um"
    assert found["light duty"].ok is True


def test_light_heats_by_its_mean_power() -> None:
    # 0.25 °C per mW (the larger published value): Owen, Liu & Kreitzer 2019 (read in the paper).
    verdict = _light(1.0, "light heating")
    # The last pairing and the first test after it come within a second: two pulses of 100 µs.
    assert verdict.value == pytest.approx(0.25 * 1.0 * 2 * 100e-6)


def test_a_rule_on_the_box_counts_at_its_worst() -> None:
    start, end = SHORT.index('kind = "pairings"'), SHORT.index('[[phase]]\nkind = "follow_up"')
    text = SHORT[:start] + (
        'kind = "contingent"\npathway = "s1"\non_input = "spike1"\ndt_ms = -8\nsilence_ms = 50\n'
        "lockout_s = 0.1\nmax_pairings = 150\nmax_min = 1\n\n"
    )
    rig = make_rig()
    found = verdicts(make_plan(text + SHORT[end:], rig), rig)
    rate = next(v for v in found if (v.name, v.line) == ("rate", "pre1"))
    assert rate.value == 10  # once every 0.1 s; no test stimulus beside it
    spacing = next(v for v in found if (v.name, v.line) == ("spacing", "pre1"))
    assert spacing.value == 100_000
    count = next(v for v in found if v.name == "count")
    assert count.value == 150 + 2 * (8 + 7) * 2


def test_tests_beside_a_rule_come_on_top_of_it() -> None:
    start, end = SHORT.index("[[phase.block]]"), SHORT.index('[[phase]]\nkind = "follow_up"')
    text = SHORT[:start] + (
        '[[phase.test]]\npathway = "s1"\nevery_s = 0.5\nstep = false\n\n[[phase.block]]\n'
        'kind = "contingent"\npathway = "s1"\non_input = "spike1"\ndt_ms = -8\n'
        "silence_ms = 50\nlockout_s = 0.1\nmax_pairings = 150\nmax_min = 1\n\n"
    )
    rig = make_rig()
    found = verdicts(make_plan(text + SHORT[end:], rig), rig)
    rate = next(v for v in found if (v.name, v.line) == ("rate", "pre1"))
    assert rate.value == 10 + 2
    # Tests 500 ms apart, the rule's pulses 100 ms: no gap of nothing where both begin at 0.
    spacing = next(v for v in found if (v.name, v.line) == ("spacing", "pre1"))
    assert (spacing.value, spacing.ok) == (100_000, True)


def test_the_worst_second() -> None:
    s = 1_000_000_000
    assert worst_second([0, s // 2, s, s + 1]) == 3
    assert worst_second([0, s]) == 1
    assert worst_second([]) == 0


def test_passing_defers_and_is_never_for_people() -> None:
    for words in ("no permission", "2010/63/EU", "8th ed.", "ARRIVE 2.0", "IEC 61010-1",
                  "IEC 60825-1", "never for use on people"):  # fmt: skip
        assert words in PASSING_IS_NO_PERMISSION
