"""The host's end against the box: through a clean pipe, a damaged one, and over the wrap."""

from __future__ import annotations

import random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rigctl.box import BoxConfig
from rigctl.link import host as link
from rigctl.session.actions import ScheduledTrigger
from tests.link.pipe import HASH, LIMITS, Damage, Pipe


def test_hello_tells_everything() -> None:
    pipe = Pipe()
    pipe.host.hello(0)
    pipe.run(50)
    (hello,) = pipe.of(link.BoxHello)
    assert isinstance(hello, link.BoxHello)
    assert (hello.outputs, hello.inputs) == (["pre1", "post1"], ["spike1"])
    assert (hello.tick_num, hello.tick_den, hello.wire) == (500, 1, 1)
    assert hello.firmware == "rigctl-box 1"


def test_triggers_fire_at_their_tick_and_come_back_once() -> None:
    pipe = Pipe()
    pipe.arm()
    wanted = [pipe.tick + 10_000 + 3_000 * n for n in range(20)]
    pipe.upload(wanted)
    pipe.run(100)
    assert [e.tick for e in pipe.edges if e.level] == wanted
    assert [e.tick for e in pipe.edges if not e.level] == [t + 200 for t in wanted]
    fired = pipe.journal("fired")
    assert [(e.id, e.tick, e.line) for e in fired] == [
        (n, t, "pre1") for n, t in enumerate(wanted, 1)
    ]


def _lossy(rng: random.Random, rate: float) -> Damage:
    def damage(data: bytes) -> bytes:
        out = bytearray(data)
        for at in range(len(out) - 1, -1, -1):
            if rng.random() < rate:
                if rng.random() < 0.5:
                    del out[at]
                else:
                    out[at] ^= 1 << rng.randrange(8)
        return bytes(out)

    return damage


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**32), st.sampled_from([0.001, 0.005, 0.01]))
def test_over_a_bad_line_every_trigger_is_accounted_for_exactly_once(
    seed: int, rate: float
) -> None:
    rng = random.Random(seed)
    pipe = Pipe()
    pipe.arm()
    pipe.to_box, pipe.to_host = _lossy(rng, rate), _lossy(rng, rate)
    wanted = [pipe.tick + 1_000_000 + 5_000 * n for n in range(24)]
    pipe.upload(wanted)
    pipe.run(1_500, step_ms=2)
    pipe.to_box = pipe.to_host = lambda data: data
    pipe.run(600, step_ms=2)
    fates = [e for e in pipe.events if isinstance(e, link.Journal) and e.kind != "disarmed"]
    # On a line this bad the keep-alive may be lost as well; then the box has disarmed itself and
    # refuses what comes after, which is an answer too.
    refused = [e.id for e in pipe.of(link.UploadRefused)]  # type: ignore[attr-defined]
    assert sorted([e.id for e in fates] + refused) == list(range(1, 25))
    fired = [e for e in fates if e.kind == "fired"]
    assert [e.tick for e in fired] == [e.tick for e in pipe.edges if e.level]
    assert {e.tick for e in fired} <= set(wanted)
    assert [e.seq for e in pipe.events if isinstance(e, link.Journal)] == sorted(
        e.seq for e in pipe.events if isinstance(e, link.Journal)
    )


def test_damage_is_detected_repeated_and_said() -> None:
    flips = [True]

    def flip_once(data: bytes) -> bytes:
        if flips and len(data) > 20:
            flips.clear()
            return data[:5] + bytes([data[5] ^ 4]) + data[6:]
        return data

    pipe = Pipe()
    pipe.arm()
    pipe.to_box = flip_once
    pipe.upload([pipe.tick + 400_000])
    pipe.run(300)
    assert not flips
    assert pipe.box._reader.damage.total == 1
    assert [e.what for e in pipe.of(link.Retried)] == ["upload"]  # type: ignore[attr-defined]
    assert len(pipe.journal("fired")) == 1


def test_a_repeated_request_is_answered_again_and_not_done_again() -> None:
    lost = [True]

    def lose_first_answer(data: bytes) -> bytes:
        if lost:
            lost.clear()
            return b""
        return data

    pipe = Pipe()
    pipe.arm()
    pipe.to_host = lose_first_answer
    pipe.upload([pipe.tick + 400_000])
    pipe.run(400)
    assert not lost
    assert len(pipe.journal("fired")) == 1
    assert len([e for e in pipe.edges if e.level]) == 1


