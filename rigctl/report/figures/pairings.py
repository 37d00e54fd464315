"""Figures B, C and D: what the pairings were like, sweep by sweep and Δt by Δt."""

from __future__ import annotations

import numpy as np

from rigctl.report.facts import Facts, Floats
from rigctl.report.figures.style import (
    BAND,
    FIRST,
    INK,
    QUIET,
    RULE,
    SECOND,
    WARN,
    drawing,
    thin,
)

_MOST_SWEEPS = 40
_BEFORE_MS = 12.0
_AFTER_MS = 45.0
_FATE_MARKS = {
    "off_target": ("D", SECOND, "off target"),
    "doublet": ("P", WARN, "doublet (first spike)"),
}
_MISSING = {"no_post": ("v", "no post spike"), "no_pre": ("^", "no pre event"),
            "unknown": ("x", "unknown")}  # fmt: skip


def figure_b(facts: Facts) -> tuple[str, str]:
    """Overlay pairing sweeps, aligned on the first pre event (or post trigger)."""
    with drawing(3.0, facts.simulated) as made:
        axes = made.figure.subplots()
        shown, peaks = 0, 0
        for zero_ns, span_ms, spikes in _chosen(facts):
            x, y, unit = _cut(facts, zero_ns, span_ms + _AFTER_MS)
            if len(x) == 0:
                continue
            shown += 1
            axes.plot(*thin(x, y), color=FIRST, lw=0.6, alpha=0.35)
            axes.set_ylabel(unit)
            for at_ms in spikes:
                axes.plot(
                    at_ms, np.interp(at_ms, x, y), "v", color=SECOND, ms=4.5, mec="none", zorder=3
                )
                peaks += 1
        axes.axvline(0, color=INK, lw=1, ls=(0, (4, 3)))
        axes.text(
            0, 1.0, " onset: derived from trigger + latency", color=QUIET, fontsize=8.5,
            transform=axes.get_xaxis_transform(), va="bottom",
        )  # fmt: skip
        axes.set_xlabel("ms from the first reference event")
        axes.set_title("B  Pairing sweeps, overlaid", pad=16)
        if not shown:
            axes.text(0.5, 0.5, "no sweep was recorded", transform=axes.transAxes, ha="center")
    text = (
        f"{shown} pairing sweeps overlaid; ▼ marks {peaks} detected peaks; the dashed onset is "
        "derived, not measured"
    )
    return made.svg(f"Figure B: {text}"), text


def _chosen(facts: Facts) -> list[tuple[int, float, list[float]]]:
    """Return (zero ns, span ms, spike times ms) of pairings spread over the session."""
    pre: dict[int, list[int]] = {}
    post: dict[int, list[int]] = {}
    for spike in facts.record.spikes:
        if spike.pairing is not None:
            (pre if spike.side == "pre" else post).setdefault(spike.pairing, []).append(spike.at_ns)
    ids = sorted(set(pre) | set(post))
    if len(ids) > _MOST_SWEEPS:
        ids = [ids[round(i)] for i in np.linspace(0, len(ids) - 1, _MOST_SWEEPS)]
    chosen = []
    for pairing in ids:
        zero_ns = min(pre.get(pairing) or post[pairing])
        ends = pre.get(pairing, []) + post.get(pairing, [])
        span_ms = min((max(ends) - zero_ns) / 1e6, 2_000.0)
        spikes = [(t - zero_ns) / 1e6 for t in post.get(pairing, [])]
        chosen.append((zero_ns, span_ms, spikes))
    return chosen


def _cut(facts: Facts, zero_ns: int, after_ms: float) -> tuple[Floats, Floats, str]:
    """Return a stretch of the sweep around ``zero_ns``: ms, values, unit."""
    for sweep in facts.record.sweeps(zero_ns - 61_000_000_000, zero_ns):
        n = len(sweep.samples) // 2
        if sweep.at_ns + n / sweep.rate_hz * 1e9 < zero_ns:
            continue
        ms = np.arange(n, dtype=np.float64) * (1000 / sweep.rate_hz) - (zero_ns - sweep.at_ns) / 1e6
        inside = (ms >= -_BEFORE_MS) & (ms <= after_ms)
        return ms[inside], sweep.values()[inside], sweep.unit
    return np.array([]), np.array([]), ""


