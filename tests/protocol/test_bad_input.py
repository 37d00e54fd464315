"""Files that cannot be used: one sentence with file, key path, value and what is allowed."""

from __future__ import annotations

import pytest

from rigctl.errors import InputError
from rigctl.protocol import load
from rigctl.protocol.compile import compile_plan
from rigctl.protocol.load import parse_protocol, parse_rig
from tests.conftest import EXAMPLES, RIG_TEXT, SHORT, make_plan, make_rig

# (what to replace, by what, the sentence after "p.toml: ")
PROTOCOL_CASES = [
    (SHORT, "title = ", "not TOML: Invalid value (at end of document)."),
    (SHORT, "  \n", "the file is empty; a protocol in TOML is needed."),
    ('title = "short"', 'title = ""', "title = '': text in quotes of length >= 1 is needed."),
    ('title = "short"', "title = 3", "title = 3: text in quotes is needed."),
    ('title = "short"\n', "", "title: this key is needed."),
    ('title = "short"', 'titel = "short"', 'titel: there is no such key; did you mean "title"?'),
    ("pairings = 12", "parings = 12", 'phase[2].block[1].parings: there is no such key; did you '
     'mean "pairings"?'),
    ("pairings = 12\n", "", "phase[2].block[1].pairings: this key is needed."),
    ("pairings = 12", "pairings = 0", "phase[2].block[1].pairings = 0: a whole number >= 1 is "
     "needed."),
    ("pairings = 12", "pairings = -3", "phase[2].block[1].pairings = -3: a whole number >= 1 is "
     "needed."),
    ("pairings = 12", "pairings = 2.5", "phase[2].block[1].pairings = 2.5: a whole number is "
     "needed."),
    ("pairings = 12", 'pairings = "12"', "phase[2].block[1].pairings = '12': a whole number is "
     "needed."),
    ("pairings = 12", "pairings = 10_000_000", "phase[2].block[1].pairings = 10000000: makes "
     "20,000,000 triggers; a plan has at most 500,000."),
    ("pairings = 12", "pairings = 99_000_000", "phase[2].block[1].pairings = 99000000: a whole "
     "number <= 10000000 is needed."),
    ("dt_ms = 10", "dt_ms = 0", "phase[2].block[1].dt_ms = 0.0: Δt = 0 has no order: give it a "
     "sign, at least 0.001 ms."),
    ("dt_ms = 10", "dt_ms = nan", "phase[2].block[1].dt_ms = nan: a finite number is needed."),
    ("dt_ms = 10", "dt_ms = inf", "phase[2].block[1].dt_ms = inf: a finite number is needed."),
    ("dt_ms = 10", "dt_ms = 1e12", "phase[2].block[1].dt_ms = 1000000000000.0: a number <= "
     "600000.0 is needed."),
    ("dt_ms = 10", "dt_ms = true", "phase[2].block[1].dt_ms = True: a number is needed."),
    ("dt_ms = 10\n", "", "phase[2].block[1]: give exactly one of dt_ms, dt_random, and pre_at_ms "
     "with post_at_ms; given: none."),
    ("dt_ms = 10", "dt_ms = 10\npre_at_ms = [0]\npost_at_ms = [5]", "phase[2].block[1]: give "
     "exactly one of dt_ms, dt_random, and pre_at_ms with post_at_ms; given: dt_ms and "
     "pre_at_ms/post_at_ms."),
    ("dt_ms = 10", "pre_at_ms = [0]", "phase[2].block[1]: pre_at_ms and post_at_ms go together."),
    ("dt_ms = 10", "pre_at_ms = [5, 5]\npost_at_ms = [9]", "phase[2].block[1].pre_at_ms = [5.0, "
     "5.0]: rising times are needed."),
    ("dt_ms = 10", "pre_at_ms = [0, 9]\npost_at_ms = [1, 2, 3]", "phase[2].block[1].spike_pairs: "
     "needed, since 2 pre and 3 post events can be paired in more than one way."),
    ("dt_ms = 10", "pre_at_ms = [0]\npost_at_ms = [9]\nspike_pairs = [[1, 2]]",
     "phase[2].block[1].spike_pairs[1] = [1, 2]: [pre 1..1, post 1..1] is needed."),
    ("dt_ms = 10", "pre_at_ms = [0]\npost_at_ms = [0]\nspike_pairs = [[1, 1]]",
     "phase[2].block[1].spike_pairs[1] = [1, 1]: Δt = 0 has no order: give it a sign, at least "
     "0.001 ms."),
    ("dt_ms = 10", "dt_random = { low_ms = 5, high_ms = 5 }",
     "phase[2].block[1].dt_random.high_ms = 5.0: more than low_ms = 5 is needed."),
    ("dt_ms = 10", "dt_random = { low_ms = -5, high_ms = 5, min_abs_ms = 6 }",
     "phase[2].block[1].dt_random.min_abs_ms = 6.0: nothing between low_ms and high_ms is left."),
    ("rate_hz = 1", "rate_hz = 1\nevery_s = 1", "phase[2].block[1]: give exactly one of rate_hz "
     "and every_s."),
    ("rate_hz = 1", "", "phase[2].block[1]: give exactly one of rate_hz and every_s."),
    ("rate_hz = 1", "rate_hz = -1", "phase[2].block[1].rate_hz = -1: a number > 0.0 is needed."),
    ("rate_hz = 1", "rate_hz = 200", "phase[2].block[1]: a pairing of 9.2 ms is not over when the "
     "next begins, 5 ms after it; lower rate_hz or shorten the pattern."),
    ("rate_hz = 1", "rate_hz = 1\npost_count = 3", "phase[2].block[1].post_rate_hz: needed with "
     "post_count = 3."),
    ("rate_hz = 1", "rate_hz = 1\npost_rate_hz = 30", "phase[2].block[1].post_rate_hz = 30.0: only "
     "with post_count above 1."),
    ("rate_hz = 1", "rate_hz = 1\npost_count = 3\npost_rate_hz = 600",
     "phase[2].block[1]: a pulse on post1 at 10.867 ms of the phase begins inside another "
     "(phase[2].block[1], 9.200 ms, 2 ms long); pulses on a line must not overlap."),
    ("rate_hz = 1", "rate_hz = 1\nrepeat = [{ times = 3 }]", "phase[2].block[1].repeat[1]: give "
     "exactly one of rate_hz and every_ms."),
    ("rate_hz = 1", 'rate_hz = 1\npre_line = "pre3"', "phase[2].block[1].pre_line = 'pre3': "
     'rig.toml has no output of that name driving pathway s1; did you mean "pre1"?.'),
    ("rate_hz = 1", 'rate_hz = 1\npost_line = "nothing"', "phase[2].block[1].post_line = "
     "'nothing': rig.toml has no such output that drives post."),
    ('kind = "pairings"\npathway = "s1"', 'kind = "pairings"\npathway = "s3"',
     "phase[2].block[1].pathway = 's3': rig.toml drives no such pathway, only s1, s2."),
    ('kind = "pairings"\npathway = "s1"', 'kind = "pairings"\npathway = "1 bad"',
     "phase[2].block[1].pathway = '1 bad': a name is needed: a letter, then letters, digits, _ or "
     "-, at most 32 in all."),
    ('kind = "pairings"', 'kind = "pairing"', "phase[2].block[1].kind = 'pairing': one of "
     "'pairings', 'poisson', 'contingent' is needed."),
    ('kind = "induction"', 'kind = "inductoin"', "phase[2].kind = 'inductoin': one of 'baseline', "
     "'induction', 'follow_up' is needed."),
    ('kind = "pairings"\n', "", "phase[2].block[1].kind: this key is needed."),
    ("duration_min = 0.5", "", "phase[1].duration_min: this key is needed."),
    ("duration_min = 0.5", "duration_min = 30", "phase[2]: the induction starts 31.00 min after "
     "break-in; rig.toml allows 8 min (washout.start_by_min): shorten what comes before, or use an "
     "access without that clock."),
    ("first_at_s = 2", "first_at_s = 4", "phase[1].test[2].first_at_s = 4.0: less than every_s = 4 "
     "is needed."),
    ('kind = "induction"', 'kind = "induction"\nname = "baseline"', "phase[2].name = 'baseline': "
     "two phases have this name."),
    ('rule = "pair-all"', 'rule = "pair-al"', "forecast[1].rule = 'pair-al': pair-all or "
     'pair-nearest is needed; did you mean "pair-all"?'),
    ('rule = "pair-all"', 'rule = "calcium"', "forecast[1].rule = 'calcium': not in this version; "
     "it runs pair-all and pair-nearest."),
    ('set = "bi-poo-2001"', 'set = "bi-poo-2002"', "forecast[1].set = 'bi-poo-2002': no such "
     'parameter set; did you mean "bi-poo-2001"?'),
    ('set = "bi-poo-2001"', 'set = "bi-poo-2001"\n[[forecast]]\nrule = "pair-all"\n'
     'set = "bi-poo-2001"', "forecast[2]: pair-all with the set bi-poo-2001 stands twice; a "
     "session keeps one forecast of each."),
    ('set = "bi-poo-2001"', "a_plus = 0.1", None),
    # What the TOML reader itself does not take.
    (SHORT, "a = " + "[" * 100_000, "nested more than 32 deep: not a protocol."),
    (SHORT, "a = " + "{a = " * 50_000, "nested more than 32 deep: not a protocol."),
    (SHORT, "a = " + "[" * 40 + "]" * 40, "nested more than 32 deep: not a protocol."),
    (SHORT, "a" + ".a" * 50_000 + " = 1", "nested more than 32 deep: not a protocol."),
    ("pairings = 12", "pairings = " + "9" * 5000, "a number in it has thousands of digits."),
    (SHORT, "\ufeff" + SHORT, None),
    (SHORT, SHORT.replace("\n", "\r\n"), None),
    ("pairings = 12", 'pairings = 12\n"a\\nb" = 1', 'phase[2].block[1]."a\\nb": there is no such '
     "key; known here: kind, "),
    ('title = "short"', '"\\u001b[31m" = 1', '"\\u001b[31m": there is no such key; known here: '),
    ("pairings = 12", 'pairings = 12\n"a\\nb" = nan', 'phase[2].block[1]."a\\nb" = nan: a finite '),
    # Δt without an order, by each road that leads there.
    ("dt_ms = 10", "dt_ms = 1e-9", "phase[2].block[1].dt_ms = 1e-09: Δt = 0 has no order: give it "
     "a sign, at least 0.001 ms."),
    ("dt_ms = 10", "pre_at_ms = [0]\npost_at_ms = [0]", "phase[2].block[1]: pre event 1 and post "
     "event 1 of a pairing are a spike pair with Δt = 0, which has no order: move one of them, or "
     "say in spike_pairs which events belong together."),
    ("dt_ms = 10", "dt_ms = 50\npre_count = 2\npre_rate_hz = 20", "phase[2].block[1]: pre event 2 "
     "and post event 1 of a pairing are a spike pair with Δt = 0, "),
    ("dt_ms = 10", 'dt_ms = -0.8\noffsets = "triggers"', "phase[2].block[1]: pre event 1 and post "
     "event 1 of a pairing are a spike pair with Δt = 0, "),
    ("dt_ms = 10", "dt_random = { low_ms = -0.0001, high_ms = 0.0001 }", "phase[2].block[1]."
     "dt_random.high_ms = 0.0001: no Δt of a whole us other than 0 lies between low_ms = -0.0001 "
     "and this."),
    ("[[phase]]", "[across_cells]\ndt_ms = [5, 0]\n[[phase]]", "across_cells.dt_ms[2] = 0.0: Δt = "
     "0 has no order: give it a sign, at least 0.001 ms."),
    ("dt_ms = 10", 'pre_at_ms = []\npost_at_ms = [1]\ndeliver = "pre"', "phase[2].block[1].deliver "
     "= 'pre': the pattern has no event of this side."),
    ("dt_ms = 10", 'pre_at_ms = [1]\npost_at_ms = []\ndeliver = "post"', "phase[2].block[1]."
     "deliver = 'post': the pattern has no event of this side."),
    # The test step keeps away from responses.
    ("rate_hz = 1", "rate_hz = 2.5\nstep = true", "phase[2].block[1]: the test step at 159.200 ms "
     "of the phase meets the response to pre1 at 400.000 ms (phase[2].block[1]): set step = false, "
     "or leave 150 ms before a step and its 300 ms free."),
    ("first_at_s = 2", "first_at_s = 0.1\nstep = false", "phase[1].test[1]: the test step at "
     "150.000 ms of the phase meets the response to pre2 at 100.000 ms "
     "(phase[1].test[2]): set step = false, "),
    # What else contradicts itself.
    ("dt_ms = 10", "pre_at_ms = [0]\npost_at_ms = [9]\nspike_pairs = [[1, 1], [1, 1]]",
     "phase[2].block[1].spike_pairs: the same pair stands twice."),
    ("dt_ms = 10", f"pre_at_ms = {list(range(10_001))}\npost_at_ms = [9]", "phase[2].block[1]."
     "pre_at_ms: at most 10000 events in one pattern."),
    ('[[phase.test]]\npathway = "s1"\nevery_s = 4\n\n[[phase.test]]\npathway = "s2"\nevery_s = 4\n'
     "first_at_s = 2\n", "", "phase[1].test: a phase of tests needs at least one test series."),
    ('[[phase.block]]\nkind = "pairings"\npathway = "s1"\ndt_ms = 10\npairings = 12\nrate_hz = 1\n',
     "block = []\n", "phase[2].block: an induction needs at least one block."),
    ("rate_hz = 1", "every_s = 0.0092", "phase[2].block[1]: a pairing of 9.2 ms is not over when "
     "the next begins, 9.2 ms after it; "),
    ("pairings = 12", "pairings = 600", "phase[2]: the induction ends 11.49 min after break-in; "
     "rig.toml allows 11 min (washout.end_by_min): shorten what comes before, or use an access "
     "without that clock."),
    # Counted for what is delivered.
    ("pairings = 12", 'pairings = 600_000\ndeliver = "pre"', "phase[2].block[1].pairings = 600000: "
     "makes 600,000 triggers; a plan has at most 500,000."),
    ("every_s = 4", "every_s = 1e-12", "phase[1].test[1].every_s = 1e-12: makes 60,"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "sentence"), PROTOCOL_CASES)
