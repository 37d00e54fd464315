"""Pieces of HTML. Everything that comes from a record or a file passes through here, escaped."""

from __future__ import annotations

from collections.abc import Iterable
from html import escape as escape_markup

from rigctl.report.figures.style import Shown


def escape(text: str) -> str:
    """Return text made safe for HTML; a number and its % stay on one line."""
    return escape_markup(text).replace(" %", "\u00a0%")


def section(title: str, inside: str) -> str:
    """Return a section with its heading."""
    return f"<section>\n<h2>{escape(title)}</h2>\n{inside}\n</section>"


def paragraph(text: str, quiet: bool = False) -> str:
    """Return a paragraph."""
    name = ' class="quiet"' if quiet else ""
    return f"<p{name}>{escape(text)}</p>"


def bullets(items: Iterable[str], name: str = "") -> str:
    """Return a list."""
    inside = "".join(f"<li>{escape(item)}</li>" for item in items)
    return f'<ul class="{name}">{inside}</ul>' if name else f"<ul>{inside}</ul>"


def table(
    columns: Iterable[str],
    rows: Iterable[Iterable[object]],
    caption: str = "",
    wordy: Iterable[int] = (),
) -> str:
    """Return a table in a box of its own that scrolls when the page is too narrow for it.

    Parameters
    ----------
    columns : iterable of str
        Empty headings alone leave the heading row out; the first cell then heads its row.
    rows : iterable of iterable
    caption : str
    wordy : iterable of int
        Columns, from 0, that hold sentences and so may wrap.
    """
    names, may_wrap = list(columns), set(wordy)
    head = ""
    if any(names):
        cells = "".join(f'<th scope="col">{escape(name)}</th>' for name in names)
        head = f"<thead><tr>{cells}</tr></thead>\n"
    lines = []
    for row in rows:
        cells = ""
        for n, cell in enumerate(row):
            text = escape(str(cell))
            if n == 0 and not head:
                cells += f'<th scope="row">{text}</th>'
            else:
                cells += f'<td class="wordy">{text}</td>' if n in may_wrap else f"<td>{text}</td>"
        lines.append(f"<tr>{cells}</tr>")
    shown = f"<caption>{escape(caption)}</caption>" if caption else ""
    label = escape(caption or ", ".join(n for n in names if n) or "table")
    return (
        f'<div class="wide" role="region" aria-label="{label}" tabindex="0">'
        f"<table>{shown}{head}<tbody>\n" + "\n".join(lines) + "\n</tbody></table></div>"
    )


def folded(summary: str, inside: str, in_print: bool = True) -> str:
    """Return something that opens on a click, and in print where it should be read there."""
    name = ' class="in-print"' if in_print else ""
    return f"<details{name}><summary>{escape(summary)}</summary>{inside}</details>"


def figure(shown: Shown) -> str:
    """Return a figure: title, drawing, key, and the sentence that says it."""
    key = "".join(
        f'<li><span style="color: var(--{k.colour})" aria-hidden="true">{escape(k.glyph)}</span> '
        f"{escape(k.means)}</li>"
        for k in shown.key
    )
    return (
        f'<figure id="figure-{shown.name.lower()}"><h3><span class="letter">{shown.name}</span> '
        f'{escape(shown.title)}</h3>\n{shown.svg}\n<ul class="key">{key}</ul>\n'
        f"<figcaption>{escape(shown.says)}</figcaption></figure>"
    )
