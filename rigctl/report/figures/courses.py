"""Figures E and G: courses over the session. A measurement and a forecast never share axes."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from rigctl.plasticity.forecast import extrapolates
from rigctl.protocol.plan import RuleChoice
from rigctl.report.facts import Facts, Floats
from rigctl.report.figures.style import (
    BAND,
    FIRST,
    INK,
    MARKS,
    RULE,
    SERIES,
    Key,
    Shown,
    drawing,
    in_bins,
    key,
    nothing,
    ordinate,
    shade,
    thin,
)
from rigctl.report.summary import label
from rigctl.report.words import percent

_BAND_BINS = 500
_READ_OUT_MIN = 10.0


def _shade_inductions(axes: Axes, facts: Facts) -> None:
    for phase in facts.phases:
        if phase.kind == "induction":
            shade(axes, facts.minutes(phase.start_ns), facts.minutes(phase.end_ns))


def figure_e(facts: Facts) -> Shown:
    """Response amplitude of each pathway over time."""
    responses = facts.responses()
    keys: list[Key] = []
    with drawing(3.2, facts.simulated) as made:
        (axes,) = made.panels(1)
        for n, (pathway, values) in enumerate(responses.items()):
            mark, colour = MARKS[n % 4], SERIES[n % 4]
            axes.plot(
                *thin(values[:, 0], values[:, 1], 400), mark, color=colour, ms=2.5, alpha=0.4,
                mec="none",
            )  # fmt: skip
            axes.plot(*_by_minute(values), "-" + mark, color=colour, ms=4, lw=1, mec="none")
            paired = " (paired)" if pathway == facts.paired else ""
            keys.append(key(mark, colour, f"{pathway}{paired}: each response, mean of each minute"))
        if responses:
            axes.set_ylim(bottom=min(0, axes.get_ylim()[0]))
        else:
            nothing(axes, "no response was measured")
        _shade_inductions(axes, facts)
        keys.append(key("■", BAND, "induction"))
        axes.set_xlabel("min since the induction's start")
        ordinate(axes, f"response amplitude, {facts.response_unit}")
        says = _words_e(facts, responses)
        title = "Measured responses to test stimuli"
        return Shown("E", title, made.svg(f"Figure E. {title}. {says}"), tuple(keys), says)


def _words_e(facts: Facts, responses: dict[str, Floats]) -> str:
    if not responses:
        return "No response was measured."
    unit = facts.response_unit
    parts = []
    for pathway, values in responses.items():
        paired = " (paired)" if pathway == facts.paired else ""
        before = values[values[:, 0] < 0, 1]
        last = values[-1, 0]
        after = values[(values[:, 0] > max(0.0, last - _READ_OUT_MIN)), 1]
        text = f"{pathway}{paired}, {len(values)} responses"
        if facts.induction is not None and len(before):
            text += f": {before.mean():.2f} {unit} on average before the induction"
            if len(after):
                text += f", {after.mean():.2f} {unit} in the last {_READ_OUT_MIN:g} min"
        else:
            text += f": {values[:, 1].mean():.2f} {unit} on average"
        parts.append(text)
    return "; ".join(parts) + "."


def _by_minute(values: Floats) -> tuple[Floats, Floats]:
    """Return the mean of each minute; a gap of more than two minutes breaks the line."""
    minute = np.floor(values[:, 0])
    found = np.unique(minute)
    means = np.array([values[minute == m, 1].mean() for m in found])
    gaps = np.flatnonzero(np.diff(found) > 2) + 1
    return np.insert(found + 0.5, gaps, np.nan), np.insert(means, gaps, np.nan)


def figures_g(facts: Facts) -> list[Shown]:
    """The forecast as it grew, with its band and the planned-exactly curve: one for each rule."""
    choices = facts.plan.forecasts
    return [
        _figure_g(facts, choice, f"G{n}" if len(choices) > 1 else "G")
        for n, choice in enumerate(choices, 1)
    ]


def _figure_g(facts: Facts, choice: RuleChoice, name: str) -> Shown:
    rule = label(facts.plan, choice.rule, choice.parameter_set)
    keys = []
    with drawing(2.9, facts.simulated) as made:
        (axes,) = made.panels(1)
        mine = [
            f
            for f in facts.record.forecasts
            if (f.rule, f.parameter_set, f.pathway)
            == (choice.rule, choice.parameter_set, facts.paired)
        ]
        says = f"Under {rule} nothing was forecast."
        if facts.paired is not None:
            x, y = facts.planned_curve(choice, facts.paired)
            axes.plot(*thin(x, 100 * y), color=INK, lw=1, ls=(0, (3, 2)))
            keys.append(key("┅", INK, "planned exactly"))
        if mine:
            x = np.array([facts.minutes(f.at_ns) for f in mine])
            low, high, y = (
                np.array([100 * getattr(f, which) for f in mine])
                for which in ("low", "high", "change")
            )
            at = np.unique(np.linspace(0, len(x), min(_BAND_BINS, len(x)) + 1).astype(int))[:-1]
            bottom, top = in_bins(low, _BAND_BINS, True), in_bins(high, _BAND_BINS, False)
            axes.fill_between(x[at], bottom, top, color=FIRST, alpha=0.25, lw=0)
            axes.plot(*thin(x, y, _BAND_BINS), color=FIRST)
            keys.append(key("━", FIRST, "from delivered spikes, with its band"))
            says = (
                f"Under {rule} with {choice.parameter_set} the delivered times imply "
                f"{percent(y[-1])} [{low[-1]:+.1f}, {high[-1]:+.1f}] on {facts.paired}"
            )
            planned = facts.summary["forecast_as_planned"].get(rule)
            says += f"; planned exactly {percent(planned['change_pct'])}." if planned else "."
        keys.append(key("■", BAND, "induction"))
        axes.axhline(0, color=RULE, lw=0.8)
        ordinate(axes, "predicted change, %")
        axes.set_xlabel("min since the induction's start")
        _shade_inductions(axes, facts)
        badge = f"for {choice.preparation}" if choice.preparation else "NO PREPARATION NAMED"
        delivered = facts.summary["pairings"]["delivered"]
        beyond = "; EXTRAPOLATED" if extrapolates(choice, delivered) else ""
        title = f"Forecast, not a measurement: {rule}, {choice.parameter_set} ({badge}{beyond})"
        return Shown(name, title, made.svg(f"Figure {name}. {title}. {says}"), tuple(keys), says)
