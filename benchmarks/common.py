"""What the benchmarks share: sessions in processes of their own, and the bare loop beside them."""

from __future__ import annotations

import json
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path
from typing import NamedTuple

import msgspec

ROOT = Path(__file__).parents[1]

_SESSION = """
import json, resource, sys, time
from pathlib import Path
from rigctl.backends.base import OpenOptions
from rigctl.execute import execute, prepare

protocol, rig, out, faults = sys.argv[1:]
prepared = prepare(Path(protocol), Path(rig) if rig else None)
began = time.perf_counter()
ended = execute(prepared, Path(out), OpenOptions(1, faults))
seconds = time.perf_counter() - began
peak_mb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(json.dumps({"seconds": seconds, "peak_mb": peak_mb, "ended": ended.how}))
"""


class Run(NamedTuple):
    """One session in a process of its own."""

    seconds: float
    process_seconds: float
    peak_mb: float
    record: Path


def session(protocol: Path, out: Path, rig: Path | None = None, faults: str = "") -> Run:
    """Run a session; ``seconds`` leaves out the start of Python and the imports."""
    began = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-c", _SESSION, str(protocol), str(rig or ""), str(out), faults],
        capture_output=True,
        text=True,
        check=True,
    )
    process_seconds = time.perf_counter() - began
    told = json.loads(done.stdout)
    assert told["ended"] == "as_planned", told
    return Run(told["seconds"], process_seconds, told["peak_mb"], out / "session.sqlite")


def bare_loop(record: Path) -> tuple[float, int]:
    """Return the seconds of a loop that decodes and encodes every event of a record, and their
    number: what the events alone would cost, without box, cell, link, rules or disk.
    """
    with closing(sqlite3.connect(record)) as db:
        bodies = [row[0] for row in db.execute("SELECT body FROM event ORDER BY seq")]
    began = time.perf_counter()
    for body in bodies:
        msgspec.json.encode(msgspec.json.decode(body))
    return time.perf_counter() - began, len(bodies)
