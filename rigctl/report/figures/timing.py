"""Figure F: how late pulses were, and how well the box's clock is known."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import FuncFormatter

from rigctl.report.facts import Facts, Floats
from rigctl.report.figures.style import (
    BAND,
    FIRST,
    INK,
    Shown,
    drawing,
    in_bins,
    key,
    nothing,
    ordinate,
    thin,
)
from rigctl.report.summary import lateness_ns

_BINS = 300
_STRETCHES = 60


def figure_f(facts: Facts) -> Shown:
    """Tail of the lateness, and the clock's residual with its bounds."""
    late = np.array(lateness_ns(facts.record), dtype=float) / 1000
    with drawing(3.0, facts.simulated) as made:
        tail, clock = made.panels(1, 1)
        _tail(tail, late)
        words = _clock(clock, facts)
        worst = f"the latest by {late[-1]:g} µs" if len(late) else "so no lateness"
        says = (
            f"Left, {len(late)} fired triggers, {worst} (the box's tick is "
            f"{facts.plan.tick_ns / 1000:g} µs). Right, {words}."
        )
        title = "Timing: lateness tail and clock residual"
        keys = (
            key("━", FIRST, "share of triggers at least this late"),
            key("●", FIRST, "clock: exchange − straight line"),
            key("■", BAND, "what all exchanges nearby allow"),
        )
        return Shown("F", title, made.svg(f"Figure F. {title}. {says}"), keys, says)


def _tail(axes: Axes, late: Floats) -> None:
    axes.set_xlabel("fired − planned, µs")
    ordinate(axes, "share of triggers")
    if len(late) == 0:
        nothing(axes, "no trigger fired")
        return
    # At each value the share that is at least as late; equal values make one step.
    values, first = np.unique(late, return_index=True)
    share = 1 - first / len(late)
    floor = 0.5 / len(late)
    top = max(1.0, 1.1 * float(values[-1]))
    start = min(-0.05 * top, float(values[0]))
    x, y = thin(values, share, _BINS)
    axes.step([start, *x, x[-1]], [1.0, *y, floor], where="pre", color=FIRST)
    axes.set_yscale("log")
    axes.minorticks_off()
    axes.yaxis.set_major_formatter(FuncFormatter(lambda share, _position: f"{share:g}"))
    axes.set_ylim(floor, 1.5)
    axes.set_xlim(start, top)


def _clock(axes: Axes, facts: Facts) -> str:
    axes.set_xlabel("min since induction")
    ordinate(axes, "host − box, less the line, µs")
    sync = facts.record.sync
    if len(sync) < 3:
        nothing(axes, "too few clock exchanges")
        return "too few clock exchanges for a residual"
    at, offset, bound = (
        np.array([getattr(s, which) for s in sync], dtype=float)
        for which in ("at_ns", "offset_ns", "bound_ns")
    )
    centre = at.mean()
    slope, level = np.polyfit(at - centre, offset, 1)
    rest = (offset - level - slope * (at - centre)) / 1000
    minutes = (at - facts.zero_ns) / 6e10
    bound /= 1000
    # Each exchange allows rest ± bound; neighbours together allow only what all of them do.
    edges = np.unique(np.linspace(0, len(at), min(_STRETCHES, len(at)) + 1).astype(int))[:-1]
    low, high = in_bins(rest - bound, _STRETCHES, False), in_bins(rest + bound, _STRETCHES, True)
    axes.fill_between(minutes[edges], low, high, color=BAND, alpha=0.5, lw=0, step="post")
    axes.plot(*thin(minutes, rest, _BINS), ".", color=FIRST, ms=2.5)
    axes.axhline(0, color=INK, lw=0.8)
    p99 = float(np.quantile(np.abs(rest), 0.99))
    return (
        f"{len(at)} clock exchanges: the box's clock runs {-slope * 1e6:+.1f} ppm against the "
        f"host's, 99 % of residuals lie within {p99:.0f} µs, one exchange is sure to "
        f"± {np.median(bound):.0f} µs"
    )
