"""How figures look, and how one becomes inline SVG that follows the page's theme.

Colours are drawn as placeholders and replaced by CSS variables, so that one drawing serves light,
dark and print. Meaning never rests on colour alone: shapes and line styles say it too. Titles, keys
and sentences are HTML beside the drawing, where they wrap; inside it are only the axes' words and
the stamp. Margins are fixed, in inches, and wide enough for the larger type of narrow screens.
"""

from __future__ import annotations

import io
import itertools
import re
from collections.abc import Iterator
from contextlib import contextmanager
from html import escape
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

# Placeholder → CSS variable. The placeholders are colours that nothing else uses.
COLOURS = {
    "ink": "#010203",
    "quiet": "#020304",
    "rule": "#030405",
    "paper": "#040506",
    "first": "#050607",
    "second": "#060708",
    "third": "#070809",
    "warn": "#08090a",
    "band": "#090a0b",
}
INK, QUIET, RULE, PAPER = (COLOURS[c] for c in ("ink", "quiet", "rule", "paper"))
FIRST, SECOND, THIRD = (COLOURS[c] for c in ("first", "second", "third"))
WARN, BAND = COLOURS["warn"], COLOURS["band"]
SERIES = (FIRST, SECOND, THIRD, QUIET)
MARKS = ("o", "s", "^", "D")
# The same marks in the page's text, for keys.
GLYPHS = {"o": "●", "s": "■", "^": "▲", "D": "◆", "P": "✚", "v": "▼", "x": "✕"}
_NAMES = {colour: name for name, colour in COLOURS.items()}

WIDTH_IN = 8.0
_LEFT_IN, _RIGHT_IN, _GAP_IN = 0.8, 0.12, 0.95
_STEPS = [1, 2, 5, 10]
_STAMP_IN, _WORDS_IN, _BELOW_IN = 0.3, 0.3, 0.64

_RC: Any = {
    "svg.fonttype": "none",
    "svg.hashsalt": "rigctl",
    "font.family": "sans-serif",
    "font.size": 9.5,
    "axes.edgecolor": RULE,
    "axes.labelcolor": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.facecolor": "none",
    "axes.labelpad": 9,
    "figure.facecolor": "none",
    "text.color": INK,
    "xtick.color": RULE,
    "ytick.color": RULE,
    "xtick.labelcolor": QUIET,
    "ytick.labelcolor": QUIET,
    "xtick.major.pad": 5,
    "ytick.major.pad": 5,
    "lines.linewidth": 1.2,
}

Floats = npt.NDArray[np.float64]


class Key(NamedTuple):
    """One entry of a figure's key: a glyph, its colour's CSS variable, what it means."""

    glyph: str
    colour: str
    means: str


class Shown(NamedTuple):
    """A figure as the page takes it: title, SVG, key, and the sentence that says it."""

    name: str
    title: str
    svg: str
    key: tuple[Key, ...]
    says: str


def key(mark: str, colour: str, means: str) -> Key:
    """Return a key entry for a marker (or a line, given as a glyph) in a placeholder colour."""
    return Key(GLYPHS.get(mark, mark), _NAMES[colour], means)


