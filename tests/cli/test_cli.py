"""The command as a person runs it: exit codes, clean JSON, one sentence for every mistake."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from tests.conftest import EXAMPLES, RIG_TEXT, SHORT


def run(*args: str | Path, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    """Run pairctl in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "rigctl", *map(str, args)],
        capture_output=True, text=True, cwd=cwd, timeout=120,
        env={**os.environ, "COLUMNS": "100", "PYTHONIOENCODING": "utf-8"},
    )  # fmt: skip


@pytest.fixture
def protocol(tmp_path: Path) -> Path:
    path = tmp_path / "p.toml"
    path.write_text(SHORT, encoding="utf-8")
    return path


def test_alone_it_shows_what_to_do_first() -> None:
    done = run()
    assert done.returncode == 0
    assert "pairctl rehearse PROTOCOL.toml" in done.stdout


def test_help_lists_every_command_and_imports_nothing_heavy() -> None:
    done = run("--help")
    assert done.returncode == 0
    for command in ("check", "rehearse", "report", "verify", "list", "predict", "schema"):
        assert command in done.stdout
    code = (
        "import sys; from rigctl.cli import cli\n"
        "try: cli.main(['--help'])\n"
        "except SystemExit: pass\n"
        "heavy = {'numpy', 'msgspec', 'rich', 'matplotlib', 'sqlite3', 'scipy', 'numba'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True).stdout
    assert out.strip().endswith("[]")


def test_a_run_never_imports_scipy_numba_or_matplotlib(tmp_path: Path) -> None:
    code = (
        "import sys\nfrom pathlib import Path\n"
        "from tests.conftest import rehearsed\n"
        f"ended = rehearsed(Path({str(tmp_path)!r}))\n"
        "print(ended.how, sorted({'scipy', 'numba', 'matplotlib'} & set(sys.modules)))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, cwd=EXAMPLES.parent
    )
    assert done.stdout.strip() == "as_planned []"


def test_check_rehearse_verify_report_list(protocol: Path, tmp_path: Path) -> None:
    checked = run("check", protocol)
    assert checked.returncode == 0
    assert "plan hash" in checked.stdout
    assert "no permission" in checked.stdout
    out = tmp_path / "out"
    done = run("rehearse", protocol, "--out", out, "--seed", "4")
    assert done.returncode == 0
    assert "SIMULATED" in done.stdout
    assert sorted(p.name for p in out.iterdir()) == [
        "report.html", "session.sha256", "session.sqlite",
    ]  # fmt: skip
    verified = run("verify", out / "session.sqlite")
    assert (verified.returncode, "replay agree" in verified.stdout) == (0, True)
    page = (out / "report.html").read_text(encoding="utf-8")
    (out / "report.html").unlink()
    assert run("report", out / "session.sqlite").returncode == 0
    assert (out / "report.html").read_text(encoding="utf-8") == page
    listed = run("list", tmp_path, "--json")
    (entry,) = json.loads(listed.stdout)
    assert (entry["simulated"], entry["closed"], entry["ended"]) == (True, True, "as_planned")


SUMMARY_KEYS = {
    "simulated", "ended", "plan_hash", "record", "duration_s", "timed_by", "pairings", "dt_ms",
    "lateness_us", "forecast", "forecast_as_planned", "alarms",
}  # fmt: skip


def test_json_is_one_object_and_nothing_else(protocol: Path, tmp_path: Path) -> None:
    done = run("rehearse", protocol, "--out", tmp_path / "o", "--json")
    summary = json.loads(done.stdout)
    assert set(summary) >= SUMMARY_KEYS
    assert summary["simulated"] is True
    assert set(summary["pairings"]) == {
        "planned", "delivered", "on_target", "off_target", "no_pre", "no_post", "doublet",
        "unknown", "not_run", "replacements",
    }  # fmt: skip
    assert set(summary["dt_ms"]) == {"target", "mean", "sd", "min", "max"}
    assert set(summary["lateness_us"]) == {"p50", "p99", "p999", "max"}
    assert set(summary["forecast"]["pair-all"]) == {"change_pct", "low_pct", "high_pct"}
    checked = json.loads(run("check", protocol, "--json").stdout)
    assert checked["plan_hash"] == summary["plan_hash"]


def test_default_folders_count_up(protocol: Path, tmp_path: Path) -> None:
    for _ in range(2):
        assert run("rehearse", protocol, cwd=tmp_path).returncode == 0
    found = sorted(p.name for p in (tmp_path / "rehearsals").iterdir())
    assert found == ["p-001", "p-002"]


def test_a_record_is_never_overwritten(protocol: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    assert run("rehearse", protocol, "--out", out).returncode == 0
    before = (out / "session.sqlite").read_bytes()
    done = run("rehearse", protocol, "--out", out)
    assert done.returncode == 2
    assert "never overwritten" in done.stderr
    assert (out / "session.sqlite").read_bytes() == before


def test_a_limit_refuses_with_3_and_nothing_is_made(protocol: Path, tmp_path: Path) -> None:
    rig = tmp_path / "rig.toml"
    rig.write_text(RIG_TEXT.replace("amplitude_ua = 60", "amplitude_ua = 400"), encoding="utf-8")
    out = tmp_path / "out"
    for command in (["check", protocol], ["rehearse", protocol, "--out", out]):
        done = run(*command, "--rig", rig)
        assert done.returncode == 3
        assert "refused: charge density of pre1 is" in done.stderr
        assert "Traceback" not in done.stderr
    assert not out.exists()


def test_the_contingent_protocol_is_checked_and_refused_in_one_sentence(tmp_path: Path) -> None:
    path = EXAMPLES / "contingent.toml"
    assert run("check", path).returncode == 0
    done = run("rehearse", path, "--out", tmp_path / "o")
    assert done.returncode == 3
    assert done.stderr.count("\n") == 1
    assert not (tmp_path / "o").exists()


BAD = [
    (["check", "nowhere.toml"], "nowhere.toml: there is no such file."),
    (["check", "."], "this is a folder; a file is needed."),
    (["rehearse", "p.toml", "--faults", "crep_ms=3"], 'did you mean "creep_ms"?'),
    (["rehearse", "p.toml", "--faults", "creep_ms=x"], "a number from -20 to 20 (ms) is needed"),
    (["rehearse", "p.toml", "--faults", "misses=99"], "the induction has 12 spike pulses"),
    (["rehearse", "p.toml", "--seed", "-1"], "-1"),
    (["rehearse", "p.toml", "--out", "p.toml"], "there is a file of that name"),
    (["rehearse", "p.toml", "--out", "p.toml/x"], "part of this path is a file"),
    (["verify", "p.toml"], "not a record: the file is not SQLite"),
    (["report", "p.toml"], "not a record: the file is not SQLite"),
    (["verify", "none.sqlite"], "there is no record"),
    (["list", "nowhere"], "there is no such folder"),
    (["predict", "p.toml", "--rule", "pair-all"], "p.toml: line 1: the columns"),
    (["flap"], "No such command"),
]


@pytest.mark.parametrize(("args", "sentence"), BAD, ids=lambda x: str(x)[:40])
def test_mistakes_get_one_sentence_and_2(
    args: list[str], sentence: str, protocol: Path, tmp_path: Path
) -> None:
    done = run(*args, cwd=tmp_path)
    assert done.returncode == 2
    assert sentence in done.stderr
    assert "Traceback" not in done.stderr
    assert sorted(p.name for p in tmp_path.iterdir()) == ["p.toml"]


def test_not_utf8_is_said(tmp_path: Path) -> None:
    path = tmp_path / "p.toml"
    path.write_bytes(b'title = "\xff"')
    done = run("check", path)
    assert (done.returncode, "not UTF-8 text (byte 10)" in done.stderr) == (2, True)


@pytest.mark.skipif(os.name == "nt" or os.geteuid() == 0, reason="root may write anywhere")
def test_a_read_only_folder_is_said(protocol: Path, tmp_path: Path) -> None:
    locked = tmp_path / "locked"
    locked.mkdir(mode=0o500)
    done = run("rehearse", protocol, "--out", locked / "o")
    assert (done.returncode, "nothing can be written there" in done.stderr) == (2, True)


def test_faults_are_listed() -> None:
    done = run("faults")
    assert done.returncode == 0
    assert "corrupt_bytes" in done.stdout


def test_verify_finds_a_mismatch_with_6(short_record: Path, tmp_path: Path) -> None:
    copy = tmp_path / "session.sqlite"
    copy.write_bytes(short_record.read_bytes())
    done = run("verify", copy, "--json")
    assert done.returncode == 6
    assert json.loads(done.stdout)["findings"] == ["session.sha256 is not beside the closed record"]


@pytest.mark.parametrize("which", ["protocol", "rig", "sim"])
def test_schemas_are_printed(which: str) -> None:
    assert "properties" in json.dumps(json.loads(run("schema", which).stdout))


def test_every_knob_of_the_simulated_rig_is_described() -> None:
    made = json.loads(run("schema", "sim").stdout)
    knobs = [
        (name, key, knob)
        for name, table in made["$defs"].items()
        for key, knob in table.get("properties", {}).items()
        if "$ref" not in json.dumps(knob)
    ]
    assert len(knobs) > 30
    assert [(n, k) for n, k, knob in knobs if "description" not in json.dumps(knob)] == []


def test_check_compiles_every_arm_of_an_across_cells_protocol() -> None:
    made = json.loads(run("check", EXAMPLES / "across_cells.toml", "--json").stdout)
    assert [a["dt_ms"] for a in made["arms"]] == [-60, -30, -15, -5, 5, 15, 30, 60]
    assert len({a["plan_hash"] for a in made["arms"]}) == 8
    assert made["arms"][0]["plan_hash"] == made["plan_hash"]
    shown = run("check", EXAMPLES / "across_cells.toml").stdout
    assert "+60 ms" in shown
