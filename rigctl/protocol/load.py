"""From TOML text to a typed protocol or rig, or to one sentence that says what is wrong.

The sentence names the file, the key path (counted from 1, as people count), the value, and what is
allowed.
"""

from __future__ import annotations

import json
import math
import re
import tomllib
from typing import Any, TypeVar, get_args, get_origin, get_type_hints

import msgspec

from rigctl.errors import InputError, nearest
from rigctl.protocol.checks import check_protocol, check_rig
from rigctl.protocol.rig import Rig
from rigctl.protocol.schema import Protocol

T = TypeVar("T", Protocol, Rig)

_AT = re.compile(r"^(?P<what>.*?)(?: - at `(?P<path>.*)`)?$", re.DOTALL)
_UNKNOWN_KEY = re.compile(r"Object contains unknown field `(?P<key>.*)`", re.DOTALL)
_MISSING_KEY = re.compile(r"Object missing required field `(?P<key>.*)`", re.DOTALL)
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
# Deeper than any file of ours. The TOML reader's time grows with the square of a dotted key's
# length, so such a key is refused before it is read.
_MOST_DEPTH = 32
_LONG_KEY = re.compile(
    rf"(?:^|[{{,])[ \t]*\[*[ \t]*(?:[\w\"'-]+[ \t]*\.[ \t]*){{{_MOST_DEPTH}}}", re.MULTILINE
)


def parse_protocol(text: str, where: str) -> Protocol:
    """Return the protocol that ``text`` says.

    Parameters
    ----------
    text : str
        TOML.
    where : str
        The file's name, for the sentence when something is wrong.

    Raises
    ------
    InputError
    """
    protocol = _parse(text, where, Protocol, "a protocol")
    check_protocol(protocol, where)
    return protocol


def parse_rig(text: str, where: str) -> Rig:
    """Return the rig that ``text`` says; see :func:`parse_protocol`."""
    rig = _parse(text, where, Rig, "a rig file")
    check_rig(rig, where)
    return rig


def _parse(text: str, where: str, cls: type[T], what: str) -> T:
    # Some editors put a byte order mark in front.
    text = text.removeprefix("\ufeff")
    if not text.strip():
        raise InputError(f"{where}: the file is empty; {what} in TOML is needed.")
    too_deep = InputError(f"{where}: nested more than {_MOST_DEPTH} deep: not {what}.")
    if _LONG_KEY.search(text):
        raise too_deep
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{where}: not TOML: {error}.") from None
    except RecursionError:
        raise too_deep from None
    except ValueError:
        # Python reads no whole number of more than some thousand digits.
        raise InputError(f"{where}: a number in it has thousands of digits.") from None
    if _depth(raw) > _MOST_DEPTH:
        raise too_deep
    _refuse_not_finite(raw, where, "")
    try:
        return msgspec.convert(raw, cls)
    except msgspec.ValidationError as error:
        raise _sentence(str(error), raw, where, cls) from None


def _depth(raw: Any) -> int:
    """Return how deeply tables and lists are nested, without recursion."""
    depth, level = 0, [raw]
    while level and depth <= _MOST_DEPTH:
        inner: list[Any] = []
        for value in level:
            if isinstance(value, dict):
                inner += value.values()
            elif isinstance(value, list):
                inner += value
        level = [value for value in inner if isinstance(value, dict | list)]
        depth += 1
    return depth


def _quoted(key: str) -> str:
    """Return a key as TOML writes it: bare, or quoted with its control characters escaped."""
    return key if _BARE_KEY.fullmatch(key) else json.dumps(key)


def _refuse_not_finite(value: Any, where: str, path: str) -> None:
    """TOML has nan and inf; no key takes them."""
    if isinstance(value, dict):
        for key, inner in value.items():
            name = _quoted(key)
            _refuse_not_finite(inner, where, f"{path}.{name}" if path else name)
    elif isinstance(value, list):
        for n, inner in enumerate(value, 1):
            _refuse_not_finite(inner, where, f"{path}[{n}]")
    elif isinstance(value, float) and not math.isfinite(value):
        raise InputError.at(where, path, value, "a finite number is needed")


def _sentence(message: str, raw: Any, where: str, cls: type[Any]) -> InputError:
    match = _AT.match(message)
    what = match["what"] if match else message
    steps = _name_entries(_steps((match["path"] if match else None) or "$"), raw, cls)
    value, kind = _walk(raw, cls, steps)
    key = _shown(steps)
    inside = f"{key}." if key else ""
    unknown = _UNKNOWN_KEY.match(what)
    if unknown:
        known = _keys_of(_resolve(kind, value))
        hint = nearest(unknown["key"], known)
        return InputError(
            f"{where}: {inside}{_quoted(unknown['key'])}: there is no such key"
            f"{hint or ';'} {'Known' if hint else 'known'} here: {', '.join(known)}."
        )
    missing = _MISSING_KEY.match(what)
    if missing:
        return InputError(f"{where}: {inside}{missing['key']}: this key is needed.")
    if what.startswith("Invalid"):
        # A tag is no field of any struct: the union that holds it knows the tags.
        choices = _choices(kind) or _choices(_walk(raw, cls, steps[:-1])[1])
        if choices:
            return InputError.at(where, key, value, f"one of {choices} is needed")
    return InputError.at(where, key or "the file", value, _allowed(what))


