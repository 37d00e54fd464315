"""From TOML text to a typed protocol or rig, or to one sentence that says what is wrong.

The sentence names the file, the key path (counted from 1, as people count), the value, and what is
allowed.
"""

from __future__ import annotations

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
_UNKNOWN_KEY = re.compile(r"Object contains unknown field `(?P<key>.*)`")
_MISSING_KEY = re.compile(r"Object missing required field `(?P<key>.*)`")


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
    if not text.strip():
        raise InputError(f"{where}: the file is empty; {what} in TOML is needed.")
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{where}: not TOML: {error}.") from None
    _refuse_not_finite(raw, where, "")
    try:
        return msgspec.convert(raw, cls)
    except msgspec.ValidationError as error:
        raise _sentence(str(error), raw, where, cls) from None


def _refuse_not_finite(value: Any, where: str, path: str) -> None:
    """TOML has nan and inf; no key takes them."""
    if isinstance(value, dict):
        for key, inner in value.items():
            _refuse_not_finite(inner, where, f"{path}.{key}" if path else key)
    elif isinstance(value, list):
        for n, inner in enumerate(value, 1):
            _refuse_not_finite(inner, where, f"{path}[{n}]")
    elif isinstance(value, float) and not math.isfinite(value):
        raise InputError.at(where, path, value, "a finite number is needed")


def _sentence(message: str, raw: Any, where: str, cls: type[Any]) -> InputError:
    match = _AT.match(message)
    what = match["what"] if match else message
    path = (match["path"] if match else None) or "$"
    steps = _steps(path)
    value, struct = _walk(raw, cls, steps)
    key = _shown(steps)
    unknown = _UNKNOWN_KEY.match(what)
    if unknown:
        known = _keys_of(struct)
        word = unknown["key"]
        inside = f"{key}." if key else ""
        hint = nearest(word, known)
        return InputError(
            f"{where}: {inside}{word}: there is no such key{hint or ''} "
            f"Known here: {', '.join(known)}."
            if hint
            else f"{where}: {inside}{word}: there is no such key; known here: {', '.join(known)}."
        )
    missing = _MISSING_KEY.match(what)
    if missing:
        inside = f"{key}." if key else ""
        return InputError(f"{where}: {inside}{missing['key']}: this key is needed.")
    if what.startswith("Invalid value"):
        allowed = _tags(struct)
        if allowed:
            return InputError.at(where, key, value, f"one of {allowed} is needed")
    return InputError.at(where, key or "the file", value, _allowed(what))


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
        elif step == "...":
            shown += ".*"
        else:
            shown += f".{step}" if shown else step
    return shown


def _walk(raw: Any, cls: Any, steps: list[str | int]) -> tuple[Any, Any]:
    """Follow a path through the raw data and the types; return the value and its struct type."""
    value, kind = raw, cls
    for step in steps:
        kind = _step_type(kind, step, value)
        if isinstance(step, int):
            if isinstance(value, list) and step < len(value):
                value = value[step]
        elif isinstance(value, dict):
            value = next(iter(value.values()), None) if step == "..." else value.get(step)
    return value, _resolve(kind, value)


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


def _tags(kind: Any) -> str:
    """Return the tags or literal values that were possible, as text."""
    members = get_args(kind)
    tags = [
        repr(m.__struct_config__.tag)
        for m in members
        if isinstance(m, type) and issubclass(m, msgspec.Struct)
    ]
    if not tags:
        tags = [repr(m) for m in members if isinstance(m, str)]
    return ", ".join(tags)


_TYPES = {
    "`float`": "a number",
    "`int`": "a whole number",
    "`str`": "text in quotes",
    "`bool`": "true or false",
    "`object`": "a table",
    "`array`": "a list",
    "`null`": "nothing",
}


def _allowed(what: str) -> str:
    """Turn the decoder's words into the end of our sentence."""
    got = what.find(", got ")
    allowed = what[:got] if got >= 0 else what
    allowed = allowed.replace("Expected ", "", 1)
    if "matching regex" in allowed:
        return "a name is needed: a letter, then letters, digits, _ or -, at most 32 in all"
    for theirs, ours in _TYPES.items():
        allowed = allowed.replace(theirs, ours)
    allowed = allowed.replace(" | nothing", "").replace(" | ", " or ")
    if allowed.startswith("Invalid enum value"):
        return "not one of the allowed words"
    return f"{allowed} is needed"
