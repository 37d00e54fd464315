"""The messages of the link: fixed little-endian fields, one table for both directions.

Ticks are 32 bits on the wire and wrap; who hears them unwraps. ``hardware_notes/link.md`` shows the
table that :func:`as_markdown` draws from here.
"""

from __future__ import annotations

import struct
from functools import lru_cache
from typing import Any, ClassVar

from msgspec import Struct

WIRE_VERSION = 1
TICK_MASK = 0xFFFFFFFF
MOST_TRIGGERS = 4
MOST_ENTRIES = 3

# Why the box refuses (Nak, or a journal entry of kind refused).
REASONS = {
    1: "not armed",
    2: "not possible now",
    3: "width over the limit",
    4: "spacing under the limit",
    5: "rate over the limit",
    6: "duty over the limit",
    7: "count over the limit",
    8: "no such output line",
    9: "queue full",
    10: "too far ahead",
    11: "a pulse inside another",
    12: "too late",
    13: "wrong hash or nonce",
    14: "limits looser than the box's",
}
REASON_CODES = {text: code for code, text in REASONS.items()}

# Why the box disarmed (journal entry of kind disarmed).
DISARMED = {1: "asked", 2: "keep-alive lost", 3: "expired", 4: "stopped"}

DISARMED_CODES = {text: code for code, text in DISARMED.items()}

JOURNAL_KINDS = {
    1: "fired",
    2: "dropped_late",
    3: "refused",
    4: "cancelled",
    5: "edge",
    6: "disarmed",
    7: "lost",
}
JOURNAL_CODES = {text: code for code, text in JOURNAL_KINDS.items()}


class Message(Struct, frozen=True):
    """Base of all messages. ``FIELDS`` maps each field to its struct code and its meaning."""

    TYPE: ClassVar[int] = 0
    WAY: ClassVar[str] = ""
    MEANING: ClassVar[str] = ""
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {}


class Trigger(Struct, frozen=True, array_like=True):
    """One trigger of an upload."""

    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "id": ("I", "the host's number of the trigger"),
        "line": ("B", "output line, by index"),
        "tick": ("I", "when the edge rises"),
        "width": ("I", "ticks until it falls"),
    }
    id: int
    line: int
    tick: int
    width: int


class Entry(Struct, frozen=True, array_like=True):
    """One journal entry."""

    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "kind": ("B", "see journal kinds"),
        "id": ("I", "trigger; disarmed: reason; lost: how many entries"),
        "line": ("B", "line, by index (of outputs, or of inputs for an edge)"),
        "tick": ("I", "when it happened"),
        "width": ("I", "fired: width in ticks; refused: reason"),
    }
    kind: int
    id: int
    line: int
    tick: int
    width: int


class Hello(Message, frozen=True):
    """Ask the box who it is."""

    TYPE: ClassVar[int] = 0x01
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "who are you? Answered by HelloAnswer and one LineName per line"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {"seq": ("B", "request number")}
    seq: int


class ArmRequest(Message, frozen=True):
    """First arming step."""

    TYPE: ClassVar[int] = 0x02
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "first arming step; answered by Challenge, or Nak"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "request number"),
        "plan_hash": ("32s", "SHA-256 of the plan"),
        "expiry_ms": ("I", "disarm by itself after this"),
        "min_width": ("I", "ticks"),
        "max_width": ("I", "ticks"),
        "min_spacing": ("I", "ticks from one edge to the next on a line"),
        "max_per_s": ("H", "pulses in any second on a line"),
        "max_duty_permille": ("H", "high time in any second on a line"),
        "max_pulses": ("I", "pulses in all while armed"),
        "keep_alive_ms": ("H", "disarm when nothing valid came for this long; at most 250"),
    }
    seq: int
    plan_hash: bytes
    expiry_ms: int
    min_width: int
    max_width: int
    min_spacing: int
    max_per_s: int
    max_duty_permille: int
    max_pulses: int
    keep_alive_ms: int


class ArmConfirm(Message, frozen=True):
    """Second arming step."""

    TYPE: ClassVar[int] = 0x03
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "second arming step, within 2 s of the first; answered by Ack, or Nak"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "request number"),
        "nonce": ("I", "from the Challenge"),
        "hash_start": ("8s", "the first 8 bytes of the plan's hash"),
    }
    seq: int
    nonce: int
    hash_start: bytes


class Upload(Message, frozen=True):
    """Triggers for the queue."""

    TYPE: ClassVar[int] = 0x04
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = (
        f"1 to {MOST_TRIGGERS} triggers; answered by Ack (a trigger that a limit refuses is "
        "journaled), or Nak when not armed"
    )
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "request number"),
        "triggers": ("*", "Trigger, repeated to the end of the payload"),
    }
    seq: int
    triggers: tuple[Trigger, ...]


