"""Width, spacing, rate and duty of a line: what the box holds as well."""

from __future__ import annotations

import itertools
from bisect import bisect_right
from collections.abc import Iterator

from msgspec import Struct

from rigctl.protocol.plan import Plan, PlanLine
from rigctl.protocol.rig import Limits
from rigctl.safety.verdict import USUAL, Verdict, at_least, at_most, source_of


class Load(Struct, frozen=True):
    """The worst that a line is asked for: its least gap (None: no two pulses), its worst second."""

    gap_ns: int | None
    per_s: int


def load_of(plan: Plan, line: PlanLine) -> Load:
    """Return a line's load with the phases back to back, as near as they can ever come.

    A rule on the box is taken at its worst: its shortest interval for a second, on top of the
    phase's own worst second. How near a rule's pulse comes to a test stimulus is for the box to
    limit: nobody plans it.
    """
    times: list[int] = []
    start_ns, per_s = 0, 0
    gaps = []
    for phase in plan.phases:
        mine = [t.at_ns for t in phase.triggers if t.line == line.name]
        times += [start_ns + at_ns for at_ns in mine]
        start_ns += phase.duration_ns
        rule = phase.rule
        if rule is not None and rule.line == line.name:
            least_ns = max(rule.lockout_ns, rule.min_interval_ns)
            # A second is open at its start.
            n = min(rule.max_pairings, -(-1_000_000_000 // least_ns))
            per_s = max(per_s, n + worst_second(mine))
            if rule.max_pairings > 1:
                gaps.append(least_ns)
    gaps += [b - a for a, b in itertools.pairwise(times)]
    return Load(min(gaps, default=None), max(per_s, worst_second(times)))


def worst_second(times_ns: list[int]) -> int:
    """Return the largest number of edges in any second (open at its start)."""
    worst = 0
    for n, at_ns in enumerate(times_ns):
        worst = max(worst, n + 1 - bisect_right(times_ns, at_ns - 1_000_000_000, 0, n + 1))
    return worst


def timing(line: PlanLine, load: Load, limits: Limits) -> Iterator[Verdict]:
    """Yield the verdicts on width, spacing, rate and duty of a line."""
    name, width_us = line.name, line.width_ns / 1000
    yield at_most(
        "width", name, width_us, limits.max_width_us, "us", "pulse width",
        source_of(limits.max_width_us, USUAL.max_width_us),
    )  # fmt: skip
    formula = "edge to next edge"
    source = source_of(limits.min_spacing_us, USUAL.min_spacing_us, is_least=True)
    if load.gap_ns is None:
        note = "for information: a single pulse or none"
        yield Verdict(
            "spacing", name, None, limits.min_spacing_us, "us", True, formula, source, note
        )
    else:
        yield at_least(
            "spacing", name, load.gap_ns / 1000, limits.min_spacing_us, "us", formula, source
        )
    yield at_most(
        "rate", name, load.per_s, limits.max_rate_hz, "/s", "most pulses in any second",
        source_of(limits.max_rate_hz, USUAL.max_rate_hz),
    )  # fmt: skip
    duty = load.per_s * line.width_ns / 1e9
    yield at_most(
        "duty", name, duty, limits.max_duty, "", "rate × width",
        source_of(limits.max_duty, USUAL.max_duty),
    )  # fmt: skip
