"""A sweep as it enters the session: samples with a start on the session clock."""

from __future__ import annotations

import hashlib

import numpy as np
import numpy.typing as npt
from msgspec import Struct


class Sweep(Struct, frozen=True):
    """A stretch of recorded samples.

    Attributes
    ----------
    at_ns : int
        Session time of the first sample.
    rate_hz : float
        Sampling rate.
    unit : str
        Unit of ``sample * scale`` (``"mV"`` in current clamp, ``"pA"`` in voltage clamp).
    scale : float
        Value of one count.
    samples : bytes
        Little-endian int16.
    cell : str or None
        The cell, where there is more than one.
    clamp : {"current", "voltage"} or None
    """

    at_ns: int
    rate_hz: float
    unit: str
    scale: float
    samples: bytes
    cell: str | None = None
    clamp: str | None = "current"

    def values(self) -> npt.NDArray[np.float64]:
        """Return the samples in ``unit``, shape (n,)."""
        return np.frombuffer(self.samples, dtype="<i2") * self.scale

    def sha256(self) -> str:
        """Return the SHA-256 (hex) of the samples' bytes."""
        return hashlib.sha256(self.samples).hexdigest()
