"""Drawing: colours that follow the theme, thinning that keeps extremes, words left as they are."""

from __future__ import annotations

import itertools
import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.report.figures.style import COLOURS, FIRST, drawing, in_bins, thin

numbers = st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=400)


@given(numbers, st.integers(1, 60))
def test_thinning_keeps_every_extreme(values: list[float], bins: int) -> None:
    y = np.array(values)
    x = np.arange(len(y), dtype=float)
    thin_x, thin_y = thin(x, y, bins)
    assert len(thin_x) == len(thin_y) <= max(2 * bins, 1)
    assert thin_y.min() == y.min()
    assert thin_y.max() == y.max()
    assert np.all(np.diff(thin_x) > 0)
    assert np.array_equal(y[thin_x.astype(int)], thin_y)


@given(numbers, st.integers(1, 60), st.booleans())
@settings(max_examples=50)
def test_bins_hold_the_extreme_of_their_stretch(
    values: list[float], bins: int, least: bool
) -> None:
    y = np.array(values)
    found = in_bins(y, bins, least)
    edges = np.unique(np.linspace(0, len(y), min(bins, len(y)) + 1).astype(int))
    pick = min if least else max
    assert found.tolist() == [pick(y[a:b]) for a, b in itertools.pairwise(edges)]


@pytest.mark.parametrize("simulated", [True, False])
def test_a_drawing_follows_the_theme_and_bears_the_stamp(simulated: bool) -> None:
    with drawing(2, simulated) as made:
        (axes,) = made.panels(1)
    axes.plot([0, 1], [0, 0.123456], color=FIRST)
    axes.text(0, 0, "Δt +0.123456 ms < 1 & more")
    svg = made.svg('a "quoted" <description>')
    assert svg.startswith('<svg role="img" aria-label="a &quot;quoted&quot; &lt;description&gt;"')
    assert "var(--first)" in svg
    assert not re.search(r"#[0-9a-fA-F]{6}", svg)
    assert not any(colour in svg for colour in COLOURS.values())
    assert "Δt +0.123456 ms &lt; 1 &amp; more</text>" in svg
    assert (">SIMULATED</text>" in svg) is simulated
    assert "font-family" not in svg
    assert not re.search(r"<svg[^>]* (width|height)=", svg)


def test_the_same_drawing_twice_is_the_same_text() -> None:
    def once() -> str:
        with drawing(2, True) as made:
            (axes,) = made.panels(1)
            axes.plot([0, 1, 2], [0, 1, 0], "o-")
            return made.svg("same")

    assert once() == once()
