"""Figures B, C and D: what the pairings were like, sweep by sweep and Δt by Δt."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes

from rigctl.report.facts import Facts, Floats
from rigctl.report.figures.style import (
    BAND,
    FIRST,
    INK,
    RULE,
    SECOND,
    WARN,
    Key,
    Shown,
    drawing,
    key,
    nothing,
    ordinate,
    thin,
)
from rigctl.report.names import event_name

_MOST_SWEEPS = 40
_AROUND_MS = 10.0
_AFTER_MS = 25.0
_LONGEST_MS = 2_000.0
_FEW_TARGETS = 6
_MARKS = {
    "on_target": ("o", FIRST, "on target"),
    "off_target": ("D", SECOND, "off target"),
    "doublet": ("P", WARN, "doublet (first spike)"),
}
# These have no Δt to be drawn at: they stand at the foot.
_AT_FOOT = {
    "no_post": ("v", "no post spike (at the foot)"),
    "no_pre": ("^", "no pre event (at the foot)"),
    "unknown": ("x", "unknown (at the foot)"),
}


class _Cut(NamedTuple):
    """A pairing on the way into figure B."""

    zero_ns: int
    from_ms: float
    to_ms: float
    peaks_ms: list[float]
    measured: bool


def figure_b(facts: Facts) -> Shown:
    """Overlay pairing sweeps, aligned on the first pre event (or post spike)."""
    with drawing(3.1, facts.simulated) as made:
        (axes,) = made.panels(1)
        shown, peaks, others, measured, name = 0, 0, 0, False, ""
        seen_ns = np.array([s.at_ns for s in facts.record.spikes if s.side == "post"], dtype=int)
        for cut in _chosen(facts):
            x, y, unit = _samples(facts, cut)
            if len(x) == 0:
                continue
            shown += 1
            measured = measured or cut.measured
            axes.plot(*thin(x, y, 500), color=FIRST, lw=0.6, alpha=0.35)
            name = unit
            ends_ns = cut.zero_ns + np.array([x[0], x[-1]]) * 1e6
            first, last = np.searchsorted(seen_ns, ends_ns)
            at = (seen_ns[first:last] - cut.zero_ns) / 1e6
            own = np.isin(at, cut.peaks_ms)
            peaks, others = peaks + int(own.sum()), others + int((~own).sum())
            for which, face in ((own, SECOND), (~own, "none")):
                axes.plot(
                    at[which], np.interp(at[which], x, y), "v", mec=SECOND, mfc=face, ms=5,
                    mew=0.8, zorder=3,
                )  # fmt: skip
        axes.set_xlabel("ms from the first reference event")
        ordinate(axes, name)
        if shown:
            style = "-" if measured else (0, (4, 3))
            axes.axvline(0, color=INK, lw=1.6 if measured else 1, ls=style)
            axes.margins(x=0.01)
        else:
            nothing(axes, "no sweep was recorded")
        pre, post = event_name(facts.plan.pre_reference), event_name(facts.plan.post_reference)
        onset = _onset_words(pre, measured)
        says = (
            f"{shown} of {len(facts.record.pairings)} pairings, spread over the session; {peaks} "
            f"detected events marked ({post})"
            + (f", {others} more that no pairing shown here counts" if others else "")
            + f"; the {onset}."
        )
        title = "Pairing sweeps, overlaid"
        glyph = "┃" if measured else "┆"
        keys = [key("━", FIRST, "sweep"), key("v", SECOND, f"detected {post}")]
        if others:
            keys.append(key("▽", SECOND, f"other detected {post}"))
        keys.append(key(glyph, INK, onset))
        return Shown("B", title, made.svg(f"Figure B. {title}. {says}"), tuple(keys), says)


def _onset_words(pre: str, measured: bool) -> str:
    return f"{pre} is detected" if measured else f"{pre} is derived: trigger + measured latency"


def _chosen(facts: Facts) -> list[_Cut]:
    """Return pairings spread over the session."""
    pre: dict[int, list[int]] = {}
    post: dict[int, list[int]] = {}
    detected = set()
    for spike in facts.record.spikes:
        if spike.pairing is not None:
            (pre if spike.side == "pre" else post).setdefault(spike.pairing, []).append(spike.at_ns)
            if spike.side == "pre" and spike.source != "derived":
                detected.add(spike.pairing)
    ids = sorted(set(pre) | set(post))
    if len(ids) > _MOST_SWEEPS:
        ids = [ids[round(i)] for i in np.linspace(0, len(ids) - 1, _MOST_SWEEPS)]
    chosen = []
    for pairing in ids:
        zero_ns = min(pre.get(pairing) or post[pairing])
        at_ms = [(t - zero_ns) / 1e6 for t in pre.get(pairing, []) + post.get(pairing, [])]
        peaks_ms = [(t - zero_ns) / 1e6 for t in post.get(pairing, [])]
        to_ms = min(max(at_ms) + _AFTER_MS, _LONGEST_MS)
        cut = _Cut(zero_ns, min(at_ms) - _AROUND_MS, to_ms, peaks_ms, pairing in detected)
        chosen.append(cut)
    return chosen


def _samples(facts: Facts, cut: _Cut) -> tuple[Floats, Floats, str]:
    """Return a stretch of the sweep around a pairing: ms, values, unit."""
    sweep = facts.record.sweep_at(cut.zero_ns)
    if sweep is None:
        return np.array([]), np.array([]), ""
    values = sweep.values()
    ms = (
        np.arange(len(values), dtype=np.float64) * (1000 / sweep.rate_hz)
        - (cut.zero_ns - sweep.at_ns) / 1e6
    )
    inside = (ms >= cut.from_ms) & (ms <= cut.to_ms)
    return ms[inside], values[inside], sweep.unit


class _Pairs(NamedTuple):
    """Spike pairs as arrays, shape (n,)."""

    x: Floats
    target_ms: Floats
    delivered_ms: Floats
    fate: npt.NDArray[np.object_]


def _pairs(facts: Facts) -> _Pairs:
    pairs = facts.judged_pairs()
    most = max((p.k for p in pairs), default=1)
    return _Pairs(
        # Several spike pairs of one pairing stand side by side.
        np.array([p.pairing + (p.k - 1) / most * (most > 1) * 0.9 for p in pairs], dtype=float),
        np.array([p.target_dt_ns / 1e6 for p in pairs], dtype=float),
        np.array(
            [np.nan if p.delivered_dt_ns is None else p.delivered_dt_ns / 1e6 for p in pairs],
            dtype=float,
        ),
        np.array([p.fate for p in pairs], dtype=object),
    )


def figure_c(facts: Facts) -> Shown:
    """Δt by pairing, with the band that counts as on target."""
    pairs = _pairs(facts)
    targets = np.unique(pairs.target_ms)
    # Where nearly every pairing has a Δt of its own, its error is what can be read.
    as_error = len(targets) > _FEW_TARGETS
    with drawing(3.1, facts.simulated) as made:
        (axes,) = made.panels(1)
        y = pairs.delivered_ms - (pairs.target_ms if as_error else 0)
        _bands(axes, np.array([0.0]) if as_error else targets, facts.plan.on_target_within_ns / 1e6)
        keys = _marks(axes, pairs, y)
        ordinate(axes, "delivered − target Δt, ms" if as_error else "delivered Δt, ms")
        axes.set_xlabel("pairing")
        if len(y) == 0:
            nothing(axes, "no spike pair came up")
            axes.set_ylim(-1, 1)
        elif not as_error and targets[0] < 0 < targets[-1]:
            axes.axhline(0, color=INK, lw=0.8)
        within = f"on target: within ± {facts.plan.on_target_within_ns / 1e6:g} ms"
        keys.append(key("■", BAND, within))
        says = _words_c(facts)
        title = "Δt, pairing by pairing"
        return Shown("C", title, made.svg(f"Figure C. {title}. {says}"), tuple(keys), says)


def _bands(axes: Axes, centres: Floats, within_ms: float) -> None:
    for centre in centres:
        axes.axhspan(centre - within_ms, centre + within_ms, color=BAND, alpha=0.35, lw=0)
        axes.axhline(centre, color=RULE, lw=0.8)


def _marks(axes: Axes, pairs: _Pairs, y: Floats) -> list[Key]:
    keys = []
    for fate, (mark, colour, name) in _MARKS.items():
        here = (pairs.fate == fate) & ~np.isnan(y)
        if here.any():
            size = 3.5 if fate == "on_target" else 5.5
            axes.plot(*thin(pairs.x[here], y[here]), mark, color=colour, ms=size, mec="none")
            keys.append(key(mark, colour, name))
    for fate, (mark, name) in _AT_FOOT.items():
        here = pairs.fate == fate
        if here.any():
            axes.plot(
                pairs.x[here], np.full(here.sum(), 0.035), mark, color=WARN, ms=6,
                transform=axes.get_xaxis_transform(),
            )  # fmt: skip
            keys.append(key(mark, WARN, name))
    return keys


def _words_c(facts: Facts) -> str:
    counts, dt = facts.summary["pairings"], facts.summary["dt_ms"]
    text = f"{counts['on_target']} of {counts['planned']} pairings on target"
    if dt["mean"] is not None:
        text += f"; delivered Δt {dt['mean']:+.2f} ms on average, target {dt['target']:+g} ms"
    missing = [f"{counts[f]} {f.replace('_', ' ')}" for f in (*_AT_FOOT, "doublet") if counts[f]]
    if missing:
        text += "; " + ", ".join(missing)
    creep = facts.creep()
    if creep is not None:
        text += f"; Δt crept by {creep.total_ms:+.1f} ms from first to last"
    return text + "."


def figure_d(facts: Facts) -> Shown:
    """Histogram of delivered over planned Δt."""
    pairs = [p for p in facts.judged_pairs() if p.delivered_dt_ns is not None]
    planned = np.array([p.target_dt_ns / 1e6 for p in pairs])
    delivered = np.array([(p.delivered_dt_ns or 0) / 1e6 for p in pairs])
    targets = np.unique(planned)
    few = len(targets) <= _FEW_TARGETS
    with drawing(2.8, facts.simulated) as made:
        (axes,) = made.panels(1)
        says = f"{len(pairs)} delivered Δt"
        if len(pairs):
            both = np.concatenate([planned, delivered])
            low, high = float(both.min()) - 1, float(both.max()) + 1
            bins = np.linspace(low, high, int(min(160, max(24, (high - low) * 4)))).tolist()
            axes.hist(delivered, bins, color=FIRST, alpha=0.6)
            if few:
                for target in targets:
                    axes.axvline(target, color=INK, lw=1.4, ls=(0, (4, 3)))
            else:
                axes.hist(planned, bins, histtype="step", color=INK, lw=1.2, ls=(0, (3, 2)))
            error = delivered - planned
            says += (
                f", from {delivered.min():+.2f} to {delivered.max():+.2f} ms; planned "
                f"{planned.min():+g}"
                + ("" if len(targets) == 1 else f" to {planned.max():+g}")
                + f" ms; mean error {error.mean():+.2f} ms"
            )
        else:
            nothing(axes, "no Δt was delivered")
        axes.set_xlabel("Δt, ms")
        ordinate(axes, "spike pairs")
        title = "Delivered over planned Δt"
        keys = (key("■", FIRST, "delivered"), key("┆" if few else "⬚", INK, "planned"))
        return Shown("D", title, made.svg(f"Figure D. {title}. {says}."), keys, f"{says}.")
