"""Sessions through the whole road: files, plan, link bytes, box, record."""

from __future__ import annotations

import itertools
import sqlite3
from contextlib import closing
from pathlib import Path
from typing import Any

import msgspec
import pytest

from rigctl import backends
from rigctl.backends.base import OpenOptions
from rigctl.execute import execute
from rigctl.link import messages as msg
from rigctl.link.frames import FrameReader
from rigctl.operator import StandIn
from rigctl.plasticity import rule
from rigctl.plasticity.sets import SETS
from rigctl.record.read import Record, open_record
from rigctl.record.sink import MemorySink
from rigctl.record.verify import verify
from rigctl.report.summary import summarise
from rigctl.runtime import Runtime
from rigctl.session.rows import EventRow
from rigctl_sim.knobs import SimKnobs
from rigctl_sim.world import World
from tests.conftest import RIG_TEXT, SHORT, prepared, rehearsed

S = 1_000_000_000


def _summary(record: Path) -> dict[str, Any]:
    with open_record(record) as opened:
        return summarise(opened)


def _fired_twice(record: Record) -> list[int]:
    fired = [t.id for t in record.triggers if t.fate == "fired"]
    return [t for t in set(fired) if fired.count(t) > 1]


def test_planted_misses_and_doublets_are_found_exactly_those(standard_record: Path) -> None:
    with open_record(standard_record) as record:
        knobs = msgspec.json.decode(record.header["about.sim_knobs"], type=SimKnobs)
        missed = [p.id for p in record.pairings if p.fate == "no_post"]
        doubled = [p.id for p in record.pairings if p.fate == "doublet"]
    # In this protocol the n-th spike pulse belongs to the n-th pairing.
    assert missed == sorted(knobs.scripted.miss_at)
    assert doubled == sorted(knobs.scripted.doublet_at)
    assert (len(missed), len(doubled)) == (8, 3)


def test_creep_appears_in_delta_t_ledger_and_forecast(standard_record: Path) -> None:
    summary = _summary(standard_record)
    with open_record(standard_record) as record:
        dts = [
            p.delivered_dt_ns / 1e6
            for p in record.spike_pairs
            if p.fate in ("on_target", "off_target") and p.delivered_dt_ns
        ]
    assert sum(dts[:10]) / 10 == pytest.approx(10.2, abs=0.3)
    assert sum(dts[-10:]) / 10 == pytest.approx(12.8, abs=0.3)
    assert summary["pairings"]["off_target"] > 10
    delivered = summary["forecast"]["pair-all"]["change_pct"]
    planned = summary["forecast_as_planned"]["pair-all"]["change_pct"]
    assert delivered < planned - 5
    assert any(a.startswith("off_target") for a in summary["alarms"])


def test_the_forecast_can_be_recomputed_from_the_spikes_alone(standard_record: Path) -> None:
    with open_record(standard_record) as record:
        made = rule("pair-all", **SETS["bi-poo-2001"].parameters)
        for spike in record.spikes:
            if spike.side == "post":
                made.post(spike.at_ns / 1e9)
            elif spike.pathway == "s1":
                made.pre(spike.at_ns / 1e9)
        last = [f for f in record.forecasts if f.pathway == "s1" and f.rule == "pair-all"][-1]
    assert last.change == pytest.approx(made.change, rel=1e-12)
    assert last.low <= last.change <= last.high
    assert last.low < last.high


def test_every_pulse_is_accounted_for(standard_record: Path) -> None:
    with open_record(standard_record) as record:
        plan_pulses = 1014
        assert len(record.triggers) == plan_pulses
        assert {t.fate for t in record.triggers} == {"fired"}
        assert all(
            t.fired_ns == (t.planned_tick or 0) * 500 and abs(t.fired_ns - t.planned_ns) <= 250
            for t in record.triggers
            if t.fired_ns is not None
        )
        assert not _fired_twice(record)


@pytest.mark.parametrize("faults", ["corrupt_bytes=12", "drop_bytes=12"])
def test_damage_on_the_link_is_detected_mended_and_logged(faults: str, tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, faults=faults)
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        faults_seen = [e for e in record.events if e.kind == "link_fault"]
        assert faults_seen
        assert {t.fate for t in record.triggers} == {"fired"}
        assert {p.fate for p in record.pairings} == {"on_target"}
        assert any("link" in a["name"] for a in record.bodies("alarm"))
    assert verify(ended.record).ok


