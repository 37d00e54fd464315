"""The running SHA-256 that ties each event to all before it."""

from __future__ import annotations

import hashlib

CHAIN_START = "0" * 64


def link(previous: str, seq: int, at_ns: int, kind: str, body: str) -> str:
    """Return the chain value of an event.

    Parameters
    ----------
    previous : str
        The chain value of event ``seq - 1``, or :data:`CHAIN_START` for event 0.
    seq, at_ns, kind, body
        The event's columns.
    """
    text = f"{previous}\n{seq}\n{at_ns}\n{kind}\n{body}"
    return hashlib.sha256(text.encode()).hexdigest()
