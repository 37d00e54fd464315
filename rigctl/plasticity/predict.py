"""A rule on pre/post times recorded elsewhere: the pure part of ``pairctl predict``."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from typing import Any

from msgspec import Struct, to_builtins

from rigctl.errors import InputError
from rigctl.plasticity import rules
from rigctl.plasticity.forecast import extrapolates
from rigctl.plasticity.sets import resolve
from rigctl.protocol.schema import Forecast

_MOST_SHOWN = 12
_WORDS = ("nearest", "weight")


class Prediction(Struct, frozen=True):
    """What a rule makes of a list of spikes; ``change`` is relative (0.1 is +10 %)."""

    rule: str
    parameter_set: str
    preparation: str | None
    source: str
    pre: int
    post: int
    change: float
    extrapolation: str | None
    course: list[tuple[float, str, float]]


def predict(
    text: str,
    where: str,
    *,
    rule: str,
    set_name: str | None = None,
    parameters: Sequence[str] = (),
) -> Prediction:
    """Run a rule on the spikes of a CSV file.

    Parameters
    ----------
    text : str
        CSV with a header row: ``at_s`` or ``at_ms``, and ``side`` (``pre`` or ``post``); other
        columns are ignored. Rows in any order.
    where : str
        The file's name, for sentences.
    rule, set_name
        As in a protocol's ``[[forecast]]``.
    parameters : sequence of str
        ``KEY=VALUE`` each, over those of the set.

    Raises
    ------
    InputError
        A row, a rule or a parameter that cannot be used.
    """
    spikes = sorted(_spikes(text, where))
    choice = resolve(
        Forecast(rule=rule, set=set_name, **_parameters(parameters)), None, "predict", "--rule"
    )
    made = rules.rule(choice.rule, **choice.parameters)
    pre = sum(1 for _, side in spikes if side == "pre")
    course = []
    for at_s, side in spikes:
        (made.pre if side == "pre" else made.post)(at_s)
        course.append((at_s, side, made.change))
    return Prediction(
        choice.rule,
        choice.parameter_set,
        choice.preparation,
        choice.source,
        pre,
        len(spikes) - pre,
        made.change,
        # Nobody said which spikes make a pairing: there are at least as many as the rarer side has.
        extrapolates(choice, min(pre, len(spikes) - pre)),
        course,
    )


def _parameters(given: Sequence[str]) -> dict[str, Any]:
    found: dict[str, Any] = {}
    known = [f for f in Forecast.__struct_fields__ if f not in ("rule", "set")]
    for item in given:
        key, equals, value = item.partition("=")
        if not equals or key not in known:
            raise InputError(f"--param {item}: KEY=VALUE is needed, KEY one of {', '.join(known)}.")
        if key in _WORDS:
            found[key] = value
            continue
        try:
            found[key] = float(value)
        except ValueError:
            raise InputError(f"--param {item}: {key} needs a number.") from None
    return found


def _spikes(text: str, where: str) -> list[tuple[float, str]]:
    reader = csv.reader(io.StringIO(text))
    header = [name.strip().lower() for name in next(reader, [])]
    time_column = next((c for c in ("at_s", "at_ms") if c in header), None)
    if time_column is None or "side" not in header:
        raise InputError(
            f"{where}: line 1: the columns at_s (or at_ms) and side are needed; there are "
            f"{', '.join(header) or 'none'}."
        )
    at, side = header.index(time_column), header.index("side")
    scale = 1.0 if time_column == "at_s" else 1e-3
    spikes = []
    for row in reader:
        if not any(cell.strip() for cell in row):
            continue
        line = f"{where}: line {reader.line_num}"
        if len(row) <= max(at, side):
            raise InputError(f"{line}: {len(row)} cells; {len(header)} are needed.")
        try:
            when = float(row[at]) * scale
        except ValueError:
            when = math.nan
        if not math.isfinite(when):
            raise InputError(f"{line}: {time_column} = {row[at]!r}: a finite number is needed.")
        name = row[side].strip().lower()
        if name not in ("pre", "post"):
            raise InputError(f"{line}: side = {row[side]!r}: pre or post is needed.")
        spikes.append((when, name))
    if not spikes:
        raise InputError(f"{where}: no spike below the header.")
    return spikes


def as_json(prediction: Prediction) -> dict[str, Any]:
    """Return a prediction as plain data, with the change in %."""
    data: dict[str, Any] = to_builtins(prediction)
    return {**data, "change_pct": 100 * prediction.change}


def as_text(prediction: Prediction) -> str:
    """Return a prediction as text."""
    badge = prediction.preparation or "NO PREPARATION NAMED"
    lines = [
        f"under {prediction.rule}, {prediction.parameter_set} ({badge}), these times imply "
        f"{100 * prediction.change:+.2f} %",
        f"{prediction.pre} pre and {prediction.post} post spikes; {prediction.source}",
        *([f"EXTRAPOLATION: {prediction.extrapolation}"] if prediction.extrapolation else []),
        "",
        "       at, s  side   change",
    ]
    course = prediction.course
    shown = course if len(course) <= _MOST_SHOWN else course[-_MOST_SHOWN:]
    if len(shown) < len(course):
        lines.append(f"  … {len(course) - len(shown)} spikes before")
    lines += [f"{at_s:12.6f}  {side:<5} {100 * change:+7.2f} %" for at_s, side, change in shown]
    return "\n".join(lines)
