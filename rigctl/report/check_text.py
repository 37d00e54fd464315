"""What ``pairctl check`` prints: timeline to scale, counts, audit, limits, the plan's hash."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import msgspec
from rich.console import Console, ConsoleOptions, Group, RenderableType, RenderResult
from rich.table import Table
from rich.text import Text

from rigctl.protocol.audit import Audit, ForecastAudit
from rigctl.protocol.plan import Plan
from rigctl.safety.limits import PASSING_IS_NO_PERMISSION, Verdict

if TYPE_CHECKING:
    from rigctl.execute import Prepared

_MOST_ROWS = 8


class Timeline:
    """The phases to scale, as wide as the terminal: one row for each line that pulses."""

    def __init__(self, plan: Plan) -> None:
        self._plan = plan

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        plain = options.ascii_only or options.encoding.lower() not in ("utf-8", "utf8")
        marks = " .:#" if plain else " ·▪█"
        names = [line.name for line in self._plan.lines]
        margin = max([len(n) for n in names] + [5]) + 2
        width = max(20, options.max_width - margin - 1)
        total_ns = max(1, self._plan.duration_ns)
        yield self._heads(margin, width, total_ns, "|" if plain else "│")
        for name in names:
            bins = [0] * width
            start_ns = 0
            for phase in self._plan.phases:
                for trigger in phase.triggers:
                    if trigger.line == name:
                        at = (start_ns + trigger.at_ns) * width // total_ns
                        bins[min(at, width - 1)] += 1
                start_ns += phase.duration_ns
            most = max(bins)
            cells = "".join(
                marks[0 if n == 0 else 1 if n * 3 <= most else 2 if n * 3 <= 2 * most else 3]
                for n in bins
            )
            yield Text(f"{name:<{margin}}{cells}", no_wrap=True, overflow="crop")
        yield Text(_axis(margin, width, total_ns / 6e10), no_wrap=True, overflow="crop")

    def _heads(self, margin: int, width: int, total_ns: int, bar: str) -> Text:
        cells = [" "] * width
        start_ns = 0
        for phase in self._plan.phases:
            first = start_ns * width // total_ns
            start_ns += phase.duration_ns
            room = max(1, start_ns * width // total_ns - first - 1)
            for n, letter in enumerate((bar + phase.name)[: room + 1]):
                if first + n < width:
                    cells[first + n] = letter
        return Text(" " * margin + "".join(cells), no_wrap=True, overflow="crop")


def _axis(margin: int, width: int, minutes: float) -> str:
    step = next((s for s in (1, 2, 5, 10, 20, 60, 120, 240) if minutes / s <= 12), 480)
    cells = [" "] * (width + 8)
    for minute in range(0, int(minutes) + 1, step):
        at = int(minute / max(minutes, 1e-9) * width)
        for n, letter in enumerate(str(minute)):
            if at + n < len(cells):
                cells[at + n] = letter
    return f"{'min':<{margin}}" + "".join(cells).rstrip()


class OnePairing:
    """One pairing at the synapse, to scale."""

    def __init__(self, plan: Plan) -> None:
        self._plan = plan

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        plain = options.ascii_only or options.encoding.lower() not in ("utf-8", "utf8")
        found = next(((ph, p) for ph in self._plan.phases for p in ph.pairings), None)
        if found is None:
            return
        phase, pairing = found
        lines = {line.name: line for line in self._plan.lines}
        events: dict[str, list[float]] = {"pre": [], "post": []}
        for trigger in phase.triggers:
            line = lines[trigger.line]
            if trigger.pairing == pairing.id and line.drives != "step":
                events[line.drives].append((trigger.at_ns + line.latency_ns) / 1e6)
        times = events["pre"] + events["post"]
        zero, span = min(times), max(max(times) - min(times), 1e-9)
        width = max(20, min(options.max_width - 30, 90))
        mark, rest = ("|", "-") if plain else ("┃", "─")
        yield Text(f"first pairing ({self._plan.pre_reference}, {self._plan.post_reference}), ms:")
        for side, ats in events.items():
            cells = [rest] * width
            for at in ats:
                cells[int((at - zero) / span * (width - 1))] = mark
            shown = ", ".join(f"{at - zero:g}" for at in ats[:6]) + (" …" if len(ats) > 6 else "")
            yield Text(f"  {side:<5}{''.join(cells)}  {shown or 'none'}", no_wrap=True)


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
        _counts(found),
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
    return Group(*parts, Text(f"plan hash  {plan.hash()}"))


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
    table.add_row("finished after", "", "", f"{found.duration_ns / 6e10:.2f} min", "", "")
    return table


def _counts(found: Audit) -> Table:
    phases = list(dict.fromkeys(c.phase for c in found.counts))
    table = _table("Pulses", "line", "pathway", *phases, "in all")
    for line in sorted({c.line for c in found.counts}):
        mine = {c.phase: c for c in found.counts if c.line == line}
        pathway = next(iter(mine.values())).pathway or ""
        numbers = [mine[p].pulses if p in mine else 0 for p in phases]
        table.add_row(line, pathway, *map(str, numbers), str(sum(numbers)))
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
            f"{pair.dt_ms:+g} ms", str(pair.count), f"UNINTENDED: {pair.what}, {pair.phase}"
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
            f"    intended pairs alone {percent(f.intended_only)}, other pairs add "
            f"{percent(f.change - f.intended_only)}, test stimuli "
            f"{percent(f.change - f.without_tests)}"
        )
        if f.sensitivity is not None:
            lines.append(f"    moved by a tenth: {sensitivity_words(f)}")
        if f.extrapolation:
            lines.append(f"    EXTRAPOLATION: {f.extrapolation}")
    if len(lines) == 1:
        lines.append("    none: no pairing, or nothing within the rules' reach")
    return Group(*lines)


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
    legend: dict[str, str] = {}
    cells = []
    for minute in found.washout:
        name = minute.what.split(" → ")[0]
        letter = legend.setdefault(name, name[0] if name != "before the plan" else ".")
        cells.append(letter.upper() if minute.flag == "late" else "!" if minute.flag else letter)
    numbers = "".join(f"{m.minute:>3}" for m in found.washout)
    keys = ", ".join(f"{letter} {name}" for name, letter in legend.items())
    late = [m.minute for m in found.washout if m.flag]
    flags = f"; from minute {late[0]} on late (capital)" if late else ""
    return [
        "",
        f"Washout clock: an induction must {allowed} after break-in",
        Text(f"minute {numbers}", overflow="fold"),
        Text("       " + "".join(f"{c:>3}" for c in cells), overflow="fold"),
        f"       {keys}{flags}",
    ]


def _limits(verdicts: list[Verdict]) -> Group:
    """What is over or open first; then a line for each check, with sources as numbered notes."""
    sources: dict[str, int] = {}
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), show_header=True)
    for column in ("", "line", "check", "value", "limit", "formula, note"):
        table.add_column(column, overflow="fold", no_wrap=column not in ("", "formula, note"))
    for v in sorted(verdicts, key=lambda v: {False: 0, None: 1, True: 2}[v.ok]):
        number = sources.setdefault(v.source, len(sources) + 1)
        mark = {True: "ok", False: "OVER", None: "not stated"}[v.ok]
        value = "" if v.value is None else f"{_short(v.value)} {v.unit}"
        limit = "" if v.limit is None else f"{_short(v.limit)} {v.unit}"
        note = "; ".join(part for part in (v.formula, v.note) if part)
        table.add_row(mark, v.line, v.name, value, limit, f"{note} \\[{number}]")
    notes = [Text(f"  [{n}] {source}", style="dim") for source, n in sources.items()]
    return Group("Limits", table, *notes)


def _short(value: float) -> str:
    """Return a number without exponent where a person would write it so."""
    return f"{value:.4g}" if abs(value) < 1e4 else f"{value:,.0f}"


def _not_stated(found: Audit) -> Group:
    return Group("Not stated:", *[f"  - {what}" for what in found.not_stated])


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
    return Group("", table)


def arm_json(arm: Prepared) -> dict[str, Any]:
    """Return an arm's number, Δt and plan hash."""
    across = arm.protocol.across_cells
    assert across is not None
    assert arm.arm is not None
    return {"arm": arm.arm, "dt_ms": across.dt_ms[arm.arm - 1], "plan_hash": arm.plan.hash()}