def test_protocol(old: str, new: str, sentence: str | None) -> None:
    assert old in SHORT
    text = SHORT.replace(old, new, 1) if old != SHORT else new

    def use() -> None:
        protocol = parse_protocol(text, "p.toml")
        rig = make_rig(extra="\n[washout]\nend_by_min = 11\n")
        compile_plan(protocol, rig, protocol_file="p.toml", rig_file="rig.toml")

    if sentence is None:
        use()
        return
    with pytest.raises(InputError) as caught:
        use()
    assert str(caught.value).startswith(f"p.toml: {sentence}")
    assert "\n" not in str(caught.value)
    assert caught.value.exit_code == 2


RIG_CASES = [
    ('drives = "pre"', 'drives = "light"', "output.pre1.drives = 'light': one of 'pre', "
     "'post', 'step' is needed."),
    ('pathway = "s1"\nsocket', "socket", "output.pre1.pathway: needed for a line that drives pre."),
    ("latency.epsp_onset = { mean_ms = 2.30, sd_ms = 0.15, n = 20 }\n", "", None),
    ("mean_ms = 2.30", "mean_ms = -1", "output.pre1.latency.epsp_onset.mean_ms = -1"),
    ('stimulus = "isolator_a"', 'stimulus = "isolator_c"', "output.pre1.stimulus = 'isolator_c': "
     "no table [stimulus] of that name; did you mean"),
    ('electrode = "bipolar"', 'electrode = "unipolar"', "stimulus.isolator_a.electrode = "
     "'unipolar': no table [electrode] of that name"),
    ("diameter_um = 125", "diameter_um = 125\narea_um2 = 5", "electrode.bipolar: give diameter_um "
     "or area_um2, not both."),
    ("width_us = 100\nstim", "width_us = 5\nstim", "output.pre1.width_us = 5.0: the box makes "
     "pulses of at least 30 us."),
    ("width_us = 100\nstim", "width_us = nan\nstim", "output.pre1.width_us = nan: a finite number"),
    ("[input.spike1]", "[input.pre1]", "input.pre1: an output has this name already."),
    ('access = "ruptured"', 'access = "open"', "access = 'open': "),
    ("latency.epsp_onset = { mean_ms = 2.30", "latency.epsp_onse = { mean_ms = 2.30",
     "output.pre1.latency: 'epsp_onse' is no reference event; did you mean \"epsp_onset\"? Known "
     "here: epsp_onset, presynaptic_spike, field_epsp_onset, spike_peak, spike_threshold."),
    ("[input.spike1]", '[output.step2]\ndrives = "step"\nwidth_us = 300_000\n[input.spike1]',
     "output.step2.drives: a rig has one line for the test step, and step1 is it already."),
    ("[input.spike1]", '[input.pre_det]\ndetects = "pre"\n[input.spike1]', "input.pre_det.pathway: "
     "needed for an input that detects pre."),
    (RIG_TEXT, 'name = "r"\n[output.step1]\ndrives = "step"\nwidth_us = 300_000\n', "output: at "
     "least one line that drives pre is needed."),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "sentence"), RIG_CASES)
