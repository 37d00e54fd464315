"""Figures E, F and G: time courses. A measurement and a forecast never share axes."""

from __future__ import annotations

import numpy as np

from rigctl.report.facts import Facts, Floats
from rigctl.report.figures.style import (
    FIRST,
    INK,
    MARKS,
    QUIET,
    RULE,
    SERIES,
    drawing,
    shade,
    thin,
)
from rigctl.report.summary import label, lateness_ns


def figure_e(facts: Facts) -> tuple[str, str]:
    """Response amplitude of each pathway over time."""
    kinds = sorted({m.kind for m in facts.record.measures if m.kind.endswith("amplitude")})
    by_pathway: dict[str, list[tuple[float, float]]] = {}
    unit = "mV"
    for m in facts.record.measures:
        if m.kind in kinds and m.pathway is not None:
            by_pathway.setdefault(m.pathway, []).append((facts.minutes(m.at_ns), m.value))
            unit = m.unit
    parts = []
    with drawing(3.0, facts.simulated) as made:
        axes = made.figure.subplots()
        for n, (pathway, points) in enumerate(sorted(by_pathway.items())):
            values = np.array(points)
            paired = " (paired)" if pathway == facts.paired else ""
            axes.plot(
                *thin(values[:, 0], values[:, 1], 600), MARKS[n % 4], color=SERIES[n % 4], ms=2.5,
                alpha=0.4, mec="none",
            )  # fmt: skip
            axes.plot(
                *_by_minute(values), "-" + MARKS[n % 4], color=SERIES[n % 4], ms=4, lw=1,
                mec="none", label=f"{pathway}{paired}, mean of each minute",
            )  # fmt: skip
            parts.append(f"{pathway}{paired}: {len(points)} responses")
        if facts.induction is not None:
            start, end = facts.induction.start_ns, facts.induction.end_ns
            shade(axes, facts.minutes(start), facts.minutes(end), "induction")
        if by_pathway:
            axes.legend(loc="lower right", ncols=2)
        else:
            axes.text(0.5, 0.5, "no response was measured", transform=axes.transAxes, ha="center")
        axes.set_xlabel("min since the induction's start")
        axes.set_ylabel(f"response amplitude, {unit}")
        axes.set_ylim(bottom=min(0, axes.get_ylim()[0]))
        axes.set_title("E  Measured responses", pad=16)
    text = "; ".join(parts) or "no response was measured"
    return made.svg(f"Figure E, measured response amplitudes: {text}"), text


def _by_minute(values: Floats) -> tuple[Floats, Floats]:
    minute = np.floor(values[:, 0])
    found = np.unique(minute)
    means = [values[minute == m, 1].mean() for m in found]
    return found + 0.5, np.array(means)


def figure_f(facts: Facts) -> tuple[str, str]:
    """Tail of the lateness, and the clock's residual with its bound."""
    hello = facts.record.bodies("connected")
    tick_ns = hello[0]["tick_num"] / hello[0]["tick_den"] if hello else 1
    late = np.array(lateness_ns(facts.record, round(tick_ns))) / 1000
    with drawing(2.9, facts.simulated) as made:
        tail, clock = made.figure.subplots(1, 2)
        if len(late):
            share = 1 - np.arange(len(late)) / len(late)
            tail.step(*thin(late, share), where="post", color=FIRST)
            tail.plot(late[-1], share[-1], "o", color=FIRST, ms=4)
            tail.set_yscale("log")
            top = max(1.0, float(late[-1]) * 1.1)
            tail.set_xlim(min(-0.05 * top, float(late[0])), top)
        tail.set_xlabel("fired − planned, µs")
        tail.set_ylabel("share of triggers at least this late")
        tail.set_title("F  Lateness tail")
        words = _clock(clock, facts)
        clock.set_title("Clock residual")
    worst = f"largest {late[-1]:g} µs" if len(late) else "none"
    text = f"{len(late)} fired triggers, {worst}; box tick {tick_ns:g} ns; {words}"
    return made.svg(f"Figure F, timing: {text}"), text