class Drawing:
    """A figure on its way into the page."""

    def __init__(self, height_in: float, simulated: bool) -> None:
        self.figure = Figure(figsize=(WIDTH_IN, height_in))
        self.height_in = height_in
        self.simulated = simulated

    def panels(self, *shares: float) -> list[Axes]:
        """Return axes side by side, their widths in the ratio of ``shares``."""
        room = WIDTH_IN - _LEFT_IN - _RIGHT_IN - _GAP_IN * (len(shares) - 1)
        tall = self.height_in - _STAMP_IN - _WORDS_IN - _BELOW_IN
        made, left = [], _LEFT_IN
        for share in shares:
            wide = room * share / sum(shares)
            box = (
                left / WIDTH_IN,
                _BELOW_IN / self.height_in,
                wide / WIDTH_IN,
                tall / self.height_in,
            )
            axes = self.figure.add_axes(box)
            axes.xaxis.set_major_locator(MaxNLocator(6, steps=_STEPS))
            axes.yaxis.set_major_locator(MaxNLocator(5, steps=_STEPS))
            made.append(axes)
            left += wide + _GAP_IN
        return made

    def svg(self, description: str) -> str:
        """Return the figure as inline SVG with ``description`` as its text alternative."""
        if self.simulated:
            self.figure.text(
                1 - _RIGHT_IN / WIDTH_IN, 1 - 0.19 / self.height_in, "SIMULATED", ha="right",
                va="baseline", color=WARN, fontsize=11, fontweight="bold",
            )  # fmt: skip
        out = io.StringIO()
        with rc_context(_RC):
            self.figure.savefig(out, format="svg", metadata={"Date": None, "Creator": None})
        text = out.getvalue()
        text = text[text.index("<svg") :]
        text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
        text = re.sub(r'(<svg[^>]*?) width="[^"]*"', r"\1", text, count=1)
        text = re.sub(r'(<svg[^>]*?) height="[^"]*"', r"\1", text, count=1)
        # The page's own face; a hundredth of a point is finer than any screen or printer.
        text = re.sub(r"font: ((?:bold |\d+ )?[\d.]+px)[^;\"]*", _font, text)
        text = re.sub(r"font-family: [^;\"]*;? ?", "", text)
        text = re.sub(r"<[^>]+>", lambda tag: re.sub(r"(\d\.\d\d)\d+", r"\1", tag[0]), text)
        for name, colour in COLOURS.items():
            text = text.replace(colour, f"var(--{name})")
        return text.replace("<svg", f'<svg role="img" aria-label="{escape(description)}"', 1)


def _font(found: re.Match[str]) -> str:
    *weight, size = found[1].split()
    return f"font-size: {size}" + (f"; font-weight: {weight[0]}" if weight else "")


@contextmanager
def drawing(height_in: float, simulated: bool) -> Iterator[Drawing]:
    """Give a drawing under the house's style."""
    with rc_context(_RC):
        yield Drawing(height_in, simulated)


def ordinate(axes: Axes, words: str) -> None:
    """Name the ordinate: level, above its upper end."""
    axes.annotate(
        words, (0, 1), (-0.62 * 72, 9), xycoords="axes fraction", textcoords="offset points",
        ha="left", va="bottom", color=INK,
    )  # fmt: skip


def nothing(axes: Axes, words: str) -> None:
    """Say why there is nothing to draw."""
    axes.text(0.5, 0.5, words, transform=axes.transAxes, ha="center", va="center", color=QUIET)


def thin(x: Floats, y: Floats, bins: int = 1200) -> tuple[Floats, Floats]:
    """Return at most ``2·bins`` points that keep each bin's least and largest value.

    Parameters
    ----------
    x, y : ndarray, shape (n,)
        ``x`` rising.
    """
    if len(x) <= 2 * bins:
        return x, y
    edges = np.linspace(0, len(x), bins + 1).astype(int)
    keep: list[int] = []
    for first, last in itertools.pairwise(edges):
        part = y[first:last]
        keep += sorted({first + int(np.argmin(part)), first + int(np.argmax(part))})
    index = np.array(keep)
    return x[index], y[index]


def in_bins(values: Floats, bins: int, least: bool) -> Floats:
    """Return the least (or largest) value of each of ``bins`` stretches of equal count."""
    edges = np.unique(np.linspace(0, len(values), min(bins, len(values)) + 1).astype(int))[:-1]
    pick = np.minimum if least else np.maximum
    found: Floats = pick.reduceat(values, edges)
    return found


def shade(axes: Axes, from_x: float, to_x: float) -> None:
    """Shade a stretch of the abscissa; the key says what it is."""
    axes.axvspan(from_x, to_x, color=BAND, alpha=0.35, lw=0, zorder=0)


def above(axes: Axes, x: float, words: str) -> None:
    """Write ``words`` above the axes at ``x``."""
    axes.text(
        x, 1.02, words, transform=axes.get_xaxis_transform(), ha="center", va="bottom", color=QUIET
    )
