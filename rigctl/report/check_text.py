"""What ``pairctl check`` prints: timeline to scale, counts, audit, limits, the plan's hash."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import msgspec
from rich.console import Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from rigctl.protocol.audit import Audit, ForecastAudit
from rigctl.protocol.plan import Plan
from rigctl.report.check_drawing import OnePairing, Portable, Timeline
from rigctl.safety.limits import PASSING_IS_NO_PERMISSION, Verdict
from rigctl.safety.verdict import shown

if TYPE_CHECKING:
    from rigctl.execute import Prepared

_MOST_ROWS = 8
_MOST_STRETCHES = 12
# So many columns of the washout budget stand in one row.
_MINUTES_A_ROW = 20


def render(plan: Plan, found: Audit, verdicts: list[Verdict]) -> RenderableType:
    """Return everything that ``check`` says, for a rich console."""
    parts: list[RenderableType] = [
        Text(plan.title, style="bold"),
        "",
        Timeline(plan),
        "",
        OnePairing(plan),
        "",
        _phases(found),
        "",
        _counts(plan, found),
        "",
        _pairs(found),
        "",
        _forecasts(found),
        *_washout(plan, found),
        "",
        _limits(verdicts),
        Text(PASSING_IS_NO_PERMISSION, style="dim"),
        "",
    ]
    if found.not_stated:
        parts += [_not_stated(found), ""]
    return Portable(Group(*parts, Text(f"plan hash  {plan.hash()}")))


def _table(title: str, *columns: str) -> Table:
    table = Table(title=title, title_justify="left", box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for column in columns:
        table.add_column(column, overflow="fold")
    return table


def _phases(found: Audit) -> Table:
    table = _table("Phases (as if every gate passed at once)", "phase", "gate", "from", "to",
                   "pairings", "tests")  # fmt: skip
    for s in found.segments:
        table.add_row(
            s.name, s.gate, f"{s.start_ns / 6e10:.2f} min", f"{s.end_ns / 6e10:.2f} min",
            str(s.pairings), str(s.tests),
        )  # fmt: skip
        inside = [x for x in found.stretches if x.phase == s.name] if s.pairings else []
        # One block alone is the phase over again.
        for x in inside[:_MOST_STRETCHES] if len(inside) > 1 else []:
            dt = "" if x.dt_ms is None else f" at {x.dt_ms:+g} ms"
            count = ("", str(x.count)) if x.what == "tests" else (str(x.count), "")
            table.add_row(
                f"  {x.what}, {x.pathway}{dt}", "", f"{x.start_ns / 6e10:.2f} min",
                f"{x.end_ns / 6e10:.2f} min", *count,
            )  # fmt: skip
        if len(inside) > _MOST_STRETCHES:
            table.add_row(f"  … {len(inside) - _MOST_STRETCHES} more", "", "", "", "", "")
        if s.unpaired:
            table.add_row(f"  {s.unpaired} pre events outside pairings", "", "", "", "", "")
    table.add_row("finished after", "", "", f"{found.duration_ns / 6e10:.2f} min", "", "")
    return table


def _counts(plan: Plan, found: Audit) -> Table:
    phases = list(dict.fromkeys(c.phase for c in found.counts))
    ruled = {(p.name, p.rule.line) for p in plan.phases if p.rule is not None}
    table = _table("Pulses", "line", "pathway", *phases, "in all")
    for line in sorted({c.line for c in found.counts}):
        mine = {c.phase: c for c in found.counts if c.line == line}
        pathway = next(iter(mine.values())).pathway or ""
        numbers = [mine[p].pulses if p in mine else 0 for p in phases]
        # A box rule gives as many pulses as there are spikes to start them, up to its count.
        most = [(p, line) in ruled for p in phases]
        cells = [f"{'up to ' if limit else ''}{n}" for limit, n in zip(most, numbers, strict=True)]
        table.add_row(line, pathway, *cells, f"{'up to ' if any(most) else ''}{sum(numbers)}")
    return table


def _pairs(found: Audit) -> Table:
    table = _table("Pairs at the synapse", "Δt", "how many", "what")
    intended = found.intended_dt_ms
    for dt_ms, count in intended[:_MOST_ROWS]:
        table.add_row(f"{dt_ms:+g} ms", str(count), "intended")
    if len(intended) > _MOST_ROWS:
        rest = sum(n for _, n in intended[_MOST_ROWS:])
        table.add_row(f"to {intended[-1][0]:+g} ms", str(rest), "intended, other Δt")
    if not found.unintended:
        table.add_row("", "0", f"unintended within {found.reach_ms:g} ms")
    for pair in found.unintended[:_MOST_ROWS]:
        table.add_row(
            f"{pair.dt_ms:+g} ms",
            str(pair.count),
            f"UNINTENDED: {pair.what}, {pair.phase}",
        )
    shown = sum(p.count for p in found.unintended[:_MOST_ROWS])
    if found.unintended_total > shown:
        table.add_row("…", str(found.unintended_total - shown), "UNINTENDED: other")
    return table


def percent(value: float) -> str:
    """Return a relative change in %, signed."""
    # Adding zero turns the minus zero that rounding leaves into plain zero.
    return f"{round(100 * value, 1) + 0.0:+.1f} %"


def _forecasts(found: Audit) -> Group:
    """One paragraph for each paired pathway; the others only where they change at all."""
    lines: list[RenderableType] = ["Forecast if delivered exactly"]
    for f in found.forecasts:
        if f.sensitivity is None and abs(f.change) < 5e-4:
            continue
        badge = f.preparation or "NO PREPARATION NAMED"
        lines.append(
            Text.assemble(
                (f"{f.pathway}  {percent(f.change)}", "bold"),
                f"  under {f.rule}, {f.parameter_set} ({badge})",
            )
        )
        lines.append(
            _indented(
                f"intended pairs alone {percent(f.intended_only)}, other pairs add "
                f"{percent(f.change - f.intended_only)}, test stimuli "
                f"{percent(f.change - f.without_tests)}"
            )
        )
        if f.sensitivity is not None:
            lines.append(_indented(f"moved by a tenth: {sensitivity_words(f)}"))
        if f.extrapolation:
            lines.append(_indented(f"EXTRAPOLATION: {f.extrapolation}"))
    if len(lines) == 1 and not found.notes:
        lines.append(_indented("none: no pairing, or nothing within the rules' reach"))
    lines += [_indented(note) for note in found.notes]
    return Group(*lines)


def _indented(text: str) -> Padding:
    return Padding(Text(text), (0, 0, 0, 4))


def sensitivity_words(f: ForecastAudit) -> str:
    """Return what it takes to move a forecast by a tenth, in words."""
    s = f.sensitivity
    if s is None:
        return ""

    def ms(value: float | None) -> str:
        return "more than 20 ms" if value is None else f"{value:.2f} ms"

    miss = "more than 50 %" if s.miss_pct is None else f"{s.miss_pct:.1f} %"
    words = (
        f"spikes later by {ms(s.constant_later_ms)}, earlier by {ms(s.constant_earlier_ms)}; "
        f"jitter SD {ms(s.jitter_sd_ms)}; misses {miss}"
    )
    return words if s.cut_to is None else f"{words} (from the first {s.cut_to} spikes)"


def _washout(plan: Plan, found: Audit) -> list[RenderableType]:
    """The budget from break-in on, a column a minute."""
    if not found.washout:
        return []
    clock = plan.washout
    start_by, end_by = clock.get("start_by_ns"), clock.get("end_by_ns")
    allowed = " and ".join(
        f"{word} by minute {limit / 6e10:g}"
        for word, limit in (("start", start_by), ("end", end_by))
        if limit is not None
    )
    letters = _letters([phase.name for phase in plan.phases])
    inductions = {phase.name for phase in plan.phases if phase.kind == "induction"}
    cells = []
    for minute in found.washout:
        names = minute.what.split(" → ")
        name = next((n for n in names if n in inductions), names[0])
        letter = letters.get(name, ".")
        # Over is told from late by a sign, not by colour.
        cells.append({"late": letter.upper(), "over": "!"}.get(minute.flag, letter))
    rows: list[RenderableType] = []
    for n in range(0, len(cells), _MINUTES_A_ROW):
        part = slice(n, n + _MINUTES_A_ROW)
        rows.append(Text("minute " + "".join(f"{m.minute:>3}" for m in found.washout[part])))
        rows.append(Text("       " + "".join(f"{c:>3}" for c in cells[part])))
    drawn = {c.lower() for c in cells}
    keys = [f"{letter} {name}" for name, letter in letters.items() if letter in drawn]
    flags = {m.flag for m in found.washout}
    warn_at = clock.get("warn_at_ns")
    if "late" in flags and warn_at is not None:
        keys.append(f"CAPITAL: late, past minute {warn_at / 6e10:g}")
    if "over" in flags:
        keys.append("!: past the end")
    return [
        "",
        Text(f"Washout clock: an induction must {allowed} after break-in"),
        *rows,
        Text(f"       . before the plan, {', '.join(keys)}"),
    ]


def _letters(names: list[str]) -> dict[str, str]:
    """Return a small letter or a digit for each phase, its own first letter where that is free."""
    free = "abcdefghijklmnopqrstuvwxyz0123456789"
    letters: dict[str, str] = {}
    for name in names:
        wanted = [*name.lower(), *free]
        letters[name] = next((c for c in wanted if c in free and c not in letters.values()), "*")
    return letters


def _limits(verdicts: list[Verdict]) -> Group:
    """A line for each check, over and open ones first; note, formula and source stand below."""
    numbers: dict[str, int] = {}
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), show_header=True)
    for column in ("", "line", "check", "value", "limit", "note"):
        table.add_column(column, overflow="fold", no_wrap=column not in ("", "note"))
    for v in sorted(verdicts, key=lambda v: {False: 0, None: 1, True: 2}[v.ok]):
        text = "; ".join(part for part in (v.note, v.formula, v.source) if part)
        number = numbers.setdefault(text, len(numbers) + 1)
        # A limit of spacing is a least one; every other is a most.
        sign = "" if v.limit is None else "≥ " if v.name == "spacing" else "≤ "
        table.add_row(
            verdict_mark(v), v.line, v.name,
            "" if v.value is None else shown(v.value, v.unit),
            "" if v.limit is None else sign + shown(v.limit, v.unit),
            Text(f"[{number}]"),
        )  # fmt: skip
    counts = [sum(1 for v in verdicts if v.ok is ok) for ok in (False, None)]
    head = f"Limits: {len(verdicts)} checks, {counts[0]} over, {counts[1]} not stated"
    return Group(head, table, _hanging({f"[{n}]": text for text, n in numbers.items()}))


def _hanging(items: dict[str, str]) -> Table:
    """Return items whose second lines stand under their first."""
    table = Table.grid(padding=(0, 1, 0, 0))
    for mark, text in items.items():
        table.add_row(Text(f"  {mark}"), Text(text))
    return table


def verdict_mark(verdict: Verdict) -> str:
    """Return how a check went, in a word."""
    if verdict.ok and verdict.note.startswith("for information"):
        return "info"
    return {True: "ok", False: "OVER", None: "not stated"}[verdict.ok]


def _not_stated(found: Audit) -> Group:
    table = Table.grid(padding=(0, 1, 0, 0))
    for what in found.not_stated:
        table.add_row("  -", Text(what))
    return Group("Not stated:", table)


def as_json(plan: Plan, found: Audit, verdicts: list[Verdict]) -> dict[str, Any]:
    """Return the same as one JSON object."""
    return {
        "title": plan.title,
        "plan_hash": plan.hash(),
        "preparation": plan.preparation,
        "audit": msgspec.to_builtins(found),
        "limits": msgspec.to_builtins(verdicts),
        "passing_is_no_permission": PASSING_IS_NO_PERMISSION,
    }


def render_arms(arms: list[Prepared]) -> RenderableType:
    """Return a line for each arm of an across-cells protocol."""
    table = _table("Arms (what stands above is arm 1; see --arm)", "arm", "Δt", "plan hash")
    for arm in arms:
        data = arm_json(arm)
        table.add_row(str(data["arm"]), f"{data['dt_ms']:+g} ms", data["plan_hash"][:16] + "…")
    return Portable(Group("", table))


def arm_json(arm: Prepared) -> dict[str, Any]:
    """Return an arm's number, Δt and plan hash."""
    across = arm.protocol.across_cells
    assert across is not None
    assert arm.arm is not None
    return {"arm": arm.arm, "dt_ms": across.dt_ms[arm.arm - 1], "plan_hash": arm.plan.hash()}
