"""The drawings of ``pairctl check``: the whole plan and one pairing, both to scale."""

from __future__ import annotations

import unicodedata

from rich.console import Console, ConsoleOptions, RenderableType, RenderResult
from rich.segment import Segment
from rich.text import Text

from rigctl.protocol.plan import Plan, PlanPhase

_MOST_TIMES = 6
# Where an encoding lacks a letter: one for one, so that columns stay in line.
_NEAREST = str.maketrans("µΔ°×–−…→·▪█│┃─", "udox--.>.:#||-")
_SIGNS = (("≤ ", "<="), ("≥ ", ">="))


def is_unicode(options: ConsoleOptions) -> bool:
    """Return whether the terminal can draw more than ASCII."""
    return not options.ascii_only and options.encoding.lower().replace("-", "") in ("utf8", "utf16")


class Portable:
    """Renders what it is given in the letters that the terminal's encoding has."""

    def __init__(self, inside: RenderableType) -> None:
        self._inside = inside

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        for segment in console.render(self._inside, options):
            if segment.control:
                yield segment
            else:
                yield Segment(encodable(segment.text, options.encoding), segment.style)


def encodable(text: str, encoding: str) -> str:
    """Return ``text`` with the nearest letter, or ``?``, for each that ``encoding`` lacks."""
    try:
        text.encode(encoding)
    except UnicodeEncodeError:
        for sign, plain in _SIGNS:
            text = text.replace(sign, plain)
        return "".join(_letter(letter, encoding) for letter in text)
    return text


def _letter(letter: str, encoding: str) -> str:
    for each in (letter, letter.translate(_NEAREST), unicodedata.normalize("NFKD", letter)[0]):
        try:
            each.encode(encoding)
        except UnicodeEncodeError:
            continue
        return each
    return "?"


class Timeline:
    """The phases to scale, as wide as the terminal: one row for each line that pulses."""

    def __init__(self, plan: Plan) -> None:
        self._plan = plan

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        marks, bar = (" ·▪█", "│") if is_unicode(options) else (" .:#", "|")
        ruled = {phase.rule.line for phase in self._plan.phases if phase.rule is not None}
        names = [line.name for line in self._plan.lines]
        margin = max([len(n) for n in names] + [5]) + 2
        width = max(20, options.max_width - margin - 1)
        total_ns = max(1, self._plan.duration_ns)
        yield self._heads(margin, width, total_ns, bar)
        for name in names:
            bins = [0] * width
            within = set()
            start_ns = 0
            for phase in self._plan.phases:
                for trigger in phase.triggers:
                    if trigger.line == name:
                        at = (start_ns + trigger.at_ns) * width // total_ns
                        bins[min(at, width - 1)] += 1
                end_ns = start_ns + phase.duration_ns
                if phase.rule is not None and phase.rule.line == name:
                    within |= set(range(start_ns * width // total_ns, end_ns * width // total_ns))
                start_ns = end_ns
            most = max(bins)
            cells = "".join(
                "?" if n == 0 and at in within else marks[_level(n, most)]
                for at, n in enumerate(bins)
            )
            yield Text(f"{name:<{margin}}{cells}", no_wrap=True, overflow="crop")
        yield Text(_axis(margin, width, total_ns / 6e10), no_wrap=True, overflow="crop")
        if ruled:
            yield Text(f"{'':<{margin}}?: when a spontaneous spike comes, by the box rule")

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


def _level(n: int, most: int) -> int:
    """Return 0 for none, else 1 to 3: a third, two thirds, all of the fullest cell."""
    return 0 if n == 0 else 1 if n * 3 <= most else 2 if n * 3 <= 2 * most else 3


def _axis(margin: int, width: int, minutes: float) -> str:
    step = next((s for s in (1, 2, 5, 10, 20, 60, 120, 240) if minutes / s * 6 <= width), 480)
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
        found = self._events()
        if found is None:
            return
        title, events = found
        times = events["pre"] + events["post"]
        zero, span = min(times), max(max(times) - min(times), 1e-9)
        texts = {
            side: ", ".join(f"{round(at - zero, 3):g}" for at in ats[:_MOST_TIMES])
            + (f" … {round(ats[-1] - zero, 3):g}" if len(ats) > _MOST_TIMES else "")
            for side, ats in events.items()
        }
        room = options.max_width - 10 - max(len(t) for t in texts.values())
        width = max(10, min(room, 90))
        mark, rest = ("┃", "─") if is_unicode(options) else ("|", "-")
        yield Text(title)
        for side, ats in events.items():
            cells = [rest] * width
            for at in ats:
                cells[int((at - zero) / span * (width - 1))] = mark
            yield Text(
                f"  {side:<5}{''.join(cells)}  {texts[side] or 'none'}",
                no_wrap=True,
                overflow="crop",
            )
        silent = [line.name for line in self._plan.lines if self._is_silent(line.name)]
        if silent:
            yield Text(f"  post is the pulse on {', '.join(silent)}: no spike is expected of it")

    def _events(self) -> tuple[str, dict[str, list[float]]] | None:
        """Return a title and the events' times, ms, of the first pairing or rule."""
        references = f"({self._plan.pre_reference}, {self._plan.post_reference})"
        for phase in self._plan.phases:
            if phase.rule is not None:
                events = {"pre": [-phase.rule.target_dt_ns / 1e6], "post": [0.0]}
                return f"one pairing of the box rule {references}, ms:", events
            if phase.pairings:
                return f"first pairing {references}, ms:", self._first(phase)
        return None

    def _first(self, phase: PlanPhase) -> dict[str, list[float]]:
        lines = {line.name: line for line in self._plan.lines}
        events: dict[str, list[float]] = {"pre": [], "post": []}
        for trigger in phase.triggers:
            line = lines[trigger.line]
            if trigger.pairing == phase.pairings[0].id and line.drives != "step":
                events[line.drives].append((trigger.at_ns + line.latency_ns) / 1e6)
        return {side: sorted(times) for side, times in events.items()}

    def _is_silent(self, name: str) -> bool:
        line = self._plan.line(name)
        return line.drives == "post" and not line.evokes_spike
