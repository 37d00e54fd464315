"""What holds for every plan."""

from __future__ import annotations

from itertools import pairwise

from rigctl.protocol.plan import Plan


def check_plan(plan: Plan) -> None:
    """Assert that a plan is numbered, sorted, on the grid, free of overlaps and true to its Δt."""
    lines = {line.name: line for line in plan.lines}
    ids = [t.id for phase in plan.phases for t in phase.triggers]
    assert ids == list(range(1, len(ids) + 1))
    pairings = [p.id for phase in plan.phases for p in phase.pairings]
    assert pairings == list(range(1, len(pairings) + 1))
    for phase in plan.phases:
        by_id = {t.id: t for t in phase.triggers}
        free_ns: dict[str, int] = {}
        for before, after in pairwise(phase.triggers):
            assert (before.at_ns, before.line) <= (after.at_ns, after.line)
        for t in phase.triggers:
            assert t.at_ns >= 0
            assert t.at_ns % plan.tick_ns == 0
            assert t.at_ns >= free_ns.get(t.line, 0)
            free_ns[t.line] = t.at_ns + t.width_ns
            assert t.at_ns + t.width_ns <= phase.duration_ns
        for pairing in phase.pairings:
            own = [t.at_ns for t in phase.triggers if t.pairing == pairing.id]
            assert (min(own), max(own)) == (pairing.first_ns, pairing.last_ns)
            named = {(pair.pre_trigger, pair.post_trigger) for pair in pairing.pairs}
            assert len(named) == len(pairing.pairs)
            targets = {pair.target_dt_ns for pair in pairing.pairs}
            assert pairing.target_dt_ns == (targets.pop() if len(targets) == 1 else None)
            for pair in pairing.pairs:
                pre, post = by_id[pair.pre_trigger], by_id[pair.post_trigger]
                assert (lines[pre.line].drives, lines[post.line].drives) == ("pre", "post")
                assert (pre.pairing, post.pairing) == (pairing.id, pairing.id)
                dt_ns = (post.at_ns + lines[post.line].latency_ns) - (
                    pre.at_ns + lines[pre.line].latency_ns
                )
                assert abs(dt_ns - pair.target_dt_ns) <= plan.tick_ns
                assert abs(pair.target_dt_ns) >= 1_000
        steps = [t for t in phase.triggers if lines[t.line].drives == "step"]
        for step in steps:
            for t in phase.triggers:
                if lines[t.line].drives != "step":
                    # Within a step there is no stimulus, nor in the 150 ms before it.
                    since_ns = step.at_ns - t.at_ns
                    assert not -step.width_ns < since_ns < 150_000_000 - plan.tick_ns
