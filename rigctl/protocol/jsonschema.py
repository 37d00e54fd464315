"""JSON Schemas of protocol and rig files, generated from the structs, for editors."""

from __future__ import annotations

from typing import Any, Literal

import msgspec

from rigctl.protocol.rig import Rig
from rigctl.protocol.schema import Protocol

_DIALECT = "https://json-schema.org/draft/2020-12/schema"


def schema(which: Literal["protocol", "rig"] | str) -> dict[str, Any]:
    """Return the JSON Schema (draft 2020-12) of a kind of file, with its TOML key names."""
    cls = Protocol if which == "protocol" else Rig
    made = msgspec.json.schema(cls)
    return {"$schema": _DIALECT, "title": f"pairctl {which} file", **made}