def test_without_the_link_in_the_path_nothing_happens(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A session whose bytes do not reach the box must not deliver anything."""
    monkeypatch.setattr(World, "write", lambda self, data: None)
    ended = rehearsed(tmp_path)
    assert ended.how == "link_lost"
    with open_record(ended.record) as record:
        assert record.triggers == []
        assert {p.fate for p in record.pairings} == {"not_run"}


def test_a_pulled_cable_ends_the_session_and_the_record_still_verifies(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, faults="cable_pull_at_s=36")
    assert (ended.how, ended.exit_code) == ("link_lost", 5)
    summary = _summary(ended.record)
    assert summary["pairings"]["not_run"] > 0
    verdict = verify(ended.record)
    assert verdict.ok
    assert verdict.status == "closed"


def test_a_box_reset_is_never_resumed(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, faults="box_reset_at_s=36")
    assert (ended.how, ended.exit_code) == ("box_reset", 5)
    summary = _summary(ended.record)
    assert 0 < summary["pairings"]["not_run"] < 12
    assert verify(ended.record).ok


# --- the operator -------------------------------------------------------------------------------


def test_a_pause_stops_at_a_pairing_boundary_and_resuming_shifts_the_rest(tmp_path: Path) -> None:
    commands = [(40 * S, "pause", ""), (60 * S, "resume", "")]
    ended = rehearsed(tmp_path, commands=commands)
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        assert {p.fate for p in record.pairings} == {"on_target"}
        assert {t.fate for t in record.triggers} == {"fired"}
        fired = sorted(t.fired_ns or 0 for t in record.triggers if t.line == "pre1" and t.pairing)
        gaps = [b - a for a, b in itertools.pairwise(fired)]
        assert sum(gap > 10 * S for gap in gaps) == 1
        assert sorted(gaps)[:-1] == [S] * 10
        states = [(s["from"], s["to"]) for s in record.bodies("state")]
        assert ("induction", "paused") in states
        assert ("paused", "induction") in states
        assert not [t for t in fired if 41 * S < t < 60 * S]
    assert verify(ended.record).ok


def test_ending_the_induction_early_goes_on_to_the_follow_up(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, commands=[(40 * S, "end_induction", "")])
    assert (ended.how, ended.exit_code) == ("induction_ended_early", 0)
    summary = _summary(ended.record)
    assert 0 < summary["pairings"]["on_target"] < 12
    assert summary["pairings"]["on_target"] + summary["pairings"]["not_run"] == 12
    with open_record(ended.record) as record:
        kinds = [p["kind"] for p in record.bodies("phase_start")]
        assert kinds == ["baseline", "induction", "follow_up"]
        assert [t for t in record.triggers if t.phase == 2 and t.fate == "fired"]
    assert verify(ended.record).ok


@pytest.mark.parametrize("at_s", [10, 36.004, 36.5, 50])
def test_abandoning_the_cell_keeps_everything_so_far(at_s: float, tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, commands=[(round(at_s * S), "abandon", "seal lost")])
    assert (ended.how, ended.exit_code) == ("abandoned", 4)
    with open_record(ended.record) as record:
        assert len(record.pairings) == 12
        assert not [t for t in record.triggers if (t.fired_ns or 0) > round(at_s * S) + 200_000_000]
        assert record.bodies("ended")[0]["text"] == "seal lost"
    assert verify(ended.record).ok


def test_operator_gates_wait_for_go_and_a_note_is_kept(tmp_path: Path) -> None:
    protocol = SHORT.replace('kind = "induction"', 'kind = "induction"\nstart = "operator"')
    ended = rehearsed(tmp_path, protocol, commands=[(10 * S, "note", "seal 3 GΩ")])
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        assert [g["verdict"] for g in record.bodies("gate")] == ["asked", "pass"]
        assert next(o["text"] for o in record.bodies("operator")) == "seal 3 GΩ"


def test_what_is_not_possible_is_refused_and_changes_nothing(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, commands=[(10 * S, "resume", ""), (12 * S, "end_induction", "")])
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        names = [a["name"] for a in record.bodies("alarm")]
        assert names == ["not_possible", "not_possible"]


# --- gates --------------------------------------------------------------------------------------


def test_the_stable_gate_refuses_what_it_cannot_see(tmp_path: Path) -> None:
    protocol = SHORT.replace('kind = "induction"', 'kind = "induction"\nstart = "stable"')
    rig = RIG_TEXT + "\n[sim.acquisition]\non = false\n"
    ended = rehearsed(tmp_path, protocol, rig)
    assert (ended.how, ended.exit_code) == ("gate_failed", 4)
    with open_record(ended.record) as record:
        (gate,) = record.bodies("gate")
        assert (gate["verdict"], "no response was measured" in gate["text"]) == ("fail", True)
        assert {p.fate for p in record.pairings} == {"not_run"}
    assert verify(ended.record).ok


def test_the_stable_gate_lets_a_steady_baseline_through(tmp_path: Path) -> None:
    protocol = (
        SHORT.replace('kind = "induction"', 'kind = "induction"\nstart = "stable"')
        .replace("every_s = 4", "every_s = 2")
        .replace("first_at_s = 2", "first_at_s = 1")
    )
    rig = RIG_TEXT + "\n[sim.synapse.s1]\nsites = 5000\nquantal_cv = 0\nuse = 0.05\n"
    rig += "\n[sim.synapse.s2]\nsites = 5000\nquantal_cv = 0\nuse = 0.05\n"
    ended = rehearsed(tmp_path, protocol, rig)
    assert ended.how == "as_planned"


# --- controls -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("extra", "rig_extra", "fate"),
    [
        ('deliver = "pre"', "", "on_target"),
        ('deliver = "post"', "", "on_target"),
        ('deliver = "post"', "\n[sim.scripted]\nmiss_probability = 1\n", "no_post"),
        ('deliver = "post"', "\n[sim.scripted]\ndoublet_probability = 1\n", "doublet"),
        ('post_line = "post_weak"', "", "on_target"),
    ],
)
def test_controls_are_judged_by_what_should_come(
    extra: str, rig_extra: str, fate: str, tmp_path: Path
) -> None:
    protocol = SHORT.replace("dt_ms = 10\n", f"dt_ms = 10\n{extra}\n")
    ended = rehearsed(tmp_path, protocol, RIG_TEXT + rig_extra)
    with open_record(ended.record) as record:
        assert {p.fate for p in record.pairings} == {fate}
        assert record.spike_pairs == []


def test_a_box_without_the_line_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import rigctl_sim.backend as backend

    made = backend.BoxConfig
    monkeypatch.setattr(
        backend, "BoxConfig", lambda **kw: made(**{**kw, "outputs": kw["outputs"][1:]})
    )
    ended = rehearsed(tmp_path)
    assert (ended.how, ended.exit_code) == ("refused", 5)
    with open_record(ended.record) as record:
        assert "no line pre1" in record.bodies("ended")[0]["text"]
        assert record.triggers == []


@pytest.mark.parametrize("command", ["pause", "end_induction", "resume"])
def test_at_a_gate_there_is_nothing_to_pause_or_end(command: str, tmp_path: Path) -> None:
    """The gate before the follow-up waits for a go that comes late."""

    class Late(StandIn):
        def asked(self, phase: str, text: str, now_ns: int) -> None:
            self._commands += [(now_ns + 2 * S, command, ""), (now_ns + 5 * S, "go", "")]

    protocol = SHORT.replace('kind = "follow_up"', 'kind = "follow_up"\nstart = "operator"')
    ended = execute(prepared(tmp_path, protocol), tmp_path / "out", OpenOptions(1), operator=Late())
    assert ended.how == "as_planned"
    with open_record(ended.record) as record:
        assert [a["name"] for a in record.bodies("alarm")] == ["not_possible"]
        assert [p["name"] for p in record.bodies("phase_end")] == [
            "baseline", "induction", "follow_up",
        ]  # fmt: skip
        assert [g["verdict"] for g in record.bodies("gate")] == ["asked", "pass"]
    assert verify(ended.record).ok


def test_abandoning_during_a_pause_keeps_what_was_delivered(tmp_path: Path) -> None:
    commands = [(40 * S, "pause", ""), (50 * S, "abandon", "")]
    ended = rehearsed(tmp_path, commands=commands)
    assert (ended.how, ended.exit_code) == ("abandoned", 4)
    counts = _summary(ended.record)["pairings"]
    assert counts["on_target"] > 0
    assert counts["on_target"] + counts["not_run"] == 12
    assert verify(ended.record).ok


def test_what_the_box_still_tells_after_the_disarming_is_in_the_record(tmp_path: Path) -> None:
    ended = rehearsed(tmp_path, commands=[(38_200_000_000, "abandon", "")])
    with open_record(ended.record) as record:
        # Pulses that waited in the box's queue come back as cancelled, none of them as unknown.
        fates = {t.fate for t in record.triggers}
        assert fates == {"fired", "cancelled"}


BURSTS = SHORT.replace(
    "pairings = 12\nrate_hz = 1",
    "pairings = 4\nevery_s = 4\npost_count = 3\npost_rate_hz = 100\n"
    "repeat = [{ times = 5, rate_hz = 2 }]",
).replace(
    '[[phase.block]]\nkind = "pairings"',
    '[[phase.test]]\npathway = "s2"\nevery_s = 0.7\nfirst_at_s = 0.25\nstep = false\n\n'
    '[[phase.block]]\nkind = "pairings"',
)


def test_tests_within_a_long_pairing_take_none_of_its_spikes(tmp_path: Path) -> None:
    # Spikes 10 ms apart lie within each other's 15 ms window; each pulse's ends at the next.
    assert BURSTS.count("repeat") == BURSTS.count("0.7") == 1
    ended = rehearsed(tmp_path, BURSTS)
    with open_record(ended.record) as record:
        assert [p.fate for p in record.pairings] == ["on_target"] * 4
        assert len(record.spike_pairs) == 4 * 15
        posts = [s for s in record.spikes if s.side == "post"]
        assert len(posts) == 4 * 15
        assert all(s.pairing is not None for s in posts)
    assert verify(ended.record).ok


@pytest.mark.parametrize("after_ms", [0.2, 0.8, 1.4, 2.0])
def test_an_end_while_the_box_is_being_asked_hears_it_out_all_the_same(
    after_ms: float, short_record: Path, tmp_path: Path
) -> None:
    with closing(sqlite3.connect(short_record)) as db:
        asked = db.execute("SELECT at_ns FROM event WHERE kind = 'woke'").fetchall()
    at_ns = next(t for (t,) in asked if t > 38 * S) + round(after_ms * 1e6)
    ended = rehearsed(tmp_path, commands=[(at_ns, "abandon", "")])
    with open_record(ended.record) as record:
        assert {t.fate for t in record.triggers} == {"fired", "cancelled"}
        told = [e.kind for e in record.events]
        assert told.index("box_disarmed") < told.index("closed")


def test_pulses_of_which_nobody_knows_widen_the_band(short_record: Path, tmp_path: Path) -> None:
    with open_record(short_record) as record:
        fired = next(t for t in record.triggers if t.pairing == 5 and t.line == "pre1").fired_ns
    assert fired is not None
    # The box was on 3 s before and runs 23 ppm fast; its word for a pulse takes 0.2 ms and more.
    at_s = (fired - 3 * S) / 1e9 / 1.000023 + 0.0001
    ended = rehearsed(tmp_path, faults=f"cable_pull_at_s={at_s:.6f}")
    with open_record(ended.record) as record:
        unknown = [t for t in record.triggers if t.pairing == 5]
        assert {t.fate for t in unknown} <= {"unknown", "cancelled"}
        assert unknown[0].fate == "unknown"
        assert record.pairings[4].fate == "unknown"
        before, last = [f for f in record.forecasts if f.pathway == "s1"][-2:]
        assert last.change == pytest.approx(before.change, rel=1e-3)
        assert last.high - last.low > before.high - before.low
    assert verify(ended.record).ok


class Watched(MemorySink):
    """Notes what had been sent when the record was last made durable."""

    def __init__(self) -> None:
        super().__init__()
        self.log: list[str] = []

    def flush(self) -> None:
        kinds = [r.kind for r in self.rows if isinstance(r, EventRow)]
        self.log.append("durable: " + ",".join(kinds))


def test_the_record_is_durable_before_the_box_is_armed(tmp_path: Path) -> None:
    ready = prepared(tmp_path)
    connection = backends.load("sim").open(ready.rig, ready.plan, OpenOptions(1))
    sink = Watched()
    reader = FrameReader()
    write = connection.link.write

    def noted(data: bytes) -> None:
        for payload in reader.feed(data):
            sink.log.append(type(msg.decode(payload)).__name__)
        write(data)

    connection.link.write = noted  # type: ignore[method-assign]
    header = {"record_version": "1"}
    Runtime(ready.plan, header, connection, sink, StandIn()).run()
    arming = sink.log.index("ArmRequest")
    durable = [e for e in sink.log[:arming] if e.startswith("durable")]
    assert durable
    assert "connected" in durable[-1]
