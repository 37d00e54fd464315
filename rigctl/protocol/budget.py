"""How many triggers a protocol makes, counted before any of them is made."""

from __future__ import annotations

from rigctl.errors import InputError
from rigctl.protocol import patterns
from rigctl.protocol.schema import Block, Induction, Pairings, Poisson, Protocol, TestSeries

MOST_TRIGGERS = 500_000


class TriggerBudget:
    """Adds up, and refuses what would be far too long with the key that makes it so."""

    def __init__(self, where: str) -> None:
        self._where = where
        self._total = 0

    def count(self, protocol: Protocol) -> None:
        """Count all that is known without compiling: everything but tests beside an induction."""
        for n, phase in enumerate(protocol.phases, 1):
            if isinstance(phase, Induction):
                for m, block in enumerate(phase.blocks, 1):
                    self._block(block, f"phase[{n}].block[{m}]")
            else:
                for m, test in enumerate(phase.tests, 1):
                    end_ns = round(phase.duration_min * 60e9)
                    self.tests(test, end_ns, test.step is not False, f"phase[{n}].test[{m}]")

    def tests(self, test: TestSeries, end_ns: int, with_step: bool, path: str) -> None:
        """Count a test series that goes on until ``end_ns``."""
        every_ns = test.every_s * 1e9
        times = max(0, int((end_ns - test.first_at_s * 1e9) / every_ns) + 1)
        self._take(times * (2 if with_step else 1), f"{path}.every_s", test.every_s)

    def _block(self, block: Block, path: str) -> None:
        if isinstance(block, Pairings):
            makes = block.pairings * patterns.events_per_pairing(block)
            self._take(makes, f"{path}.pairings", block.pairings)
        elif isinstance(block, Poisson):
            makes = round(block.duration_s * (block.pre_rate_hz + block.post_rate_hz))
            self._take(makes, f"{path}.duration_s", block.duration_s)

    def _take(self, makes: int, key: str, value: object) -> None:
        if makes > MOST_TRIGGERS:
            allowed = f"makes {makes:,} triggers; a plan has at most {MOST_TRIGGERS:,}"
            raise InputError.at(self._where, key, value, allowed)
        self._total += makes
        if self._total > MOST_TRIGGERS:
            raise InputError(
                f"{self._where}: {key}: {self._total:,} triggers up to here; a plan has at most "
                f"{MOST_TRIGGERS:,}."
            )
