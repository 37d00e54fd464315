"""What is awaited falls due in order; what has begun keeps spikes from being called unplanned."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from rigctl.session.agenda import Agenda, Presentation

presentations = st.lists(
    st.tuples(st.integers(0, 50), st.integers(0, 30)).map(
        lambda t: Presentation(t[0] + t[1], t[0], None)
    ),
    max_size=30,
)


@given(presentations, st.lists(st.integers(0, 90), max_size=8))
def test_against_a_naive_list(awaited: list[Presentation], times: list[int]) -> None:
    agenda = Agenda(awaited)
    left = sorted(awaited, key=lambda p: (p.due_ns, p.first_ns))
    for through in sorted(times):
        due = [p for p in left if p.due_ns <= through]
        left = [p for p in left if p.due_ns > through]
        assert agenda.take_due(through) == due
        assert agenda.rest() == left
        assert agenda.next_due_ns() == (left[0].due_ns if left else None)
        assert agenda.earliest_begin_ns() == min((p.first_ns for p in left), default=None)
        assert agenda.begun_before(through) == [p for p in left if p.first_ns < through]