class Cancel(Message, frozen=True):
    """Take a trigger back."""

    TYPE: ClassVar[int] = 0x05
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "take a trigger back; answered by Ack and journaled, or Nak: too late"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "request number"),
        "id": ("I", "trigger"),
    }
    seq: int
    id: int


class Disarm(Message, frozen=True):
    """Disarm."""

    TYPE: ClassVar[int] = 0x06
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "outputs low, queue emptied (journaled), disarmed; answered by Ack"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {"seq": ("B", "request number")}
    seq: int


class Ping(Message, frozen=True):
    """Clock exchange and journal probe."""

    TYPE: ClassVar[int] = 0x07
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "clock exchange and journal probe; answered by Pong"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {"cookie": ("I", "returned in the Pong")}
    cookie: int


class JournalAck(Message, frozen=True):
    """Everything before ``next_seq`` has been received."""

    TYPE: ClassVar[int] = 0x08
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "the journal up to here may be forgotten; no answer"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "next_seq": ("I", "the next entry that is wanted")
    }
    next_seq: int


class KeepAlive(Message, frozen=True):
    """The host is there."""

    TYPE: ClassVar[int] = 0x09
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "the host is there (as any valid frame says); no answer"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {}


class Stop(Message, frozen=True):
    """Stop at once."""

    TYPE: ClassVar[int] = 0x0A
    WAY: ClassVar[str] = "host → box"
    MEANING: ClassVar[str] = "outputs low at once, in any state; disarmed; journaled, no answer"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {}


class HelloAnswer(Message, frozen=True):
    """Who the box is."""

    TYPE: ClassVar[int] = 0x81
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = "who the box is; its LineName frames follow"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "of the request"),
        "wire": ("B", "wire version"),
        "firmware": ("16s", "name and version, ASCII, padded with zeros"),
        "tick_num": ("I", "a tick is tick_num / tick_den ns"),
        "tick_den": ("I", ""),
        "boot": ("I", "counted since the box was made, or random"),
        "slots": ("H", "queue slots"),
        "min_width": ("I", "ticks: the box's own limit"),
        "max_width": ("I", "ticks: the box's own limit"),
        "min_spacing": ("I", "ticks: the box's own limit"),
        "lines": ("B", "how many LineName frames follow"),
    }
    seq: int
    wire: int
    firmware: bytes
    tick_num: int
    tick_den: int
    boot: int
    slots: int
    min_width: int
    max_width: int
    min_spacing: int
    lines: int


class LineName(Message, frozen=True):
    """The name of one line."""

    TYPE: ClassVar[int] = 0x82
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = "the name of one line"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "is_output": ("B", "1 output, 0 input"),
        "index": ("B", "outputs and inputs are counted apart, from 0"),
        "name": ("32s", "ASCII, padded with zeros"),
    }
    is_output: int
    index: int
    name: bytes


class Challenge(Message, frozen=True):
    """Answer to the first arming step."""

    TYPE: ClassVar[int] = 0x83
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = "the first arming step is accepted: confirm with this nonce"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "of the request"),
        "nonce": ("I", "new for every request"),
    }
    seq: int
    nonce: int


class Ack(Message, frozen=True):
    """A request was carried out."""

    TYPE: ClassVar[int] = 0x84
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = "carried out"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "of the request"),
        "credits": ("H", "free slots in the queue"),
    }
    seq: int
    credits: int


class Nak(Message, frozen=True):
    """A request was refused."""

    TYPE: ClassVar[int] = 0x85
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = "refused; nothing was done"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("B", "of the request"),
        "reason": ("B", "see reasons"),
        "id": ("I", "the trigger it is about, or 0"),
        "credits": ("H", "free slots in the queue"),
    }
    seq: int
    reason: int
    id: int
    credits: int


class Pong(Message, frozen=True):
    """Answer to a ping."""

    TYPE: ClassVar[int] = 0x86
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = (
        "everything up to tx_tick is in the journal before next_seq, and was sent before this"
    )
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "cookie": ("I", "from the Ping"),
        "rx_tick": ("I", "when the Ping came in"),
        "tx_tick": ("I", "when this was made"),
        "next_seq": ("I", "the number that the next journal entry will have"),
        "credits": ("H", "free slots in the queue"),
    }
    cookie: int
    rx_tick: int
    tx_tick: int
    next_seq: int
    credits: int


class Journal(Message, frozen=True):
    """What happened."""

    TYPE: ClassVar[int] = 0x87
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = f"1 to {MOST_ENTRIES} journal entries; sent again until acknowledged"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {
        "seq": ("I", "number of the first entry"),
        "credits": ("H", "free slots in the queue"),
        "entries": ("*", "Entry, repeated to the end of the payload"),
    }
    seq: int
    credits: int
    entries: tuple[Entry, ...]


