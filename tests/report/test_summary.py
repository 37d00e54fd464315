"""The summary, from records whose numbers are known."""

from __future__ import annotations

import json
import math
import statistics
from pathlib import Path

import pytest

from rigctl.record.read import open_record
from rigctl.report.summary import as_text, summarise
from tests.report.builder import build

# The names that outside programs rely on.
KEYS = {
    "simulated",
    "ended",
    "plan_hash",
    "record",
    "duration_s",
    "timed_by",
    "pairings",
    "dt_ms",
    "dt_error_ms",
    "forecast_notes",
    "lateness_us",
    "forecast",
    "forecast_as_planned",
    "alarms",
}
PAIRING_KEYS = {
    "planned",
    "delivered",
    "on_target",
    "off_target",
    "no_pre",
    "no_post",
    "doublet",
    "unknown",
    "not_run",
    "replacements",
}


def test_names_and_types_are_those_promised(short_record: Path) -> None:
    with open_record(short_record) as record:
        summary = summarise(record)
    assert set(summary) == KEYS
    assert set(summary["pairings"]) == PAIRING_KEYS
    assert set(summary["dt_ms"]) == {"target", "mean", "sd", "min", "max"}
    assert set(summary["lateness_us"]) == {"p50", "p99", "p999", "max"}
    assert set(summary["forecast"]) == set(summary["forecast_as_planned"]) == {"pair-all"}
    for value in summary["forecast"].values():
        assert value["low_pct"] <= value["change_pct"] <= value["high_pct"]
    assert json.loads(json.dumps(summary, allow_nan=False)) == summary
    assert summary["pairings"]["planned"] == summary["pairings"]["delivered"] == 12


def test_delta_t_counts_single_spikes_only(tmp_path: Path) -> None:
    dts = [9.5, 10.0, 12.75, None, 3.0]
    record = build(
        tmp_path / "session.sqlite",
        dts,
        ["on_target", "on_target", "off_target", "no_post", "doublet"],
    )
    with open_record(record) as opened:
        summary = summarise(opened)
    single = [9.5, 10.0, 12.75]
    assert summary["dt_ms"]["target"] == 10
    assert summary["dt_ms"]["mean"] == pytest.approx(statistics.mean(single))
    assert summary["dt_ms"]["sd"] == pytest.approx(statistics.stdev(single))
    assert (summary["dt_ms"]["min"], summary["dt_ms"]["max"]) == (9.5, 12.75)
    counts = summary["pairings"]
    assert (counts["delivered"], counts["on_target"], counts["off_target"]) == (4, 2, 1)
    assert (counts["doublet"], counts["no_post"], counts["no_pre"]) == (1, 1, 0)
    assert summary["duration_s"] == 59 + 5
    assert summary["forecast"]["pair-all"] == {
        "change_pct": pytest.approx(5),
        "low_pct": pytest.approx(2.5),
        "high_pct": pytest.approx(10),
    }


@pytest.mark.parametrize(
    ("n", "expected"),
    [
        (0, (None, None, None, None)),
        (5, (None, None, None, 2.0)),
        # Nearest rank: the value with rank ceil(p n), here half a microsecond each.
        (6, (1.0, None, None, 2.5)),
        (298, (74.0, None, None, 148.5)),
        (300, (74.5, 148.0, None, 149.5)),
        (3000, (749.5, 1484.5, 1498.0, 1499.5)),
    ],
)
def test_lateness_percentiles(tmp_path: Path, n: int, expected: tuple[float | None, ...]) -> None:
    record = build(tmp_path / "session.sqlite", late_ticks=range(n))
    with open_record(record) as opened:
        late = summarise(opened)["lateness_us"]
    assert (late["p50"], late["p99"], late["p999"], late["max"]) == expected


def test_the_planned_forecast_is_the_rule_on_the_plan(tmp_path: Path) -> None:
    record = build(tmp_path / "session.sqlite", [10.0] * 12)
    with open_record(record) as opened:
        planned = summarise(opened)["forecast_as_planned"]["pair-all"]["change_pct"]
    # Bi & Poo 2001, Annu Rev Neurosci 24:139 (second-hand): .777 exp(-Δt/16.8 ms) over 60 pairings.
    assert planned == pytest.approx(100 * 12 / 60 * 0.777 * math.exp(-10 / 16.8), rel=1e-6)


def test_an_open_record_is_interrupted(tmp_path: Path) -> None:
    record = build(tmp_path / "session.sqlite", [10.0], closed=False)
    with open_record(record) as opened:
        assert summarise(opened)["ended"] == "interrupted"


def test_a_box_that_starts_anew_does_not_shorten_the_session(tmp_path: Path) -> None:
    from tests.conftest import rehearsed

    ended = rehearsed(tmp_path, faults="box_reset_at_s=40")
    with open_record(ended.record) as opened:
        summary = summarise(opened)
    assert summary["ended"] == "box_reset"
    assert 30 < summary["duration_s"] < 40


def test_as_text_says_the_numbers(short_record: Path) -> None:
    from rich.console import Console

    with open_record(short_record) as record:
        summary = summarise(record)
    console = Console(width=100)
    with console.capture() as said:
        console.print(as_text(summary))
    text = said.get()
    assert "SIMULATED" in text
    assert "12 of 12 on target" in text
    assert "planned exactly" in text
