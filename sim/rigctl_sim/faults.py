"""Faults to inject into a rehearsal: ``--faults creep_ms=3,misses=8``.

Each is drawn from the world's seed, so that the same seed fails in the same way.
"""

from __future__ import annotations

import math

from msgspec import Struct, structs

from rigctl.errors import InputError, nearest
from rigctl.protocol.plan import Plan
from rigctl_sim.knobs import SimKnobs
from rigctl_sim.streams import stream

_KEYS: dict[str, tuple[str, str, bool, float, float]] = {
    # key: (unit, what, whole number, least, most)
    "creep_ms": ("ms", "spike latency creeps by this over the induction", False, -20, 20),
    "misses": ("count", "spike pulses of the induction that evoke no spike", True, 0, 1e6),
    "doublets": ("count", "spike pulses of the induction that evoke two", True, 0, 1e6),
    "jitter_ms": ("ms", "SD of the spike latency instead of the rig file's", False, 0, 20),
    "spontaneous_hz": ("Hz", "spontaneous spikes", False, 0, 100),
    "ppm": ("ppm", "how much too fast the box's clock runs", False, -5_000, 5_000),
    "corrupt_bytes": ("count", "bytes flipped on the link, either way", True, 0, 1e6),
    "drop_bytes": ("count", "bytes lost on the link, either way", True, 0, 1e6),
    "stall_ms": (
        "ms",
        "the link stands still once; beyond 250 ms the box disarms itself",
        False,
        0,
        60_000,
    ),
    "box_reset_at_s": ("s", "the box starts anew, this long into the session", False, 0, 1e6),
    "cable_pull_at_s": ("s", "the link goes dead, this long into the session", False, 0, 1e6),
}


class Faults(Struct, frozen=True):
    """What was asked for; None where nothing was."""

    creep_ms: float | None = None
    misses: int | None = None
    doublets: int | None = None
    jitter_ms: float | None = None
    spontaneous_hz: float | None = None
    ppm: float | None = None
    corrupt_bytes: int | None = None
    drop_bytes: int | None = None
    stall_ms: float | None = None
    box_reset_at_s: float | None = None
    cable_pull_at_s: float | None = None


def describe() -> list[tuple[str, str, str]]:
    """Return (key, unit, what it does) for every fault."""
    return [(key, unit, what) for key, (unit, what, *_) in _KEYS.items()]


def parse(spec: str) -> Faults:
    """Return the faults of a specification like ``creep_ms=3,misses=8``.

    Raises
    ------
    InputError
        Unknown key, not a number, or out of range: one sentence.
    """
    given: dict[str, float | int] = {}
    for part in filter(None, (p.strip() for p in spec.split(","))):
        key, equals, text = part.partition("=")
        if key not in _KEYS:
            hint = nearest(key, list(_KEYS))
            known = "" if hint else f"; known: {', '.join(_KEYS)}."
            raise InputError(f"--faults: {key}: there is no such fault{hint}{known}")
        unit, _, whole, least, most = _KEYS[key]
        kind = "a whole number" if whole else "a number"
        try:
            value: float | int = int(text) if whole else float(text)
        except ValueError:
            value = math.nan
        if not (equals and least <= value <= most):
            raise InputError(
                f"--faults: {part}: {kind} from {least:g} to {most:g} ({unit}) is needed after "
                f"{key}=."
            )
        given[key] = value
    return Faults(**given)  # type: ignore[arg-type]


def spike_pulses(plan: Plan, induction_only: bool) -> list[int]:
    """Return the ordinals (from 1, over the plan) of the pulses that should evoke a spike."""
    evokes = {line.name for line in plan.lines if line.evokes_spike}
    ordinals, count = [], 0
    for phase in plan.phases:
        for trigger in phase.triggers:
            if trigger.line in evokes:
                count += 1
                if phase.kind == "induction" or not induction_only:
                    ordinals.append(count)
    return ordinals


def plant(faults: Faults, knobs: SimKnobs, plan: Plan, seed: int) -> SimKnobs:
    """Return the knobs with the cell's and the clock's faults set in them."""
    scripted = knobs.scripted
    pulses = spike_pulses(plan, induction_only=True)
    wanted = (faults.misses or 0) + (faults.doublets or 0)
    if wanted > len(pulses):
        raise InputError(
            f"--faults: misses and doublets: {wanted} in all; the induction has {len(pulses)} "
            "spike pulses."
        )
    if wanted:
        drawn = [int(n) for n in stream(seed, "planted").choice(pulses, wanted, replace=False)]
        scripted = structs.replace(
            scripted,
            miss_at=sorted([*scripted.miss_at, *drawn[: faults.misses or 0]]),
            doublet_at=sorted([*scripted.doublet_at, *drawn[faults.misses or 0 :]]),
        )
    if faults.creep_ms is not None:
        scripted = structs.replace(scripted, creep_ms=faults.creep_ms)
    if faults.spontaneous_hz is not None:
        scripted = structs.replace(scripted, spontaneous_hz=faults.spontaneous_hz)
    only_scripted = [
        key
        for key in ("creep_ms", "misses", "doublets", "jitter_ms", "spontaneous_hz")
        if getattr(faults, key) is not None
    ]
    if only_scripted and knobs.cell != "scripted":
        raise InputError(
            f"--faults: {only_scripted[0]}: only the scripted cell can be told that; the rig "
            f'file says cell = "{knobs.cell}".'
        )
    clock = knobs.clock
    if faults.ppm is not None:
        clock = structs.replace(clock, ppm=faults.ppm)
    return structs.replace(knobs, scripted=scripted, clock=clock)


class WireFaults:
    """Damages chunks on the wire, the first one in its direction after each drawn time; and
    keeps both directions standing still for one stretch.
    """

    def __init__(self, faults: Faults, duration_ns: int, seed: int) -> None:
        rng = stream(seed, "wire faults")
        self._due: dict[bool, list[tuple[int, str, float]]] = {True: [], False: []}
        for what, count in (("flip", faults.corrupt_bytes), ("drop", faults.drop_bytes)):
            for n in range(count or 0):
                # Begin after the first seconds, so that there is something to damage.
                at_ns = round(rng.uniform(0.02, 0.95) * duration_ns)
                self._due[n % 2 == 0].append((at_ns, what, float(rng.random())))
        for due in self._due.values():
            due.sort(reverse=True)
        self.stall_from_ns = round(rng.uniform(0.3, 0.7) * duration_ns)
        self.stall_to_ns = self.stall_from_ns + round((faults.stall_ms or 0) * 1e6)

    def on_the_way(self, data: bytes, to_box: bool, at_ns: int) -> bytes:
        """Return ``data`` as it arrives."""
        due = self._due[to_box]
        while due and due[-1][0] <= at_ns and data:
            _, what, where = due.pop()
            at = int(where * len(data))
            if what == "flip":
                data = data[:at] + bytes([data[at] ^ 1 << at % 8]) + data[at + 1 :]
            else:
                data = data[:at] + data[at + 1 :]
        return data