def test_ticks_go_on_over_the_wrap_of_the_wire() -> None:
    pipe = Pipe(start_tick=2**32 - 3_000_000)
    pipe.arm()
    wanted = [2**32 - 200_000 + 100_000 * n for n in range(6)]
    pipe.upload(wanted)
    pipe.run(1_000, step_ms=2)
    assert [e.tick for e in pipe.journal("fired")] == wanted
    assert [e.tick for e in pipe.edges if e.level] == wanted
    pipe.host.ping(pipe.now_ns)
    pipe.run(10)
    pong = pipe.of(link.Pong)[-1]
    assert isinstance(pong, link.Pong)
    assert pong.t3_tick > 2**32


def test_silence_from_the_box_is_called_lost_after_two_seconds() -> None:
    pipe = Pipe(to_host=lambda data: b"")
    pipe.host.hello(0)
    pipe.run(1_990)
    assert not pipe.of(link.LinkLost)
    pipe.run(100)
    (lost,) = pipe.of(link.LinkLost)
    assert "no answer to hello" in lost.what  # type: ignore[attr-defined]


def test_complete_waits_for_entries_that_were_lost_on_the_way() -> None:
    pipe = Pipe()
    pipe.arm()
    pipe.upload([pipe.tick + 20_000])
    pipe.run(5)
    lose = [True]

    def lose_the_journal(data: bytes) -> bytes:
        if lose and pipe.edges:
            lose.clear()
            return b""
        return data

    pipe.to_host = lose_the_journal
    pipe.run(20)
    pipe.host.ping(pipe.now_ns)
    pipe.exchange()
    assert pipe.of(link.Pong)
    assert not pipe.journal("fired")
    assert not pipe.of(link.Complete)
    pipe.run(200)
    order = [type(e).__name__ for e in pipe.events if isinstance(e, link.Journal | link.Complete)]
    assert order == ["Journal", "Complete"]


def test_a_reboot_is_seen() -> None:
    pipe = Pipe()
    pipe.arm()
    pipe.box = type(pipe.box)(BoxConfig(("pre1", "post1"), ("spike1",), boot=2))
    pipe.run(200)
    (seen,) = pipe.of(link.BootSeen)
    assert seen.boot == 2  # type: ignore[attr-defined]
    assert not pipe.host.armed


def test_arming_needs_both_steps_and_the_right_hash() -> None:
    pipe = Pipe()
    pipe.host.hello(0)
    pipe.run(50)
    pipe.upload([pipe.tick + 50_000])
    pipe.run(100)
    (refused,) = pipe.of(link.UploadRefused)
    assert refused.reason == "not armed"  # type: ignore[attr-defined]
    assert not pipe.edges
    pipe.host.arm_request(pipe.now_ns, HASH, 1000, LIMITS)
    pipe.host._plan_hash = b"\0" * 32
    pipe.run(100)
    assert not pipe.host.armed
    assert not pipe.box.armed
    (no,) = pipe.of(link.ArmRefused)
    assert no.reason == "wrong hash or nonce"  # type: ignore[attr-defined]


@pytest.mark.parametrize("step_ms", [0.5, 3.0])
def test_credits_never_run_over(step_ms: float) -> None:
    pipe = Pipe()
    pipe.arm()
    start = pipe.tick + 200_000
    waiting = [start + 4_000 * n for n in range(400)]
    number = 0
    for _ in range(4_000):
        room = min(pipe.host.credits, 8)
        batch = [
            ScheduledTrigger(n + 1, "pre1", waiting[n], 200)
            for n in range(number, min(number + room, len(waiting)))
        ]
        if batch:
            pipe.host.upload(pipe.now_ns, batch)
            number += len(batch)
        pipe.run(step_ms, step_ms)
        if len(pipe.journal("fired")) == 400:
            break
    assert not pipe.of(link.UploadRefused)
    assert [e.tick for e in pipe.journal("fired")] == waiting