class Boot(Message, frozen=True):
    """The box started."""

    TYPE: ClassVar[int] = 0x88
    WAY: ClassVar[str] = "box → host"
    MEANING: ClassVar[str] = "the box has just started; outputs are low"
    FIELDS: ClassVar[dict[str, tuple[str, str]]] = {"boot": ("I", "as in HelloAnswer")}
    boot: int


MESSAGES: tuple[type[Message], ...] = (
    Hello, ArmRequest, ArmConfirm, Upload, Cancel, Disarm, Ping, JournalAck, KeepAlive, Stop,
    HelloAnswer, LineName, Challenge, Ack, Nak, Pong, Journal, Boot,
)  # fmt: skip


class MessageError(Exception):
    """A payload that is no message: unknown type or wrong size."""


class _Codec:
    """Packs and unpacks one message type, with a repeated tail where it has one."""

    def __init__(self, cls: type[Message]) -> None:
        self.cls = cls
        fields = [code for code, _ in cls.FIELDS.values()]
        self.names = tuple(cls.FIELDS)
        self.tail: type[Trigger] | type[Entry] | None = None
        if fields and fields[-1] == "*":
            fields.pop()
            self.names = self.names[:-1]
            self.tail = Trigger if cls is Upload else Entry
            self.tail_struct = struct.Struct("<" + "".join(c for c, _ in self.tail.FIELDS.values()))
        self.head = struct.Struct("<B" + "".join(fields))

    def encode(self, message: Message) -> bytes:
        data = self.head.pack(self.cls.TYPE, *[getattr(message, n) for n in self.names])
        if self.tail is not None:
            pack = self.tail_struct.pack
            items: tuple[Any, ...] = getattr(message, next(reversed(self.cls.FIELDS)))
            for item in items:
                data += pack(*[getattr(item, n) for n in self.tail.FIELDS])
        return data

    def decode(self, payload: bytes) -> Message:
        head, tail = self.head, self.tail
        if tail is None:
            if len(payload) != head.size:
                raise MessageError(f"{self.cls.__name__}: {len(payload)} bytes")
            return self.cls(*head.unpack(payload)[1:])
        size = self.tail_struct.size
        rest = len(payload) - head.size
        if rest <= 0 or rest % size:
            raise MessageError(f"{self.cls.__name__}: {len(payload)} bytes")
        items = tuple(tail(*v) for v in self.tail_struct.iter_unpack(payload[head.size :]))
        return self.cls(*head.unpack_from(payload)[1:], items)


_BY_CLASS = {cls: _Codec(cls) for cls in MESSAGES}
_BY_TYPE = {cls.TYPE: codec for cls, codec in _BY_CLASS.items()}


def encode(message: Message) -> bytes:
    """Return the payload of a message."""
    return _BY_CLASS[type(message)].encode(message)


@lru_cache(maxsize=64)
def decode(payload: bytes) -> Message:
    """Return the message of a payload (kept for a while: a keep-alive comes ten times a second).

    Raises
    ------
    MessageError
        Unknown type or wrong size.
    """
    codec = _BY_TYPE.get(payload[0]) if payload else None
    if codec is None:
        raise MessageError(f"unknown type {payload[:1].hex() or 'none'}")
    return codec.decode(payload)


def text(padded: bytes) -> str:
    """Return a zero-padded ASCII field as text."""
    return padded.rstrip(b"\0").decode("ascii", "replace")


def as_markdown() -> str:
    """Return the message table as it stands in ``hardware_notes/link.md``."""
    lines = []
    tails: tuple[type[Trigger] | type[Entry], ...] = (Trigger, Entry)
    for cls in (*MESSAGES, *tails):
        if issubclass(cls, Message):
            lines += [f"**{cls.__name__}** `0x{cls.TYPE:02X}` {cls.WAY}: {cls.MEANING}.", ""]
            offset = 1
            lines += ["| offset | bytes | field | meaning |", "|---|---|---|---|"]
            lines.append(f"| 0 | 1 | type | 0x{cls.TYPE:02X} |")
        else:
            lines += [f"**{cls.__name__}**, inside a message.", ""]
            offset = 0
            lines += ["| offset | bytes | field | meaning |", "|---|---|---|---|"]
        for name, (code, meaning) in cls.FIELDS.items():
            size = 0 if code == "*" else struct.calcsize("<" + code)
            lines.append(f"| {offset} | {size or '…'} | {name} | {meaning} |")
            offset += size
        lines.append("")
    return "\n".join(lines).strip()