def _name_entries(steps: list[str | int], raw: Any, cls: type[Any]) -> list[str | int]:
    """Put the key of the entry that does not convert where the decoder only says ``[...]``."""
    named: list[str | int] = []
    for step in steps:
        if step == "...":
            value, kind = _walk(raw, cls, named)
            inner = _step_type(kind, step, value)
            for key, entry in value.items():
                try:
                    msgspec.convert(entry, inner)
                except msgspec.ValidationError:
                    step = key
                    break
        named.append(step)
    return named


def _steps(path: str) -> list[str | int]:
    """Split msgspec's path ``$.phase[0].block[1].dt_ms`` (``[...]`` for a dict's value)."""
    steps: list[str | int] = []
    for name, index in re.findall(r"\.([^.\[\]]+)|\[(\d+|\.\.\.)\]", path):
        if name:
            steps.append(name)
        else:
            steps.append("..." if index == "..." else int(index))
    return steps


def _shown(steps: list[str | int]) -> str:
    shown = ""
    for step in steps:
        if isinstance(step, int):
            shown += f"[{step + 1}]"
        else:
            shown += f".{_quoted(step)}" if shown else _quoted(step)
    return shown


def _walk(raw: Any, cls: Any, steps: list[str | int]) -> tuple[Any, Any]:
    """Follow a path through the raw data and the types; return the value and its type."""
    value, kind = raw, cls
    for step in steps:
        kind = _step_type(kind, step, value)
        if isinstance(step, int):
            if isinstance(value, list) and step < len(value):
                value = value[step]
        elif isinstance(value, dict):
            value = value.get(step)
    return value, kind


def _step_type(kind: Any, step: str | int, value: Any) -> Any:
    kind = _resolve(kind, value)
    if isinstance(kind, type) and issubclass(kind, msgspec.Struct):
        hints = get_type_hints(kind)
        for name, encoded in zip(
            kind.__struct_fields__, kind.__struct_encode_fields__, strict=True
        ):
            if encoded == step:
                return hints[name]
        return None
    args = get_args(kind)
    if get_origin(kind) in (list, tuple) and args:
        return args[0]
    if get_origin(kind) is dict and args:
        return args[1]
    return None


def _resolve(kind: Any, value: Any) -> Any:
    """Reduce a union to the struct that ``value``'s tag names (or its one non-None member)."""
    if kind is None or isinstance(kind, type):
        return kind
    if get_origin(kind) in (list, tuple, dict):
        return kind
    members = [a for a in get_args(kind) if a is not type(None)]
    structs = [a for a in members if isinstance(a, type) and issubclass(a, msgspec.Struct)]
    if len(structs) > 1 and isinstance(value, dict):
        for struct in structs:
            if struct.__struct_config__.tag == value.get("kind"):
                return struct
        return kind
    return structs[0] if structs else (members[0] if members else kind)


def _keys_of(struct: Any) -> list[str]:
    if isinstance(struct, type) and issubclass(struct, msgspec.Struct):
        config = struct.__struct_config__
        tag = [str(config.tag_field)] if config.tag_field else []
        return tag + list(struct.__struct_encode_fields__)
    return []


def _choices(kind: Any) -> str:
    """Return the tags or the literal words that a type allows, as text."""
    words: list[str] = []
    for member in get_args(kind):
        if isinstance(member, str):
            words.append(repr(member))
        elif isinstance(member, type) and issubclass(member, msgspec.Struct):
            if member.__struct_config__.tag is not None:
                words.append(repr(member.__struct_config__.tag))
        else:
            words += [repr(word) for word in get_args(member) if isinstance(word, str)]
    return ", ".join(words)


_TYPES = {
    "float": "a number",
    "int": "a whole number",
    "str": "text in quotes",
    "bool": "true or false",
    "object": "a table",
    "array": "a list",
}


def _allowed(what: str) -> str:
    """Turn the decoder's words into the end of our sentence."""
    allowed = what.partition(", got ")[0].replace("Expected ", "", 1)
    if "matching regex" in allowed:
        return "a name is needed: a letter, then letters, digits, _ or -, at most 32 in all"

    def ours(match: re.Match[str]) -> str:
        types = [t for t in match[1].split(" | ") if t != "null"]
        return " or ".join(_TYPES.get(t, t) for t in types)

    return f"{re.sub('`([^`]*)`', ours, allowed)} is needed"
