"""One check's outcome, and the few ways to come to one."""

from __future__ import annotations

import math

from msgspec import Struct

from rigctl.protocol.rig import Limits

PRACTICE = "common practice, no source"
RIG = "this rig's own limit"
NO_LIMIT = "no limit known here"
USUAL = Limits()


class Verdict(Struct, frozen=True):
    """One check of one line.

    ``ok`` is None where nothing can be said because something is not stated, and ``note`` says
    what is missing; that is never a pass. A note that begins "for information" marks what has
    nothing to be held against here.
    """

    name: str
    line: str
    value: float | None
    limit: float | None
    unit: str
    ok: bool | None
    formula: str
    source: str
    note: str = ""


def shown(value: float, unit: str) -> str:
    """Return a number with its unit, without exponent where a person would write none."""
    number = f"{value:.4g}" if abs(value) < 1e4 else f"{value:,.0f}"
    return f"{number} {unit}".rstrip()


def source_of(limit: float, usual: float, source: str = PRACTICE, *, is_least: bool = False) -> str:
    """Return where a limit comes from: the usual limit's source holds for the usual limit only."""
    if limit == usual:
        return source
    word = "looser" if (limit > usual) is not is_least else "tighter"
    return f"{RIG}, {word} than {usual:,g} ({source})"


def at_most(
    name: str, line: str, value: float, limit: float, unit: str, formula: str, source: str,
    note: str = "",
) -> Verdict:  # fmt: skip
    """Return the verdict on a value that may reach its limit."""
    # Equal to the limit is allowed; a hair over by rounding is not refused.
    ok = value <= limit or math.isclose(value, limit, rel_tol=1e-9)
    return Verdict(name, line, float(value), float(limit), unit, ok, formula, source, note)


def at_least(
    name: str, line: str, value: float, limit: float, unit: str, formula: str, source: str
) -> Verdict:
    """Return the verdict on a value that must reach its limit."""
    ok = value >= limit or math.isclose(value, limit, rel_tol=1e-9)
    return Verdict(name, line, float(value), float(limit), unit, ok, formula, source)


def unstated(name: str, line: str, unit: str, formula: str, source: str, note: str) -> Verdict:
    """Return the verdict where something needed is not stated."""
    return Verdict(name, line, None, None, unit, None, formula, source, note)
