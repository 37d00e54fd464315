"""The page: one self-contained HTML file, from a record alone."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from html import escape
from importlib import resources
from pathlib import Path

import numpy as np

from rigctl import __version__
from rigctl.errors import InputError
from rigctl.plasticity.forecast import extrapolates
from rigctl.protocol.audit import audit
from rigctl.protocol.load import parse_rig
from rigctl.record.read import Record, open_record
from rigctl.report import words
from rigctl.report.check_text import percent, sensitivity_words
from rigctl.report.facts import Facts
from rigctl.report.figures.courses import figure_e, figure_f, figure_g
from rigctl.report.figures.pairings import figure_b, figure_c, figure_d
from rigctl.report.figures.protocol import figure_a
from rigctl.safety import limits
from rigctl.session.rows import PAIR_FATES

_MOST_LEDGER = 2_000
_MOST_LOG = 300


def write_page(record_path: Path, page: Path) -> None:
    """Draw the page of a record and write it to ``page``, whole or not at all.

    Raises
    ------
    InputError
        The record cannot be read, or nothing can be written there.
    """
    with open_record(record_path) as record:
        text = render(record)
    draft = page.with_name(page.name + ".part")
    try:
        draft.write_text(text, encoding="utf-8")
        draft.replace(page)
    except OSError as error:
        draft.unlink(missing_ok=True)
        raise InputError(f"{page}: the page cannot be written: {error.strerror}.") from None


def render(record: Record) -> str:
    """Return the page as HTML."""
    facts = Facts(record)
    title = facts.plan.title
    css = resources.files("rigctl.data").joinpath("page.css").read_text("utf-8")
    body = "\n".join(
        [
            _head(facts),
            _section("What was asked and what happened", _lines(facts)),
            _section("Ledger", _ledger(facts)),
            _section("Figures", _figures(facts)),
            _section("Forecast: what it rests on", _forecasts(facts)),
            _section("Audit of the plan", _audit(facts)),
            _section("Limits", _limits(facts)),
            _section("Interruptions, alarms, actions", _log(facts)),
            _section("Definitions and clocks", _definitions(facts)),
            _section("Drafted methods paragraph", f"<p>{escape(words.methods(facts))}</p>"),
            _section("Hashes and versions", _hashes(facts)),
        ]
    )
    stamp = "SIMULATED: " if facts.simulated else ""
    simulated = ' class="simulated"' if facts.simulated else ""
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="color-scheme" content="light dark">\n'
        f"<title>{escape(stamp + title)}</title>\n<style>\n{css}</style>\n</head>\n"
        f"<body{simulated}>\n<main>\n{body}\n</main>\n</body>\n</html>\n"
    )


# --- pieces of HTML ---------------------------------------------------------------------------


def _section(title: str, inside: str) -> str:
    return f"<section>\n<h2>{escape(title)}</h2>\n{inside}\n</section>"


def _table(columns: Iterable[str], rows: Iterable[Iterable[object]], caption: str = "") -> str:
    head = "".join(f'<th scope="col">{escape(c)}</th>' for c in columns)
    body = "\n".join(
        "<tr>" + "".join(f"<td>{escape(str(cell))}</td>" for cell in row) + "</tr>" for row in rows
    )
    shown = f"<caption>{escape(caption)}</caption>" if caption else ""
    return (
        f'<div class="wide" tabindex="0"><table>{shown}<thead><tr>{head}</tr></thead>\n'
        f"<tbody>\n{body}\n</tbody></table></div>"
    )


def _ms(ns: int | None) -> str:
    return "" if ns is None else f"{ns / 1e6:+.3f}"


# --- sections ---------------------------------------------------------------------------------


def _head(facts: Facts) -> str:
    header = facts.record.header
    stamp = ""
    if facts.simulated:
        stamp = (
            '<p class="stamp" role="note"><strong>SIMULATED</strong> '
            f"{escape(words.SIMULATED_NOTE)}</p>"
        )
    ids = " · ".join(
        f"{key} {header[key]}" for key in ("cell", "slice", "animal") if header.get(key)
    )
    preparation = facts.plan.preparation or "no preparation named"
    parts = [preparation, f"started {header.get('started_utc', '')}", ids, header.get("note", "")]
    return (
        f"<header>{stamp}<h1>{escape(facts.plan.title)}</h1>"
        f"<p class=quiet>{escape(' · '.join(p for p in parts if p))}</p></header>"
    )


def _lines(facts: Facts) -> str:
    return (
        "<ol class=lines>"
        + "".join(f"<li>{escape(line)}</li>" for line in words.five_lines(facts))
        + "</ol>"
    )


def _ledger(facts: Facts) -> str:
    counts = facts.summary["pairings"]
    table = _table(
        ["planned", "delivered", *[f.replace("_", " ") for f in PAIR_FATES], "replacements"],
        [[counts[k] for k in ("planned", "delivered", *PAIR_FATES, "replacements")]],
    )
    times = {s.id: s.at_ns for s in facts.record.spikes}
    pairs = facts.record.spike_pairs
    rows = [
        [
            p.pairing,
            p.k,
            "" if p.pre_spike is None else f"{facts.minutes(times[p.pre_spike]):.4f}",
            _ms(p.target_dt_ns),
            _ms(p.delivered_dt_ns),
            "" if p.delivered_dt_ns is None else _ms(p.delivered_dt_ns - p.target_dt_ns),
            p.fate.replace("_", " "),
        ]
        for p in pairs[:_MOST_LEDGER]
    ]
    if not rows:
        return table
    more = ""
    if len(pairs) > _MOST_LEDGER:
        more = (
            f"<p class=quiet>{len(pairs) - _MOST_LEDGER} more rows are in the record, "
            "table spike_pair.</p>"
        )
    whole = _table(
        [
            "pairing",
            "k",
            "pre event, min",
            "target Δt, ms",
            "delivered Δt, ms",
            "error, ms",
            "fate",
        ],
        rows,
    )
    return f"{table}<details><summary>Every spike pair</summary>{whole}{more}</details>"


def _figures(facts: Facts) -> str:
    draw: list[Callable[[], tuple[str, str]]] = [
        lambda: figure_a(facts.plan, facts.simulated),
        lambda: figure_b(facts),
        lambda: figure_c(facts),
        lambda: figure_d(facts),
        lambda: figure_e(facts),
        lambda: figure_f(facts),
        lambda: figure_g(facts),
    ]
    return "\n".join(
        f'<figure><div class="wide" tabindex="0">{svg}</div>'
        f"<figcaption>{escape(name)}. {escape(text)}.</figcaption></figure>"
        for name, (svg, text) in zip("ABCDEFG", (made() for made in draw), strict=True)
    )


def _forecasts(facts: Facts) -> str:
    pairings = facts.summary["pairings"]["delivered"]
    rows = [
        [
            choice.rule,
            choice.parameter_set,
            choice.preparation or "NO PREPARATION NAMED",
            ", ".join(
                f"{k} {v:.6g}" if isinstance(v, float) else f"{k} {v}"
                for k, v in sorted(choice.parameters.items())
                if v is not None
            ),
            choice.source,
            extrapolates(choice, pairings) or "",
        ]
        for choice in facts.plan.forecasts
    ]
    table = _table(
        ["rule", "set", "applies to", "parameters", "source and conversion", "extrapolation"], rows
    )
    return (
        f"<p>{escape(words.BAND_NOTE)} A forecast is of the settled value; it is not a "
        "measurement, justifies no exclusion, and does not travel between preparations.</p>" + table
    )


def _audit(facts: Facts) -> str:
    rig = parse_rig(facts.record.header["rig_text"], facts.record.header["rig_file"])
    found = audit(facts.plan, rig)
    parts = [
        _table(
            ["phase", "gate", "from, min", "to, min", "pairings", "tests"],
            [
                [
                    s.name,
                    s.gate,
                    f"{s.start_ns / 6e10:.2f}",
                    f"{s.end_ns / 6e10:.2f}",
                    s.pairings,
                    s.tests,
                ]
                for s in found.segments
            ],
            "Planned phases",
        ),
        _table(
            ["Δt, ms", "how many", "what", "phase"],
            [[f"{dt:+g}", n, "intended", ""] for dt, n in found.intended_dt_ms[:24]]
            + [
                [f"{u.dt_ms:+g}", u.count, f"unintended: {u.what}", u.phase]
                for u in found.unintended[:24]
            ],
            f"Pairs at the synapse within {found.reach_ms:g} ms; "
            f"{found.unintended_total} unintended",
        ),
        _table(
            [
                "rule",
                "set",
                "pathway",
                "planned exactly",
                "intended pairs alone",
                "tests add",
                "moved by a tenth",
            ],
            [
                [
                    f.rule,
                    f.parameter_set,
                    f.pathway,
                    percent(f.change),
                    percent(f.intended_only),
                    percent(f.change - f.without_tests),
                    sensitivity_words(f),
                ]
                for f in found.forecasts
            ],
            "Forecasts of the plan",
        ),
    ]
    if found.not_stated:
        items = "".join(f"<li>{escape(what)}</li>" for what in found.not_stated)
        parts.append(f"<p>Not stated:</p><ul>{items}</ul>")
    return "".join(parts)


def _limits(facts: Facts) -> str:
    rig = parse_rig(facts.record.header["rig_text"], facts.record.header["rig_file"])
    rows = [
        [
            {True: "ok", False: "OVER", None: "not stated"}[v.ok],
            v.line,
            v.name,
            "" if v.value is None else f"{v.value:.4g} {v.unit}",
            "" if v.limit is None else f"{v.limit:.4g} {v.unit}",
            v.formula + (f" ({v.note})" if v.note else ""),
            v.source,
        ]
        for v in limits.verdicts(facts.plan, rig)
    ]
    table = _table(["", "line", "check", "value", "limit", "formula", "source"], rows)
    note = (
        f"<p>{escape(limits.PASSING_IS_NO_PERMISSION)} Amplitudes are declared: the box switches "
        "digital lines and cannot read a dial.</p>"
    )
    return f"<details><summary>{len(rows)} checks</summary>{table}</details>{note}"


def _log(facts: Facts) -> str:
    rows = []
    for event in facts.record.events:
        if event.kind in ("header", "connected", "armed"):
            continue
        minute = f"{facts.minutes(event.at_ns):+.3f}" if event.at_ns else ""
        body = event.body if len(event.body) < 300 else event.body[:297] + "…"
        rows.append([minute, event.kind.replace("_", " "), body])
    shown = rows[:_MOST_LOG]
    table = _table(["min since induction", "event", "what"], shown)
    alarms = facts.summary["alarms"]
    items = "".join(f"<li>{escape(a)}</li>" for a in alarms)
    told = f"<ul class=alarms>{items}</ul>" if alarms else "<p>No alarm.</p>"
    more = f" (first {_MOST_LOG} of {len(rows)})" if len(rows) > _MOST_LOG else ""
    return f"{told}<details><summary>{len(rows)} events{more}</summary>{table}</details>"


def _definitions(facts: Facts) -> str:
    plan = facts.plan
    lines = _table(
        ["line", "drives", "pathway", "reference event", "latency, ms", "SD, ms", "n"],
        [
            [
                line.name,
                line.drives,
                line.pathway or "",
                words.event_name(line.reference),
                f"{line.latency_ns / 1e6:.3f}",
                f"{line.latency_sd_ns / 1e6:.3f}",
                line.latency_n,
            ]
            for line in plan.lines
        ],
        "Latencies used, from trigger to reference event",
    )
    inputs = _table(
        ["input", "detects", "what the time is", "edge → event, ms"],
        [[i.name, i.detects, i.reference, f"{i.offset_ns / 1e6:+.3f}"] for i in plan.inputs],
        "Detectors",
    )
    sync = facts.record.sync
    clock = "No clock exchange."
    if sync:
        bounds = sorted(s.bound_ns for s in sync)
        clock = (
            f"{len(sync)} clock exchanges; median bound ± {np.median(bounds) / 1000:.0f} µs; last "
            f"skew {sync[-1].skew_ppm:+.2f} ppm (host over box)."
        )
    return (
        f"<p>Δt = t(post) − t(pre), from {escape(words.event_name(plan.pre_reference))} to "
        f"{escape(words.event_name(plan.post_reference))}; positive: pre leads. On target: within "
        f"± {plan.on_target_within_ns / 1e6:g} ms. Response window: "
        f"{plan.response_window_ns / 1e6:g} ms from the post trigger.</p>"
        f"<p>{escape(clock)}</p>{lines}{inputs}"
    )


def _hashes(facts: Facts) -> str:
    header, record = facts.record.header, facts.record
    rows = [
        ["plan hash", header["plan_hash"]],
        ["chain tip", record.chain_tip],
        ["file SHA-256", record.file_hash or "none: the record is open"],
        ["record", f"{record.path.name}, version {header['record_version']}"],
        ["closed", "yes" if record.closed else "NO: the session was interrupted"],
        ["program", f"rigctl {header.get('rigctl_version')}, page by {__version__}"],
        ["python", header.get("python_version", "")],
        ["seeds", f"plan {header.get('plan_seed')}, world {header.get('world_seed') or 'none'}"],
        ["faults injected", header.get("faults") or "none"],
        ["backend", f"{header.get('backend')}, timed by {header.get('timed_by')}"],
        ["protocol, rig", f"{header['protocol_file']}, {header['rig_file']}"],
    ]
    rows += [[k.removeprefix("about."), v] for k, v in header.items() if k.startswith("about.")]
    return _table(["", ""], rows)
