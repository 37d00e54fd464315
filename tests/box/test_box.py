"""The box by itself: raw commands, without any of the program's own checks before it."""

from __future__ import annotations

import pytest

from rigctl.box import Box, BoxConfig
from rigctl.link import messages as msg
from rigctl.link.frames import FrameReader, encode_frame

HASH = bytes(range(32))
PER_MS = 2_000


class Raw:
    """Speaks frames to a box."""

    def __init__(self, config: BoxConfig | None = None) -> None:
        self.box = Box(config or BoxConfig(("pre1", "post1"), ("spike1",)))
        self.reader = FrameReader()
        self.seq = 0
        self.heard: list[msg.Message] = []
        self.hear()

    def hear(self) -> list[msg.Message]:
        new = [msg.decode(p) for p in self.reader.feed(self.box.take_output())]
        self.heard += new
        return new

    def say(self, message: msg.Message, tick: int) -> list[msg.Message]:
        self.box.receive(encode_frame(msg.encode(message)), tick)
        return self.hear()

    def next_seq(self) -> int:
        self.seq += 1
        return self.seq

    def arm(self, tick: int = 0, **changes: int) -> None:
        values: dict[str, int] = {
            "expiry_ms": 60_000, "min_width": 60, "max_width": 800_000, "min_spacing": 200,
            "max_per_s": 500, "max_duty_permille": 500, "max_pulses": 1000, "keep_alive_ms": 250,
        }  # fmt: skip
        values.update(changes)
        (challenge,) = self.say(msg.ArmRequest(self.next_seq(), HASH, **values), tick)
        assert isinstance(challenge, msg.Challenge)
        (ack,) = self.say(msg.ArmConfirm(self.next_seq(), challenge.nonce, HASH[:8]), tick)
        assert isinstance(ack, msg.Ack)

    def upload(self, tick: int, *triggers: msg.Trigger) -> list[msg.Message]:
        return self.say(msg.Upload(self.next_seq(), triggers), tick)

    def refusals(self) -> list[str]:
        return [
            msg.REASONS[e.width]
            for m in self.heard
            if isinstance(m, msg.Journal)
            for e in m.entries
            if msg.JOURNAL_KINDS[e.kind] == "refused"
        ]


def test_boot_says_so_and_nothing_is_high() -> None:
    raw = Raw()
    assert raw.heard == [msg.Boot(1)]
    assert raw.box.advance(10**9) == []


def test_nothing_pulses_unarmed() -> None:
    raw = Raw()
    (nak,) = raw.upload(0, msg.Trigger(1, 0, 5_000, 200))
    assert isinstance(nak, msg.Nak)
    assert msg.REASONS[nak.reason] == "not armed"
    assert raw.box.advance(10**7) == []


@pytest.mark.parametrize(
    ("triggers", "reason"),
    [
        ([msg.Trigger(1, 0, 9_000, 59)], "width over the limit"),
        ([msg.Trigger(1, 0, 9_000, 800_001)], "width over the limit"),
        ([msg.Trigger(1, 0, 9_000, 60), msg.Trigger(2, 0, 9_199, 60)], "spacing under the limit"),
        ([msg.Trigger(1, 0, 9_000, 900), msg.Trigger(2, 0, 9_500, 60)], "a pulse inside another"),
        ([msg.Trigger(1, 0, 9_500, 60), msg.Trigger(2, 0, 9_000, 900)], "a pulse inside another"),
        ([msg.Trigger(1, 2, 9_000, 200)], "no such output line"),
        ([msg.Trigger(1, 0, 9_000 + 2**30, 200)], "too far ahead"),
        (
            [msg.Trigger(1, 0, 9_000, 600_000), msg.Trigger(2, 0, 700_000, 600_000)],
            "duty over the limit",
        ),
    ],
)
def test_raw_commands_over_a_limit_are_refused(triggers: list[msg.Trigger], reason: str) -> None:
    raw = Raw()
    raw.arm()
    raw.upload(0, *triggers)
    assert raw.refusals() == [reason]
    highs = [e for e in raw.box.advance(100_000) if e.level]
    assert len(highs) == len(triggers) - 1


def test_rate_and_count_are_limited() -> None:
    raw = Raw(BoxConfig(("pre1",), queue_slots=200))
    raw.arm(max_per_s=10, max_pulses=15)
    for n in range(20):
        raw.upload(0, msg.Trigger(n, 0, 10_000 + n * 10_000, 100))
    assert raw.refusals() == ["rate over the limit"] * 10
    for n in range(10):
        raw.upload(0, msg.Trigger(100 + n, 0, 3_000_000 + n * 10_000, 100))
    assert raw.refusals()[10:] == ["count over the limit"] * 5


def test_equal_to_a_limit_is_allowed() -> None:
    raw = Raw()
    raw.arm()
    raw.upload(0, msg.Trigger(1, 0, 9_000, 60), msg.Trigger(2, 0, 9_200, 800_000))
    assert raw.refusals() == []


def test_the_host_cannot_loosen_the_boxs_own_limits() -> None:
    raw = Raw(BoxConfig(("pre1",), max_width_ticks=1_000))
    raw.arm(max_width=2**32 - 1)
    raw.upload(0, msg.Trigger(1, 0, 9_000, 1_001))
    assert raw.refusals() == ["width over the limit"]
    (nak,) = Raw().say(
        msg.ArmRequest(1, HASH, 1000, 60, 1000, 200, 10, 500, 10, keep_alive_ms=251), 0
    )
    assert isinstance(nak, msg.Nak)