def test_rig(old: str, new: str, sentence: str | None) -> None:
    assert old in RIG_TEXT
    if sentence is None:
        rig = make_rig(replace={old: new})
        with pytest.raises(InputError, match=r"rig.toml: output.pre1.latency.epsp_onset: needed"):
            make_plan(rig=rig)
        return
    with pytest.raises(InputError) as caught:
        parse_rig(RIG_TEXT.replace(old, new, 1), "rig.toml")
    assert "\n" not in str(caught.value)
    assert str(caught.value).startswith(f"rig.toml: {sentence}")


def test_a_contingent_delay_under_what_detector_box_and_latency_allow_is_refused() -> None:
    block = """kind = "contingent"
pathway = "s1"
on_input = "spike1"
dt_ms = {dt}
silence_ms = 300
lockout_s = 1
max_pairings = 5
max_min = 1
"""
    start = SHORT.index('kind = "pairings"')
    end = SHORT.index('[[phase]]\nkind = "follow_up"')

    def plan(dt: float) -> None:
        make_plan(SHORT[:start] + block.format(dt=dt) + "\n" + SHORT[end:])

    # 0.15 ms detector + 0.1 ms box + 2.3 ms latency.
    plan(-2.55)
    with pytest.raises(InputError, match=r"allow Δt of −2.55 ms or longer"):
        plan(-2.54)
    with pytest.raises(InputError, match="a negative Δt is needed"):
        plan(8)


