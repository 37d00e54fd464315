"""What an idle session costs: a keep-alive through the simulated wire into the box, and a sweep."""

from __future__ import annotations

import heapq
import statistics
import sys
import time
from collections.abc import Callable

import numpy as np
from common import ROOT

from rigctl.backends.base import OpenOptions
from rigctl.execute import prepare
from rigctl.link import messages as msg
from rigctl.link.frames import encode_frame
from rigctl_sim.backend import SimBackend
from rigctl_sim.knobs import ScriptedKnobs
from rigctl_sim.scripted import PulseLine, ScriptedCell

ROUNDS = 7
FRAMES = 10_000
SWEEPS = 100
SAMPLES = 6_000
S = 1_000_000_000


def keep_alives() -> None:
    """Send a frame every 100 ms of virtual time."""
    prepared = prepare(ROOT / "examples/pre_post.toml", None)
    link = SimBackend().open(prepared.rig, prepared.plan, OpenOptions(1)).link
    frame = encode_frame(msg.encode(msg.KeepAlive()))
    link.wait(S)
    for n in range(FRAMES):
        link.write(frame)
        link.wait(S + n * S // 10)


def bare_heap() -> None:
    """Pass the same two events a frame through a heap, and do nothing."""
    heap: list[tuple[int, int]] = []
    for n in range(2 * FRAMES):
        heapq.heappush(heap, (n * S // 20, n))
        heapq.heappop(heap)


def sweeps() -> None:
    """Render sweeps with an EPSP, a step and a spike in each."""
    lines = {
        "step1": PulseLine(-20.0, False, 0, 0),
        "post1": PulseLine(1500.0, True, 3_000_000, 200_000),
    }
    cell = ScriptedCell(ScriptedKnobs(), lines, 10, seed=1)
    for n in range(1, SWEEPS + 1):
        cell.epsp(n * S, "s1", 1.0)
        cell.current(n * S, 2_000_000, "post1")
        cell.current(n * S + 100_000_000, 300_000_000, "step1")
        while cell.advance(n * S + S // 2) is not None:
            pass
        cell.trace_mv(n * S - 50_000_000, SAMPLES, 10_000.0)
        cell.forget(n * S + S // 2)


def bare_noise() -> None:
    """Draw the same number of samples of noise, and do nothing."""
    rng = np.random.default_rng(1)
    for _ in range(SWEEPS):
        rng.standard_normal(SAMPLES, dtype=np.float32)


def _compare(name: str, ours: Callable[[], None], limit: Callable[[], None], count: int) -> None:
    pairs = []
    for _ in range(ROUNDS + 1):
        seconds = []
        for work in (ours, limit):
            began = time.thread_time()
            work()
            seconds.append(time.thread_time() - began)
        pairs.append(seconds)
    a, b = (statistics.median(side) / count * 1e6 for side in zip(*pairs[1:], strict=True))
    ratio = statistics.median(x / y for x, y in pairs[1:])
    print(f"{name:34} {a:7.1f} µs   limit {b:6.1f} µs   ratio {ratio:5.1f}")


def main() -> None:
    """Print a line for each, processor time."""
    _compare("keep-alive, wire and box", keep_alives, bare_heap, FRAMES)
    _compare(f"sweep of {SAMPLES} samples, scripted", sweeps, bare_noise, SWEEPS)
    assert "numba" not in sys.modules


if __name__ == "__main__":
    main()
