"""The summary of a session, from its record alone."""

from __future__ import annotations

import math
from collections import Counter
from statistics import fmean, stdev
from typing import TYPE_CHECKING, Any

from rigctl.plasticity.forecast import as_planned, extrapolates
from rigctl.protocol.plan import Plan
from rigctl.protocol.planned import paired_pathways, planned_spikes
from rigctl.record.read import Record
from rigctl.record.verify import plan_of
from rigctl.session.core import ticks_to_ns
from rigctl.session.rows import PAIR_FATES

if TYPE_CHECKING:
    from rich.console import RenderableType

# Fates of pairings that had both spikes.
_DELIVERED = ("on_target", "off_target", "doublet")
# The maximum of n events bounds a percentile with 95 % confidence from this n on
# (order statistics: 1 − p^n ≥ .95).
_LEAST_N = {"p50": 6, "p99": 299, "p999": 2995}


def summarise(record: Record, plan: Plan | None = None) -> dict[str, Any]:
    """Return the summary, as ``--json`` prints it.

    Parameters
    ----------
    record : Record
    plan : Plan, optional
        The record's plan, where the caller has compiled it already.
    """
    plan = plan or plan_of(record.header)
    ended = record.bodies("ended")
    return {
        "simulated": record.simulated,
        "ended": ended[-1]["how"] if ended else "interrupted",
        "plan_hash": record.header["plan_hash"],
        "record": str(record.path),
        "duration_s": duration_ns(record) / 1e9,
        "timed_by": record.header.get("timed_by", "box"),
        "pairings": pairing_counts(record, plan),
        "dt_ms": dt_statistics(record),
        "dt_error_ms": dt_error_statistics(record),
        "lateness_us": lateness_us(record),
        "forecast": delivered_forecast(record, plan),
        "forecast_as_planned": planned_forecast(plan),
        "forecast_notes": forecast_notes(record, plan),
        "alarms": [f"{a['name']}: {a['text']}" for a in record.bodies("alarm")],
    }


def duration_ns(record: Record) -> int:
    """Return the time from the first phase's start to the last event."""
    starts = record.bodies("phase_start")
    if not starts or not record.events:
        return 0
    # The largest time, not the last: a box that starts anew begins its clock anew.
    return max(0, max(e.at_ns for e in record.events) - int(starts[0]["start_ns"]))


def pairing_counts(record: Record, plan: Plan) -> dict[str, int]:
    """Return how many pairings were planned, and what became of them."""
    fates = Counter(p.fate for p in record.pairings)
    planned = sum(len(phase.pairings) for phase in plan.phases)
    judged: dict[str, int] = {fate: fates.get(fate, 0) for fate in PAIR_FATES}
    return {
        "planned": planned,
        "delivered": sum(judged[f] for f in _DELIVERED),
        **judged,
        "replacements": sum(1 for p in record.pairings if p.replaces is not None),
    }


def dt_statistics(record: Record) -> dict[str, float | None]:
    """Return statistics of the delivered Δt, ms; the target where there is a single one.

    Single spikes only: a doublet's Δt is in the ledger, not in the statistics.
    """
    pairs = [p for p in record.spike_pairs if p.fate in ("on_target", "off_target")]
    targets = {p.target_dt_ns for p in record.spike_pairs}
    target = targets.pop() / 1e6 if len(targets) == 1 else None
    dts = [p.delivered_dt_ns / 1e6 for p in pairs if p.delivered_dt_ns is not None]
    if not dts or target is None:
        return {"target": target, "mean": None, "sd": None, "min": None, "max": None}
    mean = sum(dts) / len(dts)
    sd = math.sqrt(sum((d - mean) ** 2 for d in dts) / (len(dts) - 1)) if len(dts) > 1 else None
    return {"target": target, "mean": mean, "sd": sd, "min": min(dts), "max": max(dts)}


def dt_error_statistics(record: Record) -> dict[str, float | int | None]:
    """Return delivered minus target Δt of single spikes, ms: also where targets differ."""
    errors = [
        (p.delivered_dt_ns - p.target_dt_ns) / 1e6
        for p in record.spike_pairs
        if p.fate in ("on_target", "off_target") and p.delivered_dt_ns is not None
    ]
    mean = fmean(errors) if errors else None
    return {"n": len(errors), "mean": mean, "sd": stdev(errors) if len(errors) > 1 else None}


def lateness_ns(record: Record) -> list[int]:
    """Return fired minus planned time of every trigger that fired, sorted."""
    hello = record.bodies("connected")
    num, den = (int(hello[0]["tick_num"]), int(hello[0]["tick_den"])) if hello else (1, 1)
    late = [
        t.fired_ns - ticks_to_ns(t.planned_tick, num, den)
        for t in record.triggers
        if t.fate == "fired" and t.fired_ns is not None and t.planned_tick is not None
    ]
    return sorted(late)