def test_a_late_trigger_is_dropped_and_said_never_bunched() -> None:
    raw = Raw()
    raw.arm(tick=10_000)
    raw.upload(10_000, msg.Trigger(1, 0, 10_000, 200), msg.Trigger(2, 0, 9_000, 200))
    kinds = [e.kind for m in raw.heard if isinstance(m, msg.Journal) for e in m.entries]
    assert kinds == [msg.JOURNAL_CODES["dropped_late"]] * 2
    assert raw.box.advance(1_000_000) == []


def test_silence_makes_the_outputs_low_within_250_ms_and_empties_the_queue() -> None:
    raw = Raw()
    raw.arm(tick=1_000)
    long = msg.Trigger(1, 0, 400_000, 790_000)
    later = msg.Trigger(2, 1, 1_200_000, 200)
    raw.upload(1_000, long, later)
    edges = raw.box.advance(2_000_000)
    # The last valid frame came at tick 1000: 250 ms are 500 000 ticks.
    assert [(e.level, e.tick) for e in edges] == [(True, 400_000), (False, 501_000)]
    assert not raw.box.armed
    raw.hear()
    kinds = [
        (msg.JOURNAL_KINDS[e.kind], e.id)
        for m in raw.heard
        if isinstance(m, msg.Journal)
        for e in m.entries
    ]
    assert kinds == [("fired", 1), ("cancelled", 2), ("disarmed", 2)]


def test_any_valid_frame_keeps_it_alive_and_a_damaged_one_does_not() -> None:
    raw = Raw()
    raw.arm(tick=0)
    frame = encode_frame(msg.encode(msg.KeepAlive()))
    raw.box.advance(400_000)
    raw.box.receive(frame, 400_000)
    raw.box.advance(800_000)
    assert raw.box.armed
    raw.box.receive(frame[:-2] + bytes([frame[-2] ^ 1]) + b"\0", 800_000)
    raw.box.advance(900_001)
    assert not raw.box.armed


def test_arming_expires() -> None:
    raw = Raw()
    raw.arm(tick=0, expiry_ms=300)
    for tick in range(100_000, 700_001, 100_000):
        raw.box.advance(tick)
        raw.say(msg.KeepAlive(), tick)
    assert not raw.box.armed
    last = [e for m in raw.heard if isinstance(m, msg.Journal) for e in m.entries][-1]
    assert (msg.JOURNAL_KINDS[last.kind], msg.DISARMED[last.id]) == ("disarmed", "expired")
    assert last.tick == 600_000


@pytest.mark.parametrize("armed", [True, False])
def test_stop_works_in_any_state(armed: bool) -> None:
    raw = Raw()
    if armed:
        raw.arm()
        raw.upload(0, msg.Trigger(1, 0, 1_000, 500_000))
        raw.box.advance(2_000)
    raw.say(msg.Stop(), 3_000)
    edges = raw.box.advance(3_000)
    assert [(e.level, e.tick) for e in edges] == ([(False, 3_000)] if armed else [])
    assert not raw.box.armed


def test_a_confirmation_is_good_once_and_for_two_seconds() -> None:
    raw = Raw()
    request = msg.ArmRequest(1, HASH, 1000, 60, 1000, 200, 10, 500, 10, 250)
    (challenge,) = raw.say(request, 0)
    assert isinstance(challenge, msg.Challenge)
    (late,) = raw.say(msg.ArmConfirm(2, challenge.nonce, HASH[:8]), 2_000 * PER_MS + 1)
    assert isinstance(late, msg.Nak)
    (again,) = raw.say(msg.ArmConfirm(3, challenge.nonce, HASH[:8]), 2_000 * PER_MS + 2)
    assert isinstance(again, msg.Nak)
    assert not raw.box.armed


def test_cancel_is_done_or_too_late() -> None:
    raw = Raw()
    raw.arm()
    raw.upload(0, msg.Trigger(7, 0, 50_000, 200), msg.Trigger(8, 0, 60_000, 200))
    (ack, *_) = raw.say(msg.Cancel(raw.next_seq(), 8), 10)
    assert isinstance(ack, msg.Ack)
    raw.box.advance(55_000)
    answers = raw.say(msg.Cancel(raw.next_seq(), 7), 55_000)
    assert any(isinstance(a, msg.Nak) and msg.REASONS[a.reason] == "too late" for a in answers)
    assert [e.tick for e in raw.box.advance(100_000) if e.level] == []


def test_a_full_journal_counts_what_it_could_not_keep() -> None:
    raw = Raw(BoxConfig(("pre1",), ("spike1",), journal_slots=8))
    for n in range(20):
        raw.box.input_edge("spike1", True, 100 + n)
    raw.hear()
    entries = [e for m in raw.heard if isinstance(m, msg.Journal) for e in m.entries]
    assert [e.tick for e in entries] == list(range(100, 107))
    raw.say(msg.JournalAck(7), 300)
    raw.box.input_edge("spike1", True, 400)
    raw.hear()
    entries = [e for m in raw.heard if isinstance(m, msg.Journal) for e in m.entries][7:]
    assert [(msg.JOURNAL_KINDS[e.kind], e.id) for e in entries] == [("lost", 13), ("edge", 0)]


def test_falling_edges_are_not_journaled() -> None:
    raw = Raw()
    raw.box.input_edge("spike1", True, 100)
    raw.box.input_edge("spike1", False, 150)
    raw.hear()
    entries = [e for m in raw.heard if isinstance(m, msg.Journal) for e in m.entries]
    assert [e.tick for e in entries] == [100]
