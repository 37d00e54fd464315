"""What `pairctl check` prints: to scale, in any width and encoding, nothing by colour alone."""

from __future__ import annotations

import io
import re
from functools import cache

import pytest
from rich.console import Console

from rigctl.protocol.audit import Audit, audit
from rigctl.protocol.plan import Plan
from rigctl.report.check_drawing import encodable
from rigctl.report.check_text import as_json, render
from rigctl.safety.limits import Verdict, verdicts
from tests.conftest import EXAMPLES, SHORT, make_plan, make_rig


@cache
def _checked(
    protocol: str, extra: str, replace: tuple[tuple[str, str], ...]
) -> tuple[Plan, Audit, list[Verdict]]:
    rig = make_rig(extra, dict(replace))
    plan = make_plan(protocol, rig)
    return plan, audit(plan, rig), verdicts(plan, rig)


def _shown(
    protocol: str, width: int = 100, encoding: str = "utf-8", extra: str = "",
    replace: tuple[tuple[str, str], ...] = (),
) -> str:  # fmt: skip
    raw = io.BytesIO()
    file = io.TextIOWrapper(raw, encoding=encoding, newline="\n")
    console = Console(file=file, width=width, highlight=False)
    console.print(render(*_checked(protocol, extra, replace)))
    file.flush()
    return raw.getvalue().decode(encoding)


def _example(name: str) -> str:
    return (EXAMPLES / f"{name}.toml").read_text(encoding="utf-8")


def _row(text: str, name: str) -> str:
    return next(line for line in text.splitlines() if line.startswith(name))


@pytest.mark.parametrize("encoding", ["ascii", "cp1252", "cp437", "utf-8"])
@pytest.mark.parametrize("width", [60, 80, 160])
def test_every_encoding_and_width_can_print_it(encoding: str, width: int) -> None:
    # A title that no old code page holds.
    text = _shown(SHORT.replace('"short"', '"Δt → 短い"'), width, encoding)
    assert all(len(line) <= width for line in text.splitlines())
    assert "plan hash" in text
    assert text.isascii() == (encoding == "ascii")


def test_letters_are_replaced_one_for_one_and_only_where_needed() -> None:
    assert encodable("10 µA × 2 °C, Δt", "cp1252") == "10 µA × 2 °C, dt"
    assert encodable("10 µA × 2 °C, Δt", "ascii") == "10 uA x 2 oC, dt"
    assert encodable("≤ 5, ≥ 3", "ascii") == "<=5, >=3"
    assert encodable("Nyström 短", "ascii") == "Nystrom ?"


@pytest.mark.parametrize("width", [70, 100, 143])
def test_the_timeline_is_to_scale(width: int) -> None:
    text = _shown(_example("pre_post"), width)
    row = _row(text, "post1")
    margin, cells = len("post1") + 2, width - len("post1") - 3
    marked = [n - margin for n, c in enumerate(row) if n >= margin and c != " "]
    # The pairings go from 6 min to 12.17 min of 42.18 min.
    assert marked[0] == int(6 / 42.1754 * cells)
    assert marked[-1] == pytest.approx(12.167 / 42.1754 * cells, abs=1)
    assert marked == list(range(marked[0], marked[-1] + 1))
    assert _row(text, "pre1").rstrip()[-1] in "·▪█"


def test_one_pairing_is_to_scale() -> None:
    pre, post = re.findall(r"^  (?:pre|post) +([─┃]+)", _shown(_example("burst")), re.MULTILINE)
    width = len(pre)
    assert len(post) == width
    # Five pairs every 50 ms over 208 ms, the spike 8 ms after the EPSP.
    assert [n for n, c in enumerate(pre) if c == "┃"] == [
        int(t / 208 * (width - 1)) for t in (0, 50, 100, 150, 200)
    ]
    assert [n for n, c in enumerate(post) if c == "┃"] == [
        int(t / 208 * (width - 1)) for t in (8, 58, 108, 158, 208)
    ]


def test_a_box_rule_says_what_is_not_planned() -> None:
    text = _shown(_example("contingent"))
    assert "one pairing of the box rule" in text
    assert "up to 150" in text
    assert "when they come is not planned" in re.sub(r"\s+", " ", text)
    assert "none: no pairing" not in text


def test_a_pulse_without_a_spike_says_so() -> None:
    assert "no spike is expected of it" in _shown(_example("control_subthreshold"))
    assert "no spike is expected of it" not in _shown(SHORT)


def test_over_and_not_stated_are_words_and_come_first() -> None:
    # 160 µA × 100 µs on the 125 µm disc: 16 nC, 130 µC/cm², over the 50 of PtIr.
    changes = (("amplitude_ua = 60", "amplitude_ua = 160"), ('stimulus = "isolator_b"\n', ""))
    text = _shown(SHORT, replace=changes)
    rows = text[text.index("Limits:") :].splitlines()
    assert rows[0].split(",")[1:] == [" 1 over", " 1 not stated"]
    assert rows[2].split()[:4] == ["OVER", "pre1", "charge", "density"]
    assert rows[3].split()[:4] == ["not", "stated", "pre2", "stimulus"]
    assert "output.pre2.stimulus is not stated" in text
    assert "Cogan 2008" in text


def test_the_washout_budget_names_its_letters_and_what_is_late() -> None:
    text = _shown(_example("pre_post"))
    minutes = _row(text, "minute").split()[1:]
    cells = text.splitlines()[text.splitlines().index(_row(text, "minute")) + 1].split()
    assert minutes == [str(n) for n in range(1, 15)]
    assert cells == [".", *"bbbbbb", *"iiiiiII"]
    assert "b baseline, i induction, CAPITAL: late, past minute 12" in text


def test_a_long_washout_budget_stays_in_columns() -> None:
    clock = "\n[washout]\nbefore_plan_min = 30\nstart_by_min = 60\nend_by_min = 90\n"
    text = _shown(_example("pre_post"), 80, extra=clock)
    rows = [line.split()[1:] for line in text.splitlines() if line.startswith("minute ")]
    assert [int(n) for row in rows for n in row] == list(range(1, 44))


def test_phases_with_one_first_letter_have_letters_of_their_own() -> None:
    second = (
        '[[phase]]\nkind = "baseline"\nname = "before"\nduration_min = 2\n\n'
        '[[phase.test]]\npathway = "s1"\nevery_s = 4\n\n[[phase]]\nkind = "induction"'
    )
    text = _shown(SHORT.replace('[[phase]]\nkind = "induction"', second))
    assert "b baseline, e before, i induction" in text


def test_the_json_holds_the_audit_and_the_limits() -> None:
    plan, found, checked = _checked(SHORT, "", ())
    made = as_json(plan, found, checked)
    assert made["plan_hash"] == plan.hash()
    assert len(made["limits"]) == len(checked)
    assert made["audit"]["segments"][1]["pairings"] == 12
    assert "no permission" in made["passing_is_no_permission"]
