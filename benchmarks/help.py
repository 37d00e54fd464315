"""``pairctl --help`` against the cost of importing click: whole processes, paired."""

from __future__ import annotations

import statistics
import subprocess
import sys
import time

ROUNDS = 15
OURS = [sys.executable, "-m", "rigctl", "--help"]
LIMIT = [sys.executable, "-c", "import click"]


def _seconds(command: list[str]) -> float:
    began = time.perf_counter()
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL)
    return time.perf_counter() - began


def main() -> None:
    """Print both medians and the median of the pairs' ratios."""
    pairs = [(_seconds(OURS), _seconds(LIMIT)) for _ in range(ROUNDS + 1)][1:]
    ours, limit = (statistics.median(side) for side in zip(*pairs, strict=True))
    ratio = statistics.median(a / b for a, b in pairs)
    print(
        f"pairctl --help {ours * 1000:.0f} ms, import click {limit * 1000:.0f} ms, "
        f"ratio {ratio:.2f}"
    )


if __name__ == "__main__":
    main()
