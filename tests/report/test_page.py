"""The page as text: what it must say, what it must never say, and that it stands alone."""

from __future__ import annotations

import re
from html import unescape
from html.parser import HTMLParser
from pathlib import Path

import pytest

from rigctl.errors import InputError
from rigctl.record.read import open_record
from rigctl.report.facts import Facts
from rigctl.report.page import render, write_page
from rigctl.report.words import five_lines, methods
from rigctl.session.rows import SyncRow
from tests.conftest import EXAMPLES, SHORT, rehearsed
from tests.report.builder import S, build

FIGURES = ["A", "B", "C", "D", "E", "F", "G"]
VOID = {"meta", "link"}


class Page(HTMLParser):
    """A page taken apart: figures, links, and whether its elements nest."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.text = text
        self.open: list[str] = []
        self.links: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.figures: list[str] = re.findall(r"<figure.*?</figure>", text, re.DOTALL)
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        self.links += [v or "" for k, v in attrs if k in ("src", "href", "xlink:href", "action")]
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.handle_starttag(tag, attrs)
        if tag not in VOID:
            self.open.pop()


def _page(record: Path) -> Page:
    with open_record(record) as opened:
        return Page(render(opened))


def _words(text: str) -> str:
    bare = re.sub(r"<(svg|style).*?</\1>", " ", text, flags=re.DOTALL)
    bare = re.sub(r"<[^>]+>", " ", bare)
    return re.sub(r"\s+", " ", unescape(bare))


@pytest.fixture(scope="module")
def page(standard_record: Path) -> Page:
    return _page(standard_record)


@pytest.fixture(scope="module")
def short_page(short_record: Path) -> Page:
    return _page(short_record)


def test_nothing_is_fetched_and_no_script_runs(page: Page) -> None:
    assert all(link.startswith(("#", "data:")) for link in page.links)
    assert not re.search(r"url\((?!#)", page.text)
    assert "@import" not in page.text
    names = {tag for tag, _ in page.elements}
    assert not names & {"script", "iframe", "img", "object", "embed"}
    assert not [k for _, attrs in page.elements for k in attrs if k.startswith("on")]


def test_ids_are_unique_over_all_figures(page: Page) -> None:
    # Two drawings may name their clip paths alike: then the second would be cut by the first's.
    defined: dict[str, set[str]] = {}
    for figure in page.figures:
        for name, body in re.findall(
            r'<clipPath id="([^"]+)">\s*(.*?)\s*</clipPath>', figure, re.DOTALL
        ):
            defined.setdefault(name, set()).add(body)
    assert all(len(bodies) == 1 for bodies in defined.values())
    pages_own = [a["id"] for t, a in page.elements if t in ("figure", "section") and a.get("id")]
    assert len(pages_own) == len(set(pages_own))


def test_every_figure_has_title_words_and_stamp(page: Page) -> None:
    letters = [re.search(r'class="letter">(\w+)<', f) for f in page.figures]
    assert [m[1][0] for m in letters if m] == [*FIGURES, "G"]
    for figure in page.figures:
        label = re.search(r'<svg role="img" aria-label="([^"]+)"', figure)
        said = re.search(r"<figcaption>(.+?)</figcaption>", figure, re.DOTALL)
        assert label is not None
        assert said is not None
        assert re.search(r"\d", said[1])
        assert said[1].replace("\u00a0", " ") in label[1]
        assert ">SIMULATED</text>" in figure
        assert "<h3>" in figure
        # Text stays text, so that it can be searched and read aloud.
        assert "<text" in figure


def test_a_measurement_and_a_forecast_never_share_axes(page: Page) -> None:
    for figure in page.figures:
        drawn = " ".join(re.findall(r"<text[^>]*>([^<]*)</text>", figure))
        assert not ("predicted" in drawn and "amplitude" in drawn)
        assert ("predicted" in drawn) == ("Forecast, not a measurement" in figure)


def test_the_stamp_is_first_and_on_paper(page: Page) -> None:
    body = page.text[page.text.index("<body") :]
    assert body.index("SIMULATED") < body.index("<h1>")
    assert "evidence of nothing biological" in body
    assert "<title>SIMULATED: " in page.text
    assert re.search(r"@page \{ @top-right \{ content: \"SIMULATED\"", page.text)


def test_a_real_record_bears_no_stamp(tmp_path: Path) -> None:
    real = _page(build(tmp_path / "session.sqlite", [10.0, 11.0], simulated="false"))
    assert "SIMULATED" not in real.text
    assert "simulated" not in _words(real.text).replace("rehearsal rig (simulated)", "")


def test_creep_misses_and_doublets_are_said_in_words(standard_record: Path, page: Page) -> None:
    with open_record(standard_record) as record:
        facts = Facts(record)
        creep, first = facts.creep(), facts.first_off_target()
        fates = {p.id: p.fate for p in record.pairings}
    assert creep is not None
    # Planted: 3 ms over the induction.
    assert 2.6 < creep.total_ms < 3.4
    assert creep.low_ms < creep.total_ms < creep.high_ms
    assert first == min(n for n, fate in fates.items() if fate == "off_target")
    words = _words(page.text)
    assert f"Spike latency crept by {creep.total_ms:+.1f} ms over the induction" in words
    assert f"the first pairing off target was number {first}." in words
    assert "3 doublet" in words
    assert "8 no post" in words
    assert f"Δt crept by {creep.total_ms:+.1f} ms" in words


def test_a_steady_latency_is_not_called_creep(short_record: Path, short_page: Page) -> None:
    with open_record(short_record) as record:
        facts = Facts(record)
        assert len(facts.errors_ms()[1]) == 12
        assert facts.creep() is None
    assert "crept" not in short_page.text


@pytest.mark.parametrize(
    ("per_pair_ms", "clear"), [(0.0, False), (0.03, False), (0.08, True), (-0.08, True)]
)
def test_creep_is_said_only_when_clear(tmp_path: Path, per_pair_ms: float, clear: bool) -> None:
    wobble = [0.1, -0.1, 0.05, -0.05]
    dts = [10 + per_pair_ms * n + wobble[n % 4] for n in range(12)]
    with open_record(build(tmp_path / "session.sqlite", dts)) as record:
        creep = Facts(record).creep()
    assert (creep is not None) is clear
    if creep is not None:
        assert creep.total_ms == pytest.approx(11 * per_pair_ms, abs=0.1)


def test_every_spike_pair_is_in_the_ledger_and_all_is_escaped(tmp_path: Path) -> None:
    # The same page shows that what comes from files and commands is escaped.
    record = build(
        tmp_path / "session.sqlite",
        [10.5, None, 7.0],
        ["on_target", "no_post", "off_target"],
        protocol=SHORT.replace('"short"', "'<script>alert(\"x\")</script> & co'"),
        note="<b>bold</b>",
    )
    text = _page(record).text
    assert "<script" not in text
    assert "<b>" not in text
    assert "&lt;script&gt;" in text
    assert "Every spike pair (3)" in text
    ledger = re.search(r"<details class=\"in-print\">.*?</details>", text, re.DOTALL)
    assert ledger is not None
    rows = [re.findall(r"<td[^>]*>([^<]*)</td>", row) for row in ledger[0].split("<tr>")[2:]]
    assert [r[0] for r in rows] == ["1", "2", "3"]
    assert [r[3:] for r in rows] == [
        ["+10.000", "+10.500", "+0.500", "on target"],
        ["+10.000", "", "", "no post"],
        ["+10.000", "+7.000", "-3.000", "off target"],
    ]


def test_a_forecast_without_preparation_bears_its_badge(tmp_path: Path) -> None:
    start, end = SHORT.index("[[forecast]]"), SHORT.index("[[phase]]")
    unnamed = SHORT[:start] + SHORT[end:]
    record = build(tmp_path / "session.sqlite", [10.0] * 3, protocol=unnamed)
    assert _page(record).text.count("NO PREPARATION NAMED") >= 3


def test_more_pairings_than_the_source_had_is_called_extrapolation(
    page: Page, short_page: Page
) -> None:
    assert "EXTRAPOLATED" in page.text
    assert "EXTRAPOLATED" not in short_page.text


def test_no_sentence_says_that_the_synapse_changed(standard_record: Path) -> None:
    with open_record(standard_record) as record:
        facts = Facts(record)
        said = " ".join([*five_lines(facts), methods(facts)]).lower()
    for word in ("potentiat", "depress", "ltp", "ltd", "plasticity", "induced", "strengthen"):
        assert word not in said
    assert "these delivered times imply" in said


def test_an_open_record_says_so(tmp_path: Path) -> None:
    words = _words(_page(build(tmp_path / "session.sqlite", [10.0], closed=False)).text)
    assert "It was interrupted; the record is open" in words
    assert "none: the record is open" in words


def test_a_record_without_anything_still_makes_a_page(tmp_path: Path) -> None:
    page = _page(build(tmp_path / "session.sqlite"))
    assert len(page.figures) == 7
    for words in ("no sweep was recorded", "no Δt was delivered", "no trigger fired"):
        assert words in page.text


def test_the_clock_figure_finds_the_skew(tmp_path: Path) -> None:
    # A box clock 40 ppm fast, seen through an alternating ± 100 µs.
    sync = [
        SyncRow(n * S, round(-40e-6 * n * S) + (-1) ** n * 100_000, 300_000, 0.0, 600_000)
        for n in range(200)
    ]
    words = _words(_page(build(tmp_path / "session.sqlite", [10.0], sync=sync)).text)
    assert "box's clock runs +40.0 ppm against the host's" in words
    assert "one exchange is sure to ± 300 µs" in words


def test_a_negative_delta_t_has_its_spikes_in_the_figure(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, SHORT.replace("dt_ms = 10", "dt_ms = -18"))
    page = _page(ended.record)
    assert "12 of 12 pairings, spread over the session; 12 detected events marked" in page.text
    assert "EPSP onset is derived" in page.text


def test_a_detected_pre_event_is_drawn_unlike_a_derived_one(tmp_path: Path) -> None:
    text = (EXAMPLES / "light.toml").read_text(encoding="utf-8")
    text = re.sub(r"duration_min = \d+", "duration_min = 0.5", text)
    text = re.sub(r"pairings = \d+", "pairings = 6", text)
    rig = (EXAMPLES / "rigs/light.toml").read_text(encoding="utf-8")
    page = _page(rehearsed(tmp_path, text, rig).record)
    assert "presynaptic spike is detected" in page.text
    assert "is derived" not in page.figures[1]


def test_a_control_has_no_delta_t_to_speak_of(tmp_path: Path) -> None:
    text = (EXAMPLES / "control_pre_only.toml").read_text(encoding="utf-8")
    text = text.replace("pairings = 75", "pairings = 5")
    text = re.sub(r"duration_min = \d+", "duration_min = 0.5", text)
    words = _words(_page(rehearsed(tmp_path, text).record).text)
    assert "without a spike pair: a control" in words
    assert "with both spikes" not in words


def test_interruptions_are_shown_without_opening_anything(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, faults="cable_pull_at_s=40")
    text = _page(ended.record).text
    shown = text[text.index("Interruptions, alarms, actions") : text.index("whole log")]
    assert "LOST: " in shown
    assert "ALARM" in shown


def test_the_page_is_always_the_same_and_written_whole_or_not_at_all(
    tmp_path: Path, short_record: Path, short_page: Page
) -> None:
    page = tmp_path / "report.html"
    page.mkdir()
    with pytest.raises(InputError, match="the page cannot be written"):
        write_page(short_record, page)
    assert list(tmp_path.iterdir()) == [page]
    page.rmdir()
    write_page(short_record, page)
    assert list(tmp_path.iterdir()) == [page]
    assert page.read_text(encoding="utf-8") == short_page.text
