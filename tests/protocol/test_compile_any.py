"""Whatever is asked for: a sound plan, or one sentence. Nothing in between."""

from __future__ import annotations

import copy
import re
from typing import Any

import msgspec
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.errors import InputError
from rigctl.protocol import budget
from rigctl.protocol.checks import check_protocol
from rigctl.protocol.compile import compile_plan
from rigctl.protocol.load import parse_protocol, parse_rig
from rigctl.protocol.plan import Plan
from rigctl.protocol.rig import Rig
from rigctl.protocol.schema import Protocol
from tests.conftest import RIG_TEXT, SHORT, make_plan, make_rig
from tests.protocol.sound import check_plan

PERFORATED = make_rig(replace={'access = "ruptured"': 'access = "perforated"'})


def _maybe(key: str, values: st.SearchStrategy[Any]) -> st.SearchStrategy[dict[str, Any]]:
    return st.one_of(st.just({}), st.builds(lambda value: {key: value}, values))


def _joined(*parts: st.SearchStrategy[dict[str, Any]]) -> st.SearchStrategy[dict[str, Any]]:
    return st.tuples(*parts).map(lambda dicts: {k: v for d in dicts for k, v in d.items()})


MS = st.sampled_from([-60.0, -8.0, -0.8, -0.0015, 0.001, 0.8, 2.0, 6.0, 10.0, 50.0])
TIMES = st.lists(st.sampled_from([0.0, 2.0, 5.0, 10.0, 26.0, 90.0]), max_size=4, unique=True).map(
    sorted
)
FORM = st.one_of(
    _joined(
        st.builds(lambda dt: {"dt_ms": dt}, MS),
        _maybe("pre_count", st.just(3)).map(lambda d: d | {"pre_rate_hz": 50} if d else d),
        _maybe("post_count", st.integers(2, 3)).map(lambda d: d | {"post_rate_hz": 80} if d else d),
    ),
    st.builds(lambda pre, post: {"pre_at_ms": pre, "post_at_ms": post}, TIMES, TIMES),
    st.builds(
        lambda low, high, gap: {
            "dt_random": {"low_ms": low, "high_ms": high, "min_abs_ms": gap}
        },
        MS, MS, st.sampled_from([0.0, 2.0, 5.9999]),
    ),
)  # fmt: skip
REPEAT = st.fixed_dictionaries(
    {"times": st.integers(1, 4), "every_ms": st.sampled_from([5.0, 50.0, 200.0])}
)
BLOCK = _joined(
    st.builds(
        lambda n, every: {"kind": "pairings", "pathway": "s1", "pairings": n, "every_s": every},
        st.integers(1, 6), st.sampled_from([0.05, 0.4, 1.0, 5.0]),
    ),
    FORM,
    _maybe("repeat", st.lists(REPEAT, max_size=2)),
    _maybe("deliver", st.sampled_from(["pre", "post"])),
    _maybe("post_line", st.just("post_weak")),
    _maybe("pre_line", st.just("pre1")),
    _maybe("step", st.booleans()),
    _maybe("after_s", st.sampled_from([0.0, 0.001, 2.0])),
    _maybe("offsets", st.just("triggers")),
    _maybe("spike_pairs", st.lists(st.tuples(st.integers(0, 3), st.integers(1, 3)).map(list),
                                   max_size=3)),
)  # fmt: skip
POISSON = st.fixed_dictionaries(
    {
        "kind": st.just("poisson"),
        "pathway": st.just("s1"),
        "duration_s": st.sampled_from([0.5, 10.0]),
        "pre_rate_hz": st.sampled_from([1.0, 10.0]),
        "post_rate_hz": st.sampled_from([1.0, 10.0]),
        "dead_time_ms": st.sampled_from([4.0, 0.01]),
        "shared_fraction": st.sampled_from([0.0, 0.5, 1.0]),
        "shared_dt_ms": MS,
    }
)
TEST = st.fixed_dictionaries(
    {
        "pathway": st.sampled_from(["s1", "s2"]),
        "every_s": st.sampled_from([0.5, 4.0]),
        "first_at_s": st.sampled_from([0.0, 0.25]),
        "step": st.booleans(),
    }
)
SERIES = {"pathway": "s2", "every_s": 4}
PROTOCOLS = st.builds(
    lambda blocks, beside, tests, seed: {
        "title": "any",
        "plan_seed": seed,
        "phase": [
            {"kind": "baseline", "duration_min": 0.1, "test": tests},
            {"kind": "induction", "block": blocks, "test": beside},
            {"kind": "follow_up", "duration_min": 0.1, "test": [SERIES]},
        ],
    },
    st.lists(st.one_of(BLOCK, POISSON), min_size=1, max_size=3),
    st.lists(TEST, max_size=1),
    st.lists(TEST, min_size=1, max_size=2),
    st.integers(0, 3),
)


def _compiled(raw: dict[str, Any]) -> Plan | str:
    """Return the plan, or the sentence that refuses it."""
    protocol = msgspec.convert(raw, Protocol)
    try:
        check_protocol(protocol, "p.toml")
        return compile_plan(protocol, PERFORATED, protocol_file="p.toml", rig_file="rig.toml")
    except InputError as error:
        return str(error)


