"""Frames: length, payload and CRC-32C, stuffed by COBS, between two zero bytes.

The end alone would do to cut the stream; the zero in front keeps a hit end from costing the next
frame too, and with it a second keep-alive.

COBS: Cheshire & Baker 1999, IEEE/ACM Transactions on Networking 7:159. A hit COBS code byte
multiplies errors in the decoded frame, which is why the length travels too and is checked.
"""

from __future__ import annotations

from functools import lru_cache

from cobs import cobs
from msgspec import Struct

MAX_PAYLOAD = 60
_CRC_BYTES = 4
_MAX_STUFFED = MAX_PAYLOAD + _CRC_BYTES + 1 + 1 + 1
_POLYNOMIAL = 0x82F63B78  # Castagnoli, bit-reversed


def _table() -> tuple[int, ...]:
    table = []
    for byte in range(256):
        value = byte
        for _ in range(8):
            value = value >> 1 ^ (_POLYNOMIAL if value & 1 else 0)
        table.append(value)
    return tuple(table)


_TABLE = _table()


def crc32c(data: bytes) -> int:
    """Return the CRC-32C (iSCSI polynomial) of ``data``; ``b"123456789"`` gives 0xE3069283."""
    crc = 0xFFFFFFFF
    table = _TABLE
    for byte in data:
        crc = crc >> 8 ^ table[(crc ^ byte) & 0xFF]
    return crc ^ 0xFFFFFFFF


@lru_cache(maxsize=64)
def encode_frame(payload: bytes) -> bytes:
    """Return the bytes that carry ``payload`` on the wire, both zeros included.

    Raises
    ------
    ValueError
        The payload is empty or longer than :data:`MAX_PAYLOAD`.
    """
    if not 1 <= len(payload) <= MAX_PAYLOAD:
        raise ValueError(f"a payload has 1 to {MAX_PAYLOAD} bytes, not {len(payload)}")
    body = bytes([len(payload)]) + payload
    stuffed: bytes = cobs.encode(body + crc32c(body).to_bytes(_CRC_BYTES, "little"))
    return b"\0" + stuffed + b"\0"


@lru_cache(maxsize=64)
def decode_stuffed(stuffed: bytes) -> bytes | str:
    """Return the payload of one frame (without its zero), or what is wrong with it.

    A keep-alive is the same bytes ten times a second, hence the cache.
    """
    if len(stuffed) > _MAX_STUFFED:
        return "too long"
    try:
        body: bytes = cobs.decode(stuffed)
    except cobs.DecodeError:
        return "stuffing"
    # Some encoders end a full block with an empty one; the decoder has swallowed it.
    if len(body) < 2 + _CRC_BYTES or body[0] != len(body) - 1 - _CRC_BYTES:
        return "length"
    if crc32c(body[:-_CRC_BYTES]) != int.from_bytes(body[-_CRC_BYTES:], "little"):
        return "checksum"
    return body[1:-_CRC_BYTES]


class Damage(Struct):
    """How many frames were thrown away, and why."""

    stuffing: int = 0
    length: int = 0
    checksum: int = 0
    too_long: int = 0

    @property
    def total(self) -> int:
        """All damaged frames."""
        return self.stuffing + self.length + self.checksum + self.too_long


class FrameReader:
    """Cuts a byte stream into payloads; a damaged frame costs itself and nothing after it."""

    def __init__(self) -> None:
        self._rest = b""
        self._skipping = False
        self.damage = Damage()
        self.last_damage = ""

    def feed(self, data: bytes) -> list[bytes]:
        """Take bytes as they come; return the payloads that they complete."""
        *frames, self._rest = (self._rest + data).split(b"\0")
        payloads = []
        for stuffed in frames:
            if self._skipping:
                self._skipping = False
            elif stuffed:
                decoded = decode_stuffed(stuffed)
                if isinstance(decoded, bytes):
                    payloads.append(decoded)
                else:
                    self._damaged(decoded)
        if len(self._rest) > _MAX_STUFFED:
            # No frame is that long: forget it now, so that memory stays bounded.
            self._rest = b""
            if not self._skipping:
                self._skipping = True
                self._damaged("too long")
        return payloads

    def _damaged(self, what: str) -> None:
        self.last_damage = what
        name = what.replace(" ", "_")
        setattr(self.damage, name, getattr(self.damage, name) + 1)
