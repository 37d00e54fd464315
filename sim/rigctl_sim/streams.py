"""Independent random streams from one seed, by name: adding one changes no other."""

from __future__ import annotations

import hashlib

import numpy as np


def stream(seed: int, name: str) -> np.random.Generator:
    """Return the generator called ``name`` of a seed."""
    return np.random.default_rng(stream_key(seed, name))


def stream_key(seed: int, name: str) -> list[int]:
    """Return what seeds the stream, for callers that need one generator per place in time."""
    digest = hashlib.sha256(name.encode()).digest()
    return [seed, int.from_bytes(digest[:8], "little")]
