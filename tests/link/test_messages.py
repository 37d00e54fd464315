"""Messages: one table, both ways; and the page that describes the wire."""

from __future__ import annotations

from pathlib import Path

import pytest

from rigctl.link import messages as msg
from rigctl.link.frames import MAX_PAYLOAD, encode_frame

PAGE = Path(__file__).parents[2] / "hardware_notes/link.md"


def _sample(cls: type[msg.Message]) -> msg.Message:
    values: list[object] = []
    for n, (code, _) in enumerate(cls.FIELDS.values()):
        if code == "*":
            values.append(
                tuple(msg.Trigger(n + i, 1, 2**32 - 1 - i, 300) for i in range(msg.MOST_TRIGGERS))
                if cls is msg.Upload
                else tuple(msg.Entry(1, i, 0, i * 7, 200) for i in range(msg.MOST_ENTRIES))
            )
        elif code.endswith("s"):
            values.append(bytes(range(1, int(code[:-1]) + 1)))
        else:
            values.append(n + 1)
    return cls(*values)


@pytest.mark.parametrize("cls", msg.MESSAGES)
def test_every_message_survives_the_wire_and_fits_a_frame(cls: type[msg.Message]) -> None:
    sample = _sample(cls)
    payload = msg.encode(sample)
    assert len(payload) <= MAX_PAYLOAD
    assert msg.decode(payload) == sample


@pytest.mark.parametrize("cls", msg.MESSAGES)
def test_wrong_sizes_are_no_message(cls: type[msg.Message]) -> None:
    payload = msg.encode(_sample(cls))
    for wrong in (payload[:-1], payload + b"\0"):
        with pytest.raises(msg.MessageError):
            msg.decode(wrong)


@pytest.mark.parametrize("payload", [b"", b"\0", b"\x7f\x01", b"\xff"])
def test_unknown_types_are_no_message(payload: bytes) -> None:
    with pytest.raises(msg.MessageError, match="unknown type"):
        msg.decode(payload)


def test_types_and_codes_are_unique() -> None:
    types = [cls.TYPE for cls in msg.MESSAGES]
    assert len(set(types)) == len(types)
    assert all(
        (t < 0x80) == (c.WAY == "host → box") for t, c in zip(types, msg.MESSAGES, strict=True)
    )


def _part(name: str) -> str:
    text = PAGE.read_text(encoding="utf-8")
    return text.split(f"<!-- {name} -->")[1].split(f"<!-- /{name} -->")[0].strip()


def test_the_page_shows_this_very_table() -> None:
    assert _part("messages") == msg.as_markdown()


def test_the_page_shows_these_very_codes() -> None:
    lines = ["| code | reason |", "|---|---|"]
    lines += [f"| {code} | {text} |" for code, text in msg.REASONS.items()]
    assert _part("reasons") == "\n".join(lines)


def test_the_worked_example_on_the_page_is_what_the_encoder_makes() -> None:
    lines = [line.split() for line in _part("example").splitlines() if not line.startswith("```")]
    steps = {words[0]: bytes.fromhex("".join(words[1:])) for words in lines if words}
    payload = msg.encode(msg.Ping(0x01020300))
    assert steps["payload"] == payload
    assert steps["body"] == bytes([len(payload)]) + payload
    assert steps["wire"] == encode_frame(payload)
