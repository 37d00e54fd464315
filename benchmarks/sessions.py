"""The standard session on each cell: seconds, beside a bare loop over the same events."""

from __future__ import annotations

import statistics
import tempfile
from pathlib import Path

from common import ROOT, bare_loop, session

ROUNDS = 5
# The limits that we set ourselves, seconds on two cores.
LIMIT_S = {"scripted": 1.5, "conductance": 6.0}


def main() -> None:
    """Print a line for each cell."""
    protocol = ROOT / "examples/pre_post.toml"
    rigs = {"scripted": None, "conductance": ROOT / "examples/rigs/conductance.toml"}
    print(f"standard session, 42.2 min, {ROUNDS} rounds after a warm-up, medians")
    with tempfile.TemporaryDirectory() as folder:
        runs: dict[str, list[float]] = {name: [] for name in rigs}
        loops: dict[str, list[float]] = {name: [] for name in rigs}
        for n in range(ROUNDS + 1):
            for name, rig in rigs.items():
                run = session(protocol, Path(folder) / f"{name}{n}", rig)
                if n:
                    runs[name].append(run.seconds)
                    loops[name].append(bare_loop(run.record)[0])
        for name in rigs:
            seconds, loop = statistics.median(runs[name]), statistics.median(loops[name])
            print(
                f"{name:12} {seconds:6.2f} s "
                f"(min {min(runs[name]):.2f}, max {max(runs[name]):.2f}; "
                f"aim {LIMIT_S[name]:.1f})   bare loop {loop * 1000:6.1f} ms   "
                f"ratio {seconds / loop:6.0f}   {2532 / seconds:6.0f} × real time"
            )


if __name__ == "__main__":
    main()
