"""A rehearsal that is killed leaves a record that says how far it came."""

from __future__ import annotations

import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from rigctl.record.verify import verify
from tests.conftest import EXAMPLES


def _kill_when(folder: Path, size: int, how: signal.Signals) -> int:
    """Kill a rehearsal once its record (with its journal) has grown to ``size`` bytes."""
    process = subprocess.Popen(
        [sys.executable, "-m", "rigctl", "rehearse", str(EXAMPLES / "pre_post.toml"),
         "--out", str(folder), "--json"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    files = [folder / "session.sqlite", folder / "session.sqlite-wal"]
    while process.poll() is None:
        if sum(f.stat().st_size for f in files if f.exists()) >= size:
            process.send_signal(how)
            break
        time.sleep(0.001)  # another process's progress; nothing here asserts a time
    process.communicate()
    return process.returncode


def _check(folder: Path, size: int, how: signal.Signals) -> None:
    code = _kill_when(folder, size, how)
    verdict = verify(folder / "session.sqlite")
    assert verdict.findings == []
    assert verdict.decisions == []
    if code == 0:
        pytest.skip("it had finished before it could be killed")
    assert verdict.status == "open"
    assert verdict.events > 0
    assert not (folder / "report.html").exists()
    assert not (folder / "session.sha256").exists()
    assert code == (4 if how is signal.SIGINT else -how)


@pytest.mark.skipif(sys.platform == "win32", reason="signals are sent differently there")
@pytest.mark.parametrize(
    ("size", "how"),
    [
        (700_000, signal.SIGKILL),
        (2_500_000, signal.SIGKILL),
        (4_000_000, signal.SIGKILL),
        (1_500_000, signal.SIGINT),
    ],
)
def test_a_killed_rehearsal_leaves_an_open_record_that_verifies(
    size: int, how: signal.Signals, tmp_path: Path
) -> None:
    _check(tmp_path / "out", size, how)


@pytest.mark.soak
@pytest.mark.skipif(sys.platform == "win32", reason="signals are sent differently there")
@pytest.mark.parametrize("n", range(40))
def test_killed_at_forty_random_places(n: int, tmp_path: Path) -> None:
    size = random.Random(n).randrange(200_000, 5_000_000)
    _check(tmp_path / "out", size, signal.SIGKILL)
