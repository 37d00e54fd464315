"""The page's sections but for its figures: ledger, forecast, log, audit, limits, definitions."""

from __future__ import annotations

import statistics

from rigctl import __version__
from rigctl.plasticity.forecast import extrapolates
from rigctl.protocol.audit import Audit, audit
from rigctl.protocol.plan import RuleChoice
from rigctl.protocol.rig import Rig
from rigctl.report import words
from rigctl.report.check_text import sensitivity_words, verdict_mark
from rigctl.report.facts import Facts
from rigctl.report.html import bullets, folded, paragraph, table
from rigctl.report.log import log_rows
from rigctl.report.names import event_name, fate_name, phase_name
from rigctl.safety import limits
from rigctl.session.rows import PAIR_FATES

_MOST_LEDGER = 2_000
_MOST_LOG = 300
_MOST_KINDS = 12
_FATES = {
    "on_target": "both events, Δt within the band",
    "off_target": "both events, Δt outside the band",
    "doublet": "more spikes than planned inside the response window",
    "no_post": "the postsynaptic spike did not come",
    "no_pre": "the presynaptic event did not come",
    "unknown": "nobody knows; the forecast's band holds both cases",
    "not_run": "planned, never presented",
}


def _ms(ns: int | None) -> str:
    return "" if ns is None else f"{ns / 1e6:+.3f}"


def ledger(facts: Facts) -> str:
    """Return counts by fate, and every spike pair."""
    counts = facts.summary["pairings"]
    rows = [(fate_name(f), counts[f], _FATES[f]) for f in PAIR_FATES]
    rows += [
        ("replacements", counts["replacements"], "of those, pairings that make up for another")
    ]
    caption = f"{counts['planned']} pairings planned, {counts['delivered']} delivered"
    return table(("", "", ""), rows, caption, wordy=(2,)) + _pair_ledger(facts)


def _pair_ledger(facts: Facts) -> str:
    pairs = facts.record.spike_pairs
    if not pairs:
        return ""
    times = {s.id: s.at_ns for s in facts.record.spikes}
    rows = [
        (
            p.pairing,
            p.k,
            "" if p.pre_spike is None else f"{facts.minutes(times[p.pre_spike]):+.4f}",
            _ms(p.target_dt_ns),
            _ms(p.delivered_dt_ns),
            "" if p.delivered_dt_ns is None else _ms(p.delivered_dt_ns - p.target_dt_ns),
            fate_name(p.fate),
        )
        for p in pairs[:_MOST_LEDGER]
    ]
    columns = ("pairing", "k", "pre event, min", "target Δt, ms", "delivered Δt, ms", "error, ms",
               "fate")  # fmt: skip
    whole = table(columns, rows, "Minutes since the induction's start; k: which spike pair of it")
    if len(pairs) > _MOST_LEDGER:
        more = len(pairs) - _MOST_LEDGER
        whole += paragraph(f"{more} more rows are in the record, table spike_pair.", quiet=True)
    return folded(f"Every spike pair ({len(pairs)})", whole)


def forecasts(facts: Facts) -> str:
    """Return what rule, set and source each forecast has, and what it is not."""
    pairings = facts.summary["pairings"]["delivered"]
    tables = [
        table(
            ("", ""),
            [
                ("rule", choice.rule),
                ("set", choice.parameter_set),
                ("from", choice.preparation or "NO PREPARATION NAMED"),
                ("parameters", _parameters(choice)),
                ("source and conversion", choice.source),
                ("extrapolation", extrapolates(choice, pairings) or "none"),
            ],
            f"Forecast {n}",
            wordy=(1,),
        )
        for n, choice in enumerate(facts.plan.forecasts, 1)
    ]
    note = (
        f"{words.BAND_NOTE} A forecast is of the settled value under the rule. It is not a "
        "measurement, says nothing of whether the synapse changed, justifies no exclusion, and "
        "does not travel between preparations."
    )
    if facts.simulated:
        note += " The simulated synapse follows another rule than these, on purpose."
    return paragraph(note) + "".join(tables)


def _parameters(choice: RuleChoice) -> str:
    return ", ".join(
        f"{key} {value:.6g}" if isinstance(value, float) else f"{key} {value}"
        for key, value in sorted(choice.parameters.items())
        if value is not None
    )


