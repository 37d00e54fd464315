"""Frames: whole, byte by byte, with trailing bytes, and damaged."""

from __future__ import annotations

import random

import pytest
from hypothesis import given
from hypothesis import strategies as st

from rigctl.link.frames import MAX_PAYLOAD, FrameReader, decode_stuffed, encode_frame

payloads = st.binary(min_size=1, max_size=MAX_PAYLOAD)


@given(st.lists(payloads, max_size=8), st.integers(1, 9))
def test_any_cutting_of_the_stream_gives_the_same_payloads(sent: list[bytes], cut: int) -> None:
    stream = b"".join(encode_frame(p) for p in sent)
    reader = FrameReader()
    got = [p for i in range(0, len(stream), cut) for p in reader.feed(stream[i : i + cut])]
    assert got == sent
    assert reader.damage.total == 0


@given(payloads, st.binary(max_size=20))
def test_trailing_bytes_belong_to_the_next_frame(payload: bytes, rest: bytes) -> None:
    reader = FrameReader()
    rest = rest.replace(b"\0", b"\1")
    assert reader.feed(encode_frame(payload) + rest) == [payload]


def test_a_frame_holds_no_zero_but_at_its_two_ends() -> None:
    for payload in (b"\0" * MAX_PAYLOAD, bytes(range(MAX_PAYLOAD))):
        frame = encode_frame(payload)
        assert frame[0] == frame[-1] == 0
        assert 0 not in frame[1:-1]


def test_any_one_changed_byte_costs_one_frame_only() -> None:
    first, second = encode_frame(b"first"), encode_frame(b"second")
    for at in range(len(first)):
        for bit in range(8):
            hit = first[:at] + bytes([first[at] ^ 1 << bit]) + first[at + 1 :]
            assert FrameReader().feed(hit + second)[-1] == b"second"


@pytest.mark.parametrize("payload", [b"", b"x" * (MAX_PAYLOAD + 1)])
def test_payloads_that_do_not_fit(payload: bytes) -> None:
    with pytest.raises(ValueError, match="1 to 60 bytes"):
        encode_frame(payload)


def test_a_flood_without_an_end_is_forgotten_and_counted_once() -> None:
    reader = FrameReader()
    for _ in range(1000):
        assert reader.feed(b"x" * 100) == []
    assert len(reader._rest) <= 200
    assert reader.damage.too_long == 1
    assert reader.feed(b"\0" + encode_frame(b"after")) == [b"after"]


def _mutate(rng: random.Random, frame: bytes) -> bytes:
    data = bytearray(frame)
    for _ in range(rng.randint(1, 4)):
        kind, at = rng.randrange(3), rng.randrange(len(data))
        if kind == 0:
            data[at] ^= 1 << rng.randrange(8)
        elif kind == 1:
            del data[at]
        else:
            data.insert(at, rng.randrange(256))
        if not data:
            data = bytearray(b"\1")
    return bytes(data)


def _mutants(count: int, seed: int) -> None:
    rng = random.Random(seed)
    accepted = 0
    for _ in range(count):
        payload = rng.randbytes(rng.randint(1, MAX_PAYLOAD))
        mutant = _mutate(rng, encode_frame(payload))
        reader = FrameReader()
        for got in reader.feed(mutant + b"\0"):
            # A mutation may fall outside the frame and leave it whole; nothing else may pass.
            accepted += got != payload
    assert accepted == 0


def test_mutated_frames_are_never_taken_for_others() -> None:
    _mutants(10_000, seed=1)


@pytest.mark.soak
def test_mutated_frames_at_length() -> None:
    for seed in range(2, 102):
        _mutants(10_000, seed)


@pytest.mark.parametrize(
    ("stuffed", "what"),
    [(b"\x05\x01", "stuffing"), (b"\x02\x01", "length"), (b"x" * 300, "too long")],
)
def test_damage_is_named(stuffed: bytes, what: str) -> None:
    assert decode_stuffed(stuffed) == what


def test_a_changed_bit_is_a_checksum_error() -> None:
    frame = bytearray(encode_frame(b"\x41\x42\x43"))
    frame[4] ^= 1
    assert decode_stuffed(bytes(frame[1:-1])) == "checksum"
