"""The forecast: what the rules make of the spikes that were delivered and detected so far.

The band holds what the times leave open: derived pre events may all be off by the uncertainty of
their latency, and events of which nobody knows may have happened or not. It does *not* hold how
well a rule or its parameters fit this preparation; nothing here can know that.
"""

from __future__ import annotations

import copy
import heapq
from collections.abc import Iterable, Mapping, Sequence

from msgspec import Struct

from rigctl.plasticity.rules import PairRule, rule
from rigctl.protocol.plan import RuleChoice

_SHIFTS = (0.0, -1.0, -0.5, 0.5, 1.0)


class ForecastValue(Struct, frozen=True):
    """The predicted relative change of one pathway by one rule, with its band."""

    pathway: str
    rule: str
    parameter_set: str
    change: float
    low: float
    high: float


class _Variant:
    """One rule told one version of the times; spikes wait until no earlier one can come."""

    def __init__(self, made: PairRule, shift_ns: int) -> None:
        self.rule = made
        self._shift_ns = shift_ns
        self._waiting: list[tuple[int, int]] = []

    def tell(self, at_ns: int, is_post: bool) -> None:
        if is_post:
            heapq.heappush(self._waiting, (at_ns, 1))
        else:
            heapq.heappush(self._waiting, (at_ns + self._shift_ns, 0))

    def advance(self, through_ns: int) -> None:
        waiting = self._waiting
        while waiting and waiting[0][0] <= through_ns:
            at_ns, is_post = heapq.heappop(waiting)
            (self.rule.post if is_post else self.rule.pre)(at_ns / 1e9)


class _Cell:
    """One rule on one pathway, in all its variants."""

    def __init__(self, choice: RuleChoice, pathway: str, bound_ns: int) -> None:
        self.choice = choice
        self.pathway = pathway
        self.bound_ns = bound_ns
        shifts = _SHIFTS if bound_ns else _SHIFTS[:1]
        self._known = [
            _Variant(rule(choice.rule, **choice.parameters), round(s * bound_ns)) for s in shifts
        ]
        # The same with unknown events counted in; the two differ from the first such event on.
        self._with_unknown: list[_Variant] | None = None

    def tell(self, at_ns: int, is_post: bool, known: bool) -> None:
        if not known and self._with_unknown is None:
            self._with_unknown = copy.deepcopy(self._known)
        if known:
            for variant in self._known:
                variant.tell(at_ns, is_post)
        for variant in self._with_unknown or ():
            variant.tell(at_ns, is_post)

    def advance(self, through_ns: int) -> None:
        for variant in (*self._known, *(self._with_unknown or ())):
            variant.advance(through_ns)

    def value(self) -> ForecastValue:
        changes = [v.rule.change for v in (*self._known, *(self._with_unknown or ()))]
        return ForecastValue(
            self.pathway,
            self.choice.rule,
            self.choice.parameter_set,
            changes[0],
            min(changes),
            max(changes),
        )


class Forecaster:
    """Runs rules on spikes as they become known.

    Parameters
    ----------
    choices : sequence of RuleChoice
    pathways : sequence of str
        One forecast for each: its own pre events, every post spike.
    pre_bound_ns : mapping of str to int
        By pathway: how far its pre times may be off, all together.
    """

    def __init__(
        self,
        choices: Sequence[RuleChoice],
        pathways: Sequence[str],
        pre_bound_ns: Mapping[str, int],
    ) -> None:
        self._cells = [_Cell(c, p, pre_bound_ns.get(p, 0)) for c in choices for p in pathways]

    def pre(self, pathway: str, at_ns: int, known: bool = True) -> None:
        """A pre event of ``pathway``; ``known=False`` when nobody knows whether it happened."""
        for cell in self._cells:
            if cell.pathway == pathway:
                cell.tell(at_ns, False, known)

    def post(self, at_ns: int, known: bool = True) -> None:
        """A post spike: it counts for every pathway."""
        for cell in self._cells:
            cell.tell(at_ns, True, known)

    def advance(self, through_ns: int) -> None:
        """Everything up to ``through_ns`` has been told.

        Spikes nearer to it than a pathway's bound wait: a shifted one might still come first.
        """
        for cell in self._cells:
            cell.advance(through_ns - cell.bound_ns)

    def finish(self) -> None:
        """No spike will come any more."""
        for cell in self._cells:
            cell.advance(1 << 62)

    def read(self) -> list[ForecastValue]:
        """Return the forecasts so far."""
        return [cell.value() for cell in self._cells]


def as_planned(
    choices: Sequence[RuleChoice], events: Iterable[tuple[int, str, str | None]]
) -> list[ForecastValue]:
    """Return what the rules make of a finished list of spikes.

    Parameters
    ----------
    choices : sequence of RuleChoice
    events : iterable of (at_ns, side, pathway)
        ``side`` is ``"pre"`` or ``"post"``; the pathway of a post spike is ignored.
    """
    told = list(events)
    pathways = sorted({p for _, side, p in told if side == "pre" and p is not None})
    forecaster = Forecaster(choices, pathways, {})
    for at_ns, side, pathway in told:
        if side == "post":
            forecaster.post(at_ns)
        elif pathway is not None:
            forecaster.pre(pathway, at_ns)
    forecaster.finish()
    return forecaster.read()


def extrapolates(choice: RuleChoice, pairings: int) -> str | None:
    """Return the sentence when there are more pairings than the set's source had, else None."""
    if choice.source_pairings is None or pairings <= choice.source_pairings:
        return None
    return (
        f"{pairings} pairings extrapolate: {choice.parameter_set} comes from "
        f"{choice.source_pairings} pairings"
    )
