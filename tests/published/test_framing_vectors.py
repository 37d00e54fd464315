"""Framing against published vectors."""

from __future__ import annotations

import pytest
from cobs import cobs

from rigctl.link.frames import crc32c


def _bytes(text: str) -> bytes:
    return bytes.fromhex(text.replace(" ", ""))


RUN_FE = bytes(range(1, 0xFF))
# COBS: Cheshire & Baker 1999, IEEE/ACM ToN 7:159 (vectors computed here).
VECTORS = [
    (b"", _bytes("01")),
    (_bytes("00"), _bytes("01 01")),
    (_bytes("00 00"), _bytes("01 01 01")),
    (_bytes("00 11 00"), _bytes("01 02 11 01")),
    (_bytes("11 22 00 33"), _bytes("03 11 22 02 33")),
    (_bytes("11 22 33 44"), _bytes("05 11 22 33 44")),
    (_bytes("11 00 00 00"), _bytes("02 11 01 01 01")),
    (RUN_FE, b"\xff" + RUN_FE),
    (b"\0" + RUN_FE, b"\x01\xff" + RUN_FE),
    (RUN_FE + b"\xff", b"\xff" + RUN_FE + b"\x02\xff"),
]


@pytest.mark.parametrize(("plain", "stuffed"), VECTORS)
def test_cobs(plain: bytes, stuffed: bytes) -> None:
    assert cobs.encode(plain) == stuffed
    assert cobs.decode(stuffed) == plain


def test_cobs_final_full_block_both_ways() -> None:
    # Some encoders add 01 after a final full block: both are accepted.
    assert cobs.decode(b"\xff" + RUN_FE + b"\x01") == RUN_FE


def test_crc32c_check_value() -> None:
    # CRC-32C of "123456789" (Koopman's tables, read there; computed here).
    assert crc32c(b"123456789") == 0xE3069283