def log(facts: Facts) -> str:
    """Return alarms, interruptions and actions; and, folded, the whole log."""
    shown = log_rows(facts, interruptions_only=True)
    columns = ("min since induction", "who", "what")
    told = (
        table(columns, shown[:_MOST_LOG], wordy=(2,))
        if shown
        else paragraph("No interruption, no alarm, no action of the operator.")
    )
    if len(shown) > _MOST_LOG:
        told += paragraph(f"{len(shown) - _MOST_LOG} more are in the record, table event.")
    rows = log_rows(facts)
    name = f"The session's whole log ({len(rows)} entries)"
    if len(rows) > _MOST_LOG:
        name = f"The session's log (first {_MOST_LOG} of {len(rows)} entries)"
    return told + folded(name, table(columns, rows[:_MOST_LOG], wordy=(2,)), in_print=False)


def audit_of_plan(facts: Facts, rig: Rig) -> str:
    """Return what the plan would bring about if it were delivered exactly."""
    found = audit(facts.plan, rig)
    parts = [_phases(found), _pulses(found), _pairs(found), _audited_forecasts(found)]
    washout = _washout(facts, found)
    if washout:
        parts.append(washout)
    if found.not_stated:
        parts.append(paragraph("Not stated in either file:") + bullets(found.not_stated))
    return "".join(parts)


def _phases(found: Audit) -> str:
    rows = [
        (
            phase_name(s.name),
            s.gate,
            f"{s.start_ns / 6e10:.2f}",
            f"{s.end_ns / 6e10:.2f}",
            s.pairings,
            s.tests,
        )
        for s in found.segments
    ]
    columns = ("phase", "gate", "from, min", "to, min", "pairings", "test stimuli")
    return table(columns, rows, "Planned phases, as if every gate passed at once")


def _pulses(found: Audit) -> str:
    phases = list(dict.fromkeys(c.phase for c in found.counts))
    rows = []
    for line in sorted({c.line for c in found.counts}):
        mine = {c.phase: c for c in found.counts if c.line == line}
        numbers = [mine[p].pulses if p in mine else 0 for p in phases]
        rows.append((line, next(iter(mine.values())).pathway or "", *numbers, sum(numbers)))
    return table(("line", "pathway", *map(phase_name, phases), "in all"), rows, "Planned pulses")


def _pairs(found: Audit) -> str:
    rows: list[tuple[object, ...]] = [
        (f"{dt:+g}", n, "intended", "") for dt, n in found.intended_dt_ms[:_MOST_KINDS]
    ]
    rows += [
        (f"{u.dt_ms:+g}", u.count, f"unintended: {u.what}", phase_name(u.phase))
        for u in found.unintended[:_MOST_KINDS]
    ]
    rest = max(0, len(found.intended_dt_ms) - _MOST_KINDS)
    rest += max(0, len(found.unintended) - _MOST_KINDS)
    if rest:
        rows.append(("…", "", f"{rest} more kinds", ""))
    caption = (
        f"Pairs at the synapse within the rules' reach of {found.reach_ms:g} ms: "
        f"{found.unintended_total} unintended"
    )
    return table(("Δt, ms", "how many", "what", "phase"), rows, caption)


def _audited_forecasts(found: Audit) -> str:
    rows = [
        (
            f.rule,
            f.parameter_set,
            f.pathway,
            words.percent(100 * f.change),
            words.percent(100 * f.intended_only),
            words.percent(100 * (f.change - f.without_tests)),
        )
        for f in found.forecasts
    ]
    columns = ("rule", "set", "pathway", "planned exactly", "intended pairs alone", "tests add")
    moved = [
        f"{f.rule}, {f.parameter_set}, {f.pathway}: {sensitivity_words(f)}"
        for f in found.forecasts
        if f.sensitivity is not None
    ]
    text = table(columns, rows, "Forecasts of the plan")
    if moved:
        text += paragraph("What would move a forecast by a tenth:") + bullets(moved)
    return text


def _washout(facts: Facts, found: Audit) -> str:
    """Say what the washout clock allowed, and when the induction really was."""
    clock = facts.plan.washout
    start_by, end_by = clock.get("start_by_ns"), clock.get("end_by_ns")
    if start_by is None and end_by is None:
        return ""
    before_ns = clock.get("before_plan_ns") or 0
    allowed = [
        f"{word} by {ns / 6e10:g} min"
        for word, ns in (("start", start_by), ("end", end_by))
        if ns is not None
    ]
    text = f"Washout clock, from break-in: the induction has to {' and '.join(allowed)}."
    if facts.induction is not None and facts.phases:
        zero_ns = facts.phases[0].start_ns - before_ns
        from_min = (facts.induction.start_ns - zero_ns) / 6e10
        to_min = (facts.induction.end_ns - zero_ns) / 6e10
        text += (
            f" It ran from {from_min:.1f} to {to_min:.1f} min, break-in taken as "
            f"{before_ns / 6e10:g} min before the first phase, as the rig file says."
        )
    late = [m for m in found.washout if m.flag]
    if late:
        text += " Planned minutes past a mark: " + ", ".join(
            f"{m.minute} ({phase_name(m.what)}, {m.flag})" for m in late
        )
        text += "."
    return paragraph(text)


