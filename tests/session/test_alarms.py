"""Alarms: at their thresholds, and once each."""

from __future__ import annotations

from rigctl.session.alarms import AlarmBook
from rigctl.session.ledger import JudgedPairing
from rigctl.session.rows import PairFate
from tests.conftest import make_plan

PLAN = make_plan()


def _judge(book: AlarmBook, fates: list[PairFate], error_ms: float = 0.0) -> list[str]:
    names = []
    for n, fate in enumerate(fates, 1):
        errors = [round(error_ms * 1e6)] if fate == "on_target" else []
        names += [name for name, _ in book.pairing_judged(n, JudgedPairing([], fate, errors))]
    return names


def test_misses_alarm_above_five_per_cent_and_from_twenty_on() -> None:
    good: list[PairFate] = ["on_target"]
    assert _judge(AlarmBook(PLAN), ["no_post", *good * 19]) == []
    assert _judge(AlarmBook(PLAN), ["no_post", "no_pre", *good * 17]) == []
    assert _judge(AlarmBook(PLAN), ["no_post", "no_pre", *good * 18]) == ["misses"]
    assert _judge(AlarmBook(PLAN), [*good * 97, *["no_post"] * 3]) == []
    assert _judge(AlarmBook(PLAN), ["no_post"] * 50) == ["misses"]


def test_off_target_alarms_on_the_median_of_five() -> None:
    assert _judge(AlarmBook(PLAN), ["on_target"] * 9, 2.0) == []
    assert _judge(AlarmBook(PLAN), ["on_target"] * 4, 2.1) == []
    assert _judge(AlarmBook(PLAN), ["on_target"] * 9, -2.1) == ["off_target"]


def test_the_washout_alarm_counts_from_break_in() -> None:
    # The rehearsal rig: one minute before the plan, an induction must start within eight.
    minute = 60_000_000_000
    induction = PLAN.phases[1]
    for wait_min, alarms in ((6.99, False), (7.01, True)):
        book = AlarmBook(PLAN)
        assert book.phase_begins(PLAN.phases[0], 0) is None
        raised = book.phase_begins(induction, round(wait_min * minute))
        assert (raised is not None and raised[0] == "washout") is alarms