def test_arms_that_would_all_be_the_same_are_refused() -> None:
    text = SHORT.replace("[[phase]]", "[across_cells]\ndt_ms = [5, -5]\n[[phase]]", 1)
    make_plan(text)
    with pytest.raises(InputError, match="no pairings block states dt_ms"):
        make_plan(text.replace("dt_ms = 10", "pre_at_ms = [0]\npost_at_ms = [5]"))


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        ("pairings = 12", "pairings = 12\nstep = true", r"phase\[2\].block\[1\].step = true"),
        ("every_s = 4", "every_s = 4\nstep = true", r"phase\[1\].test\[1\].step = true"),
        ("every_s = 4", "every_s = 4", None),
    ],
)
def test_a_step_that_is_asked_for_needs_its_line(old: str, new: str, sentence: str | None) -> None:
    start, end = RIG_TEXT.index("[output.step1]"), RIG_TEXT.index("[input.spike1]")
    rig = parse_rig(RIG_TEXT[:start] + RIG_TEXT[end:], "rig.toml")
    text = SHORT.replace(old, new, 1)
    if sentence is None:
        assert {line.drives for line in make_plan(text, rig).lines} == {"pre", "post"}
        return
    with pytest.raises(InputError, match=sentence + ": rig.toml has no output that drives step"):
        make_plan(text, rig)


def test_a_contingent_block_makes_no_triggers_of_its_own() -> None:
    text = (EXAMPLES / "contingent.toml").read_text(encoding="utf-8")
    plan = make_plan(text.replace("max_pairings = 150", "max_pairings = 600_000"))
    assert plan.phases[1].rule is not None
    assert plan.phases[1].triggers == ()


def test_a_dotted_key_without_end_is_not_even_read(monkeypatch: pytest.MonkeyPatch) -> None:
    def read(_: str) -> None:
        pytest.fail("the TOML reader's time grows with the square of such a key's length")

    monkeypatch.setattr(load.tomllib, "loads", read)
    for text in (
        "a" + ".a" * 40 + " = 1",
        "[" + "a . " * 40 + "a]",
        "b = { " + '"x".' * 40 + "x = 1 }",
    ):
        with pytest.raises(InputError, match="nested more than 32 deep"):
            parse_protocol(text, "p.toml")