def figure_c(facts: Facts) -> tuple[str, str]:
    """Δt by pairing, with the band that counts as on target."""
    pairs = facts.judged_pairs()
    within_ms = facts.plan.on_target_within_ns / 1e6
    with drawing(3.0, facts.simulated) as made:
        axes = made.figure.subplots()
        targets = sorted({p.target_dt_ns / 1e6 for p in pairs})
        for target in targets if len(targets) <= 6 else []:
            axes.axhspan(target - within_ms, target + within_ms, color=BAND, alpha=0.3, lw=0)
            axes.axhline(target, color=RULE, lw=0.8)
        x = np.array([p.pairing for p in pairs], dtype=float)
        y = np.array(
            [np.nan if p.delivered_dt_ns is None else p.delivered_dt_ns / 1e6 for p in pairs]
        )
        fates = np.array([p.fate for p in pairs])
        on = fates == "on_target"
        axes.plot(*thin(x[on], y[on]), "o", color=FIRST, ms=3.5, mec="none", label="on target")
        for fate, (mark, colour, name) in _FATE_MARKS.items():
            here = (fates == fate) & ~np.isnan(y)
            if here.any():
                axes.plot(
                    *thin(x[here], y[here]), mark, color=colour, ms=5.5, mec="none", label=name
                )
        for fate, (mark, name) in _MISSING.items():
            here = fates == fate
            if here.any():
                axes.plot(
                    x[here], np.full(here.sum(), 0.03), mark, color=WARN, ms=6,
                    transform=axes.get_xaxis_transform(), label=f"{name} (at the foot)",
                )  # fmt: skip
        if any(t < 0 for t in targets) and any(t > 0 for t in targets):
            axes.axhline(0, color=INK, lw=0.8)
        axes.set_xlabel("pairing")
        axes.set_ylabel("delivered Δt, ms")
        axes.set_title("C  Δt, pairing by pairing")
        if pairs:
            axes.legend(loc="upper left", bbox_to_anchor=(0.28, 1.13), ncols=4)
    return made.svg(f"Figure C: {_words_c(facts)}"), _words_c(facts)


def _words_c(facts: Facts) -> str:
    counts, dt = facts.summary["pairings"], facts.summary["dt_ms"]
    text = f"{counts['on_target']} of {counts['planned']} pairings on target"
    if dt["mean"] is not None:
        text += f"; delivered Δt {dt['mean']:+.2f} ms on average, target {dt['target']:+g} ms"
    creep = facts.creep()
    if creep is not None:
        text += f"; Δt crept by {creep.total_ms:+.1f} ms from first to last"
    return text


def figure_d(facts: Facts) -> tuple[str, str]:
    """Histogram of delivered over planned Δt."""
    pairs = [p for p in facts.judged_pairs() if p.delivered_dt_ns is not None]
    planned = np.array([p.target_dt_ns / 1e6 for p in pairs])
    delivered = np.array([(p.delivered_dt_ns or 0) / 1e6 for p in pairs])
    with drawing(2.7, facts.simulated) as made:
        axes = made.figure.subplots()
        if len(pairs):
            both = np.concatenate([planned, delivered])
            low, high = float(both.min()) - 1, float(both.max()) + 1
            bins = np.linspace(low, high, int(min(160, max(24, (high - low) * 4)))).tolist()
            axes.hist(delivered, bins, color=FIRST, alpha=0.55, label="delivered")
            axes.hist(
                planned, bins, histtype="step", color=INK, lw=1.2, ls=(0, (3, 2)), label="planned"
            )
            axes.legend(loc="upper right", bbox_to_anchor=(0.9, 1.1), ncols=2)
        else:
            axes.text(0.5, 0.5, "no Δt was delivered", transform=axes.transAxes, ha="center")
        axes.set_xlabel("Δt, ms")
        axes.set_ylabel("spike pairs")
        axes.set_title("D  Delivered over planned Δt")
    text = f"{len(pairs)} delivered Δt"
    if len(pairs):
        text += (
            f", from {delivered.min():+.2f} to {delivered.max():+.2f} ms; planned "
            f"{planned.min():+g}"
            + ("" if np.ptp(planned) == 0 else f" to {planned.max():+g}")
            + " ms"
        )
    return made.svg(f"Figure D: {text}"), text
