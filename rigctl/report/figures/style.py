"""How figures look, and how one becomes inline SVG that follows the page's theme.

Colours are drawn as placeholders and replaced by CSS variables, so that one drawing serves light,
dark and print. Meaning never rests on colour alone: shapes and line styles say it too.
"""

from __future__ import annotations

import io
import itertools
import re
from collections.abc import Iterator
from contextlib import contextmanager
from html import escape
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.figure import Figure

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
WIDTH_IN = 8.6

_RC: Any = {
    "svg.fonttype": "none",
    "svg.hashsalt": "rigctl",
    "font.family": "sans-serif",
    "font.size": 9.5,
    "axes.edgecolor": RULE,
    "axes.labelcolor": INK,
    "axes.titlesize": 10,
    "axes.titlecolor": INK,
    "axes.titlelocation": "left",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.facecolor": "none",
    "figure.facecolor": "none",
    "text.color": INK,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "legend.frameon": False,
    "legend.fontsize": 8.5,
    "lines.linewidth": 1.2,
}

Floats = npt.NDArray[np.float64]


class Drawing:
    """A figure on its way into the page."""

    def __init__(self, height_in: float, simulated: bool) -> None:
        self.figure = Figure(figsize=(WIDTH_IN, height_in), layout="constrained")
        self.simulated = simulated

    def svg(self, description: str) -> str:
        """Return the figure as inline SVG with ``description`` as its text alternative."""
        if self.simulated:
            self.figure.text(
                0.995, 0.995, "SIMULATED", ha="right", va="top",
                color=WARN, fontsize=11, fontweight="bold",
            )  # fmt: skip
        out = io.StringIO()
        self.figure.savefig(out, format="svg", metadata={"Date": None, "Creator": None})
        text = out.getvalue()
        text = text[text.index("<svg") :]
        text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
        for name, colour in COLOURS.items():
            text = text.replace(colour, f"var(--{name})")
        text = re.sub(r'(<svg[^>]*?) width="[^"]*"', r"\1", text, count=1)
        text = re.sub(r'(<svg[^>]*?) height="[^"]*"', r"\1", text, count=1)
        return text.replace("<svg", f'<svg role="img" aria-label="{escape(description)}"', 1)


@contextmanager
def drawing(height_in: float, simulated: bool) -> Iterator[Drawing]:
    """Give a drawing under the house's style."""
    with rc_context(_RC):
        yield Drawing(height_in, simulated)


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


def shade(axes: Axes, from_x: float, to_x: float, label: str | None = None) -> None:
    """Shade a stretch of the abscissa, with its name at the top."""
    axes.axvspan(from_x, to_x, color=BAND, alpha=0.35, lw=0, zorder=0)
    if label:
        axes.text(
            (from_x + to_x) / 2, 1.0, label, transform=axes.get_xaxis_transform(),
            ha="center", va="bottom", color=QUIET, fontsize=8.5,
        )  # fmt: skip
