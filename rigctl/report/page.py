"""The page: one self-contained HTML file, from a record alone."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

from rigctl.errors import InputError
from rigctl.protocol.load import parse_rig
from rigctl.record.read import Record, open_record
from rigctl.report import sections, words
from rigctl.report.facts import Facts
from rigctl.report.figures.courses import figure_e, figures_g
from rigctl.report.figures.pairings import figure_b, figure_c, figure_d
from rigctl.report.figures.protocol import figure_a
from rigctl.report.figures.timing import figure_f
from rigctl.report.html import escape, figure, paragraph, section

# On each printed page, in its margin.
_PRINTED_STAMP = (
    '@page { @top-right { content: "SIMULATED"; color: #a3262a; font: bold 11pt sans-serif; } }\n'
)


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
    rig = parse_rig(record.header["rig_text"], record.header["rig_file"])
    title = facts.plan.title
    css = resources.files("rigctl.data").joinpath("page.css").read_text("utf-8")
    if facts.simulated:
        css += _PRINTED_STAMP
    body = "\n".join(
        [
            _head(facts),
            section("What was asked and what happened", _lines(facts)),
            section("Ledger", sections.ledger(facts)),
            section("Figures", _figures(facts)),
            section("What the forecast rests on", sections.forecasts(facts)),
            section("Interruptions, alarms, actions", sections.log(facts)),
            section("Audit of the plan", sections.audit_of_plan(facts, rig)),
            section("Limits", sections.limits_of_plan(facts, rig)),
            section("Definitions, latencies, clocks", sections.definitions(facts)),
            section("Drafted methods paragraph", paragraph(words.methods(facts))),
            section("Hashes and versions", sections.hashes(facts)),
        ]
    )
    stamp = "SIMULATED: " if facts.simulated else ""
    simulated = ' class="simulated"' if facts.simulated else ""
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="color-scheme" content="light dark">\n'
        # No icon, so that a browser does not go and ask for one.
        '<link rel="icon" href="data:,">\n'
        f"<title>{escape(stamp + title)}</title>\n<style>\n{css}</style>\n</head>\n"
        f"<body{simulated}>\n<main>\n{body}\n</main>\n</body>\n</html>\n"
    )


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
    started = f"started {header.get('started_utc', '')}"
    if facts.simulated:
        started += " (the simulated clock's own date)"
    parts = [preparation, started, ids, header.get("note", "")]
    open_note = ""
    if not facts.record.closed:
        open_note = paragraph(
            "The record is open: the session was interrupted before it could be closed. What "
            "follows is what had been written."
        )
    return (
        f"<header>{stamp}<h1>{escape(facts.plan.title)}</h1>"
        f"{paragraph(' · '.join(p for p in parts if p), quiet=True)}{open_note}</header>"
    )


def _lines(facts: Facts) -> str:
    inside = "".join(f"<li>{escape(line)}</li>" for line in words.five_lines(facts))
    return f'<ol class="lines">{inside}</ol>'


def _figures(facts: Facts) -> str:
    drawn = [
        figure_a(facts.plan, facts.simulated),
        figure_b(facts),
        figure_c(facts),
        figure_d(facts),
        figure_e(facts),
        figure_f(facts),
        *figures_g(facts),
    ]
    return "\n".join(figure(one) for one in drawn)