def limits_of_plan(facts: Facts, rig: Rig) -> str:
    """Return every verdict with value, limit, formula and source."""
    verdicts = limits.verdicts(facts.plan, rig)
    rows = [
        (
            verdict_mark(v),
            v.line,
            v.name,
            "" if v.value is None else f"{v.value:.4g} {v.unit}",
            "" if v.limit is None else f"{v.limit:.4g} {v.unit}",
            v.formula + (f" ({v.note})" if v.note else ""),
            v.source,
        )
        for v in verdicts
    ]
    columns = ("", "line", "check", "value", "limit", "formula", "source")
    silent = sum(1 for v in verdicts if v.ok is None)
    over = sum(1 for v in verdicts if v.ok is False)
    name = f"{len(rows)} checks: {over} over, {silent} not stated"
    note = (
        f"{limits.PASSING_IS_NO_PERMISSION} Amplitudes are declared: the box switches digital "
        "lines and cannot read a dial."
    )
    return folded(name, table(columns, rows, wordy=(5, 6))) + paragraph(note)


def definitions(facts: Facts) -> str:
    """Return what Δt refers to, the latencies and detectors used, and the clocks."""
    plan = facts.plan
    lines = [
        (
            line.name,
            line.drives,
            line.pathway or "",
            event_name(line.reference),
            f"{line.latency_ns / 1e6:.3f}",
            f"{line.latency_sd_ns / 1e6:.3f}",
            line.latency_n or "not stated",
        )
        for line in plan.lines
        if line.drives != "step"
    ]
    inputs = [
        (i.name, i.detects, event_name(i.reference), f"{i.offset_ns / 1e6:+.3f}")
        for i in plan.inputs
    ]
    text = (
        f"Δt = t(post) − t(pre), from {event_name(plan.pre_reference)} to "
        f"{event_name(plan.post_reference)}; positive: pre leads. On target: within "
        f"± {plan.on_target_within_ns / 1e6:g} ms. Response window: "
        f"{plan.response_window_ns / 1e6:g} ms from the post trigger."
    )
    columns = ("line", "drives", "pathway", "reference event", "latency, ms", "SD, ms", "n")
    return (
        paragraph(text)
        + paragraph(_clocks(facts))
        + table(columns, lines, "Latencies used, from trigger to reference event")
        + table(("input", "detects", "what the time is", "edge → event, ms"), inputs, "Detectors")
    )


def _clocks(facts: Facts) -> str:
    header, sync = facts.record.header, facts.record.sync
    timed = "the box" if header.get("timed_by") == "box" else "the host"
    text = f"Times are the box's clock; pulses are timed by {timed}."
    if not sync:
        return f"{text} No clock exchange."
    bound_us = statistics.median(s.bound_ns for s in sync) / 1000
    trip_us = statistics.median(s.round_trip_ns for s in sync) / 1000
    return (
        f"{text} {len(sync)} exchanges with the host's clock: median bound ± {bound_us:.0f} µs, "
        f"median round trip {trip_us:.0f} µs, last skew {sync[-1].skew_ppm:+.2f} ppm "
        "(host over box)."
    )


def hashes(facts: Facts) -> str:
    """Return what names this record, and what made it."""
    header, record = facts.record.header, facts.record
    hello = record.bodies("connected")
    box = f"{hello[0]['firmware']}, boot {hello[0]['boot']}" if hello else "never answered"
    rows = [
        ("plan hash", header["plan_hash"]),
        ("chain tip", record.chain_tip),
        ("session.sha256", record.file_hash or "none: the record is open"),
        ("record", f"{record.path.name}, version {header['record_version']}"),
        ("closed", "yes" if record.closed else "NO: the session was interrupted"),
        ("program", f"rigctl {header.get('rigctl_version')}, page by {__version__}"),
        ("python", header.get("python_version", "")),
        ("box", box),
        ("seeds", f"plan {header.get('plan_seed')}, world {header.get('world_seed') or 'none'}"),
        ("faults injected", header.get("faults") or "none"),
        ("backend", f"{header.get('backend')}, timed by {header.get('timed_by')}"),
        ("protocol, rig", f"{header['protocol_file']}, {header['rig_file']}"),
    ]
    rows += [(k.removeprefix("about."), v) for k, v in header.items() if k.startswith("about.")]
    return table(("", ""), rows, wordy=(1,))
