"""Collects the triggers of one phase, puts them on the tick grid, and refuses what collides."""

from __future__ import annotations

import itertools

from msgspec import Struct

from rigctl.errors import InputError
from rigctl.protocol.plan import PlanLine, PlanPairing, PlanSpikePair, PlanTrigger


class _Raw(Struct, gc=False):
    at_ns: int
    line: PlanLine
    pairing: int | None
    path: str
    id: int = 0


class Pulses(Struct, frozen=True):
    """The pulses of a pairing, ns from its zero.

    ``pairs`` holds (pulse of the pre event, pulse of the post event, target Δt in ns).
    """

    at: tuple[tuple[PlanLine, int], ...]
    pairs: tuple[tuple[int, int, int], ...]


class _RawPairing(Struct, gc=False):
    pathway: str
    block: int
    path: str
    raws: list[_Raw]
    pulses: Pulses
    may_interleave: bool
    first_ns: int
    last_ns: int


class PhaseBuilder:
    """Takes triggers and pairings in any order; :meth:`finish` sorts, numbers and checks them."""

    def __init__(self, tick_ns: int, min_spacing_ns: int, clear_ns: int, where: str) -> None:
        self._tick_ns = tick_ns
        self._min_spacing_ns = min_spacing_ns
        # A test step keeps this far from the stimulus before it.
        self._clear_ns = clear_ns
        self._where = where
        self._triggers: list[_Raw] = []
        self._pairings: list[_RawPairing] = []
        # The last trigger's edge, and when the last pulse is over.
        self.last_ns = 0
        self.free_ns = 0

    def _grid(self, at_ns: int) -> int:
        """Round half to even to the box's tick grid."""
        tick, rest = divmod(at_ns, self._tick_ns)
        if 2 * rest > self._tick_ns or (2 * rest == self._tick_ns and tick % 2):
            tick += 1
        return tick * self._tick_ns

    def trigger(self, line: PlanLine, at_ns: int, pairing: int | None, path: str) -> _Raw:
        """Add one pulse."""
        raw = _Raw(self._grid(at_ns), line, pairing, path)
        self._triggers.append(raw)
        if raw.at_ns > self.last_ns:
            self.last_ns = raw.at_ns
        if raw.at_ns + line.width_ns > self.free_ns:
            self.free_ns = raw.at_ns + line.width_ns
        return raw

    def pairing(
        self,
        pathway: str,
        block: int,
        path: str,
        zero_ns: int,
        pulses: Pulses,
        step: PlanLine | None,
        step_after_ns: int,
        may_interleave: bool = False,
    ) -> None:
        """Add one pairing with its pulses; many may share one ``pulses``."""
        number = len(self._pairings)
        trigger = self.trigger
        raws = [trigger(line, zero_ns + at_ns, number, path) for line, at_ns in pulses.at]
        times = [raw.at_ns for raw in raws]
        last_ns = max(times)
        self._pairings.append(
            _RawPairing(pathway, block, path, raws, pulses, may_interleave, min(times), last_ns)
        )
        if step is not None:
            trigger(step, last_ns + step_after_ns, None, path)

    def finish(
        self, first_trigger: int, first_pairing: int
    ) -> tuple[tuple[PlanTrigger, ...], tuple[PlanPairing, ...]]:
        """Return the phase's triggers and pairings, numbered in the order of time."""
        self._triggers.sort(key=lambda raw: (raw.at_ns, raw.line.name))
        self._check_lines()
        self._check_steps()
        order = sorted(range(len(self._pairings)), key=lambda n: self._pairings[n].first_ns)
        self._check_pairings(order)
        ids = {n: first_pairing + k for k, n in enumerate(order)}
        triggers = []
        for k, raw in enumerate(self._triggers):
            raw.id = first_trigger + k
            triggers.append(
                PlanTrigger(
                    raw.id,
                    raw.line.name,
                    raw.at_ns,
                    raw.line.width_ns,
                    None if raw.pairing is None else ids[raw.pairing],
                    raw.line.pathway,
                )
            )
        pairings = []
        for n in order:
            raw_pairing = self._pairings[n]
            raws, given = raw_pairing.raws, raw_pairing.pulses.pairs
            pairs = tuple(
                [
                    PlanSpikePair(k, raws[i].id, raws[j].id, target_dt_ns)
                    for k, (i, j, target_dt_ns) in enumerate(given, 1)
                ]
            )
            targets = {target_dt_ns for _, _, target_dt_ns in given}
            pairings.append(
                PlanPairing(
                    ids[n],
                    raw_pairing.pathway,
                    raw_pairing.block,
                    targets.pop() if len(targets) == 1 else None,
                    raw_pairing.first_ns,
                    raw_pairing.last_ns,
                    pairs,
                )
            )
        return tuple(triggers), tuple(pairings)

    def _check_lines(self) -> None:
        """Refuse a pulse inside another and a spacing under the box's, line by line."""
        last: dict[str, _Raw] = {}
        for raw in self._triggers:
            before = last.get(raw.line.name)
            last[raw.line.name] = raw
            if before is None:
                continue
            gap_ns = raw.at_ns - before.at_ns
            if gap_ns < before.line.width_ns:
                raise InputError(
                    f"{self._where}: {raw.path}: a pulse on {raw.line.name} at "
                    f"{raw.at_ns / 1e6:.3f} ms of the phase begins inside another "
                    f"({before.path}, {before.at_ns / 1e6:.3f} ms, {before.line.width_ns / 1e6:g} "
                    "ms long); pulses on a line must not overlap."
                )
            if gap_ns < self._min_spacing_ns:
                raise InputError(
                    f"{self._where}: {raw.path}: two pulses on {raw.line.name} are "
                    f"{gap_ns / 1e3:g} us apart at {raw.at_ns / 1e6:.3f} ms of the phase; the box "
                    f"needs {self._min_spacing_ns / 1e3:g} us."
                )

    def _check_steps(self) -> None:
        """Refuse a test step in the response to a stimulus, whoever gave that."""
        step: _Raw | None = None
        stimulus: _Raw | None = None
        for raw in self._triggers:
            over: tuple[_Raw, _Raw] | None = None
            if raw.line.drives == "step":
                step = raw
                # Each was rounded to the grid by itself.
                if stimulus and raw.at_ns < stimulus.at_ns + self._clear_ns - self._tick_ns:
                    over = step, stimulus
            else:
                stimulus = raw
                if step and raw.at_ns < step.at_ns + step.line.width_ns:
                    over = step, stimulus
            if over:
                at_ms, by_ms = over[0].at_ns / 1e6, over[1].at_ns / 1e6
                raise InputError(
                    f"{self._where}: {over[0].path}: the test step at {at_ms:.3f} ms of the phase "
                    f"meets the response to {over[1].line.name} at {by_ms:.3f} ms "
                    f"({over[1].path}): set step = false, or leave {self._clear_ns / 1e6:g} ms "
                    f"before a step and its {over[0].line.width_ns / 1e6:g} ms free."
                )

    def _check_pairings(self, order: list[int]) -> None:
        """Refuse pairings that begin before the one before has had its last trigger."""
        by_time = [self._pairings[n] for n in order]
        for before, after in itertools.pairwise(by_time):
            if after.may_interleave and before.may_interleave:
                continue
            if after.first_ns <= before.last_ns:
                length_ms = (before.last_ns - before.first_ns) / 1e6
                raise InputError(
                    f"{self._where}: {after.path}: a pairing of {length_ms:g} ms is not over when "
                    f"the next begins, {(after.first_ns - before.first_ns) / 1e6:g} ms after it; "
                    "lower rate_hz or shorten the pattern."
                )
