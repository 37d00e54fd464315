"""The page in a real browser: nothing in the console, nothing too wide, both themes readable."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from rigctl.report.page import write_page
from tests.browser.chromium import WIDTHS, contrast, find, measure

# WCAG 2.2, success criterion 1.4.3: 4.5 to 1 for text.
READABLE = 4.5


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory, standard_record: Path) -> Path:
    find()
    page = tmp_path_factory.mktemp("browser") / "report.html"
    write_page(standard_record, page)
    return page


@pytest.fixture(scope="module", params=["light", "dark"])
def opened(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory, page: Path
) -> tuple[str, dict[int, dict[str, Any]], list[str]]:
    folder = tmp_path_factory.mktemp(request.param) / "work"
    found, console = measure(page, folder, dark=request.param == "dark")
    return request.param, found, console


Opened = tuple[str, dict[int, dict[str, Any]], list[str]]


def test_the_console_stays_empty_and_nothing_is_fetched(opened: Opened) -> None:
    _scheme, found, console = opened
    assert console == []
    assert set(found) == set(WIDTHS)
    assert all(one["fetched"] == [] for one in found.values())


@pytest.mark.parametrize("width", WIDTHS)
def test_nothing_is_wider_than_the_window(opened: Opened, width: int) -> None:
    one = opened[1][width]
    assert one["scrollWidth"] <= width
    assert one["spill"] == []


@pytest.mark.parametrize("width", WIDTHS)
def test_figures_are_whole_readable_and_said_in_words(opened: Opened, width: int) -> None:
    one = opened[1][width]
    assert len(one["figures"]) == 8
    for figure in one["figures"]:
        assert figure["seen"]
        assert figure["role"] == "img"
        assert len(figure["label"]) > 40
        assert len(figure["caption"]) > 20
    assert one["clipped"] == []
    # Words of a figure on screen, in CSS pixels.
    assert one["smallest"] >= 8.5


@pytest.mark.parametrize("width", WIDTHS)
def test_both_themes_are_readable(opened: Opened, width: int) -> None:
    scheme, found, _console = opened
    one = found[width]
    # Light ink on dark paper and the other way round.
    assert (contrast(one["paper"], "rgb(0, 0, 0)") < 2) is (scheme == "dark")
    assert contrast(one["ink"], one["paper"]) >= 7
    for colour in (one["quiet"], one["stamp"]):
        assert contrast(colour, one["paper"]) >= READABLE
    assert len(set(one["drawn"])) >= 2
    for colour in set(one["drawn"]):
        assert contrast(colour, one["card"]) >= READABLE


def test_the_measuring_itself_finds_what_is_wrong(tmp_path: Path, page: Path) -> None:
    text = page.read_text(encoding="utf-8").replace(
        "</main>",
        '<div style="width: 2000px">too wide</div></main>'
        "<script>console.error('noise'); </script><img src='missing.png'>",
    )
    wrong = tmp_path / "wrong.html"
    wrong.write_text(text.replace('role="img"', 'role="none"', 1), encoding="utf-8")
    found, console = measure(wrong, tmp_path / "work", dark=False)
    assert any("noise" in line for line in console)
    for width in WIDTHS:
        assert found[width]["scrollWidth"] > width
        assert found[width]["spill"] == ["DIV too wide"]
        assert found[width]["fetched"] == ["file"]
        assert found[width]["figures"][0]["role"] == "none"