@settings(max_examples=150, deadline=None)
@given(PROTOCOLS)
def test_a_sound_plan_or_one_sentence(raw: dict[str, Any]) -> None:
    made = _compiled(raw)
    if isinstance(made, Plan):
        check_plan(made)
    else:
        assert re.fullmatch(r"p\.toml: phase\[\d\].*\.", made)


# --- every value of the files that shapes a session is in the hash -----------------------------

RICH = SHORT.replace(
    "[[phase]]\nkind = \"baseline\"",
    "[judging]\non_target_within_ms = 2\n[gates]\nmin_sweeps = 12\n[[phase]]\nkind = \"baseline\"",
    1,
).replace(
    "pairings = 12\nrate_hz = 1",
    "pairings = 12\nrate_hz = 1\nafter_s = 1\nrepeat = [{ times = 2, every_ms = 50 }]\n"
    '[[phase.block]]\nkind = "pairings"\npathway = "s1"\npost_line = "post_weak"\ndt_ms = 5\n'
    "pairings = 2\nevery_s = 1",
)  # fmt: skip

# What names or describes and changes nothing that is delivered, judged or declared.
NOT_HASHED = {"name", "socket", "shows", "backend"}


def _leaves(value: Any, path: tuple[str | int, ...] = ()) -> list[tuple[str | int, ...]]:
    if isinstance(value, dict):
        return [leaf for k, inner in value.items() for leaf in _leaves(inner, (*path, k))]
    if isinstance(value, list):
        return [leaf for n, inner in enumerate(value) for leaf in _leaves(inner, (*path, n))]
    return [] if value is None or isinstance(value, str) else [path]


def _with(value: Any, path: tuple[str | int, ...]) -> Any:
    changed = copy.deepcopy(value)
    inner = changed
    for step in path[:-1]:
        inner = inner[step]
    old = inner[path[-1]]
    inner[path[-1]] = not old if isinstance(old, bool) else old + 1 if old >= 0 else old - 1
    return changed


def _hash(protocol: Protocol, rig: Rig) -> str:
    return compile_plan(protocol, rig, protocol_file="p", rig_file="r").hash()


# Only a line that drives post can evoke a spike or not.
_UNUSED = {("output", "pre1", "evokes_spike"), ("output", "pre2", "evokes_spike"),
           ("output", "step1", "evokes_spike")}  # fmt: skip


@pytest.mark.parametrize("which", ["protocol", "rig"])
def test_the_hash_sees_every_number_and_switch(which: str) -> None:
    protocol = parse_protocol(RICH, "p")
    rig = parse_rig(RIG_TEXT.replace('access = "ruptured"', 'access = "perforated"'), "r")
    before = _hash(protocol, rig)
    raw = msgspec.to_builtins(protocol if which == "protocol" else rig)
    blind, seen = [], 0
    for path in _leaves(raw):
        changed = _with(raw, path)
        try:
            if which == "protocol":
                after = _hash(msgspec.convert(changed, Protocol), rig)
            else:
                after = _hash(protocol, msgspec.convert(changed, Rig))
        except (InputError, msgspec.ValidationError):
            continue
        seen += 1
        if after == before and path not in _UNUSED:
            blind.append(path)
    assert blind == []
    assert seen >= 25


def test_a_series_of_tests_names_its_line_where_a_pathway_has_two() -> None:
    second = (
        '\n[output.pre1b]\ndrives = "pre"\npathway = "s1"\nwidth_us = 100\n'
        "latency.epsp_onset = { mean_ms = 2 }\n"
    )
    rig = make_rig(extra=second)
    with pytest.raises(InputError, match=r"phase\[1\].test\[1\].pre_line: needed"):
        make_plan(rig=rig)
    said = SHORT.replace('pathway = "s1"\n', 'pathway = "s1"\npre_line = "pre1b"\n')
    assert {line.name for line in make_plan(said, rig).lines if line.drives == "pre"} == {
        "pre1b", "pre2",
    }  # fmt: skip


def test_a_block_after_a_single_pairing_waits_for_its_response_window() -> None:
    two = SHORT.replace(
        "pairings = 12\nrate_hz = 1",
        'pairings = 1\n[[phase.block]]\nkind = "pairings"\npathway = "s1"\npairings = 1\ndt_ms = 5',
    )
    # 9.2 ms to the first pairing's post trigger, 15 ms window; then the second, 4.2 ms long.
    assert [t.at_ns for t in make_plan(two).phases[1].triggers] == [
        0, 9_200_000, 24_200_000, 28_400_000,
    ]  # fmt: skip


def test_tests_are_counted_once_against_the_most_triggers(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    made = sum(len(phase.triggers) for phase in make_plan().phases)
    # The count made beforehand may hold the last test of a series that no longer fits: with its
    # step 2 triggers, for each of four series.
    monkeypatch.setattr(budget, "MOST_TRIGGERS", made + 8)
    make_plan()
    monkeypatch.setattr(budget, "MOST_TRIGGERS", made - 1)
    with pytest.raises(InputError, match=f"triggers up to here; a plan has at most {made - 1}"):
        make_plan()


def test_tests_beside_an_induction_count_too() -> None:
    beside = SHORT.replace(
        'kind = "induction"\n',
        'kind = "induction"\n[[phase.test]]\npathway = "s2"\nevery_s = 1e-12\n',
    )
    with pytest.raises(InputError, match=r"phase\[2\].test\[1\].every_s = 1e-12: makes \d+,"):
        make_plan(beside)