def _clock(axes: object, facts: Facts) -> str:
    from matplotlib.axes import Axes

    assert isinstance(axes, Axes)
    axes.set_xlabel("min since the induction's start")
    axes.set_ylabel("offset − straight line, µs")
    sync = facts.record.sync
    if len(sync) < 3:
        axes.text(0.5, 0.5, "too few clock exchanges", transform=axes.transAxes, ha="center")
        return "too few clock exchanges for a residual"
    at = np.array([s.at_ns for s in sync], dtype=float)
    offset = np.array([s.offset_ns for s in sync], dtype=float)
    bound = np.array([s.bound_ns for s in sync], dtype=float)
    centre = at.mean()
    slope, level = np.polyfit(at - centre, offset, 1)
    rest = (offset - level - slope * (at - centre)) / 1000
    minutes = (at - facts.zero_ns) / 6e10
    order = np.argsort(minutes)
    minutes, rest, bound = minutes[order], rest[order], bound[order] / 1000
    axes.plot(*thin(minutes, rest + bound, 300), color=RULE, lw=0.5)
    axes.plot(*thin(minutes, rest - bound, 300), color=RULE, lw=0.5)
    axes.plot(*thin(minutes, rest, 300), ".", color=FIRST, ms=2)
    axes.axhline(0, color=INK, lw=0.8)
    p99 = float(np.quantile(np.abs(rest), 0.99))
    return (
        f"box clock {-slope * 1e6:+.1f} ppm against the host, 99 % of {len(sync)} residuals within "
        f"{p99:.0f} µs, bounds ± {np.median(bound):.0f} µs (grey)"
    )


def figure_g(facts: Facts) -> tuple[str, str]:
    """The forecast as it grew, with its band and the planned-exactly curve."""
    choices = facts.plan.forecasts
    pathway = facts.paired
    parts = []
    with drawing(1.0 + 2.1 * len(choices), facts.simulated) as made:
        rows = made.figure.subplots(len(choices), 1, squeeze=False)[:, 0]
        for axes, choice in zip(rows, choices, strict=True):
            mine = [
                f
                for f in facts.record.forecasts
                if (f.rule, f.parameter_set, f.pathway)
                == (choice.rule, choice.parameter_set, pathway)
            ]
            name = label(facts.plan, choice.rule, choice.parameter_set)
            if pathway is not None:
                x, y = facts.planned_curve(choice, pathway)
                axes.plot(
                    *thin(x, 100 * y), color=INK, lw=1, ls=(0, (3, 2)), label="planned exactly"
                )
            if mine:
                x = np.array([facts.minutes(f.at_ns) for f in mine])
                low = np.array([100 * f.low for f in mine])
                high = np.array([100 * f.high for f in mine])
                y = np.array([100 * f.change for f in mine])
                step = max(1, len(x) // 2000)
                axes.fill_between(
                    x[::step], low[::step], high[::step], color=FIRST, alpha=0.25, lw=0
                )
                axes.plot(*thin(x, y), color=FIRST, label="from delivered spikes")
                parts.append(
                    f"{name} with {choice.parameter_set}: {y[-1]:+.1f} % "
                    f"[{low[-1]:+.1f}, {high[-1]:+.1f}]"
                )
            axes.axhline(0, color=RULE, lw=0.8)
            axes.set_ylabel("predicted change, %")
            badge = choice.preparation or "NO PREPARATION NAMED"
            axes.set_title(f"G  FORECAST by {name}, set {choice.parameter_set}: {badge}")
            axes.legend(loc="upper left")
            if facts.induction is not None:
                shade(
                    axes,
                    facts.minutes(facts.induction.start_ns),
                    facts.minutes(facts.induction.end_ns),
                )
        rows[-1].set_xlabel("min since the induction's start")
        rows[-1].xaxis.label.set_color(QUIET)
    text = "; ".join(parts) or "no forecast"
    return made.svg(f"Figure G, forecast, not a measurement: {text}"), text