def lateness_us(record: Record) -> dict[str, float | None]:
    """Return percentiles of the lateness, µs; null where there are too few events for one."""
    late = lateness_ns(record)
    found: dict[str, float | None] = {}
    for name, p in (("p50", 0.5), ("p99", 0.99), ("p999", 0.999)):
        enough = len(late) >= _LEAST_N[name]
        found[name] = late[max(0, math.ceil(p * len(late)) - 1)] / 1000 if enough else None
    found["max"] = late[-1] / 1000 if late else None
    return found


def forecast_notes(record: Record, plan: Plan) -> list[str]:
    """Return what must be said beside each forecast: where it applies, and extrapolation."""
    delivered = sum(1 for p in record.pairings if p.fate in _DELIVERED)
    notes = []
    for choice in plan.forecasts:
        applies = choice.preparation or "NO PREPARATION NAMED"
        beyond = extrapolates(choice, delivered)
        notes.append(
            f"{label(plan, choice.rule, choice.parameter_set)}: {choice.parameter_set}, {applies}"
            + (f"; EXTRAPOLATED: {beyond}" if beyond else "")
        )
    return notes


def delivered_forecast(record: Record, plan: Plan) -> dict[str, dict[str, float]]:
    """Return the last forecast of the paired pathway, by rule."""
    paired = paired_pathways(plan)
    wanted = paired[0] if paired else None
    last = {(f.rule, f.parameter_set): f for f in record.forecasts if f.pathway == wanted}
    return {
        label(plan, rule, parameter_set): {
            "change_pct": 100 * f.change,
            "low_pct": 100 * f.low,
            "high_pct": 100 * f.high,
        }
        for (rule, parameter_set), f in last.items()
    }


def planned_forecast(plan: Plan) -> dict[str, dict[str, float]]:
    """Return the same, had the plan been delivered exactly."""
    paired = paired_pathways(plan)
    values = as_planned(plan.forecasts, [s[:3] for s in planned_spikes(plan)])
    return {
        label(plan, v.rule, v.parameter_set): {
            "change_pct": 100 * v.change,
            "low_pct": 100 * v.low,
            "high_pct": 100 * v.high,
        }
        for v in values
        if paired and v.pathway == paired[0]
    }


def label(plan: Plan, rule: str, parameter_set: str) -> str:
    """Return a rule's key: its name, with the set where one rule is run with several."""
    same = [c for c in plan.forecasts if c.rule == rule]
    return rule if len(same) == 1 else f"{rule} ({parameter_set})"


def as_text(summary: dict[str, Any]) -> RenderableType:
    """Return the summary for the terminal."""
    from rich.console import Group
    from rich.table import Table

    pairings, dt = summary["pairings"], summary["dt_ms"]
    head = f"{'SIMULATED  ' if summary['simulated'] else ''}{summary['ended']}"
    table = Table.grid(padding=(0, 2))
    table.add_row("ended", head)
    table.add_row(
        "pairings",
        "; ".join(
            [f"{pairings['on_target']} of {pairings['planned']} on target"]
            + [f"{pairings[f]} {f.replace('_', ' ')}" for f in PAIR_FATES[1:] if pairings[f]]
        ),
    )
    if dt["mean"] is not None:
        spread = "" if dt["sd"] is None else f" ± {dt['sd']:.2f}"
        table.add_row(
            "Δt",
            f"{dt['mean']:+.2f}{spread} ms (target {dt['target']:+g}), "
            f"{dt['min']:+.2f} to {dt['max']:+.2f}",
        )
    elif summary["dt_error_ms"]["mean"] is not None:
        error = summary["dt_error_ms"]
        spread = "" if error["sd"] is None else f" ± {error['sd']:.2f}"
        table.add_row("Δt error", f"{error['mean']:+.2f}{spread} ms over {error['n']} spike pairs")
    for rule, value in summary["forecast"].items():
        planned = summary["forecast_as_planned"].get(rule)
        exactly = f"; planned exactly {planned['change_pct']:+.1f} %" if planned else ""
        table.add_row(
            f"forecast {rule}",
            f"{value['change_pct']:+.1f} % [{value['low_pct']:+.1f}, {value['high_pct']:+.1f}]"
            f"{exactly}",
        )
    for note in summary["forecast_notes"]:
        table.add_row("applies to", note)
    for alarm in summary["alarms"]:
        table.add_row("alarm", alarm)
    table.add_row("record", summary["record"])
    return Group(table)
