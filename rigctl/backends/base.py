"""How a session reaches a box: what a backend plugin provides.

A plugin is a class named by an entry point in the group ``rigctl.backends``; it is imported only
when a rig file names it. The session never learns what stands at the end of the link.
"""

from __future__ import annotations

from typing import Any, Protocol

from msgspec import Struct

from rigctl.protocol.plan import Plan
from rigctl.protocol.rig import Rig
from rigctl.session.sweeps import Sweep
from rigctl.timing.clock import Clock


class LinkEnd(Protocol):
    """The host's end of the byte stream to the box."""

    def write(self, data: bytes) -> None:
        """Send ``data``; raises LinkError when the box is gone."""
        ...

    def wait(self, until_ns: int) -> bytes:
        """Return what has arrived: as soon as there is something, at latest at ``until_ns``.

        ``until_ns`` is on the connection's clock. Also returns (possibly empty) when the
        acquisition has something to take. Raises LinkError when the box is gone.
        """
        ...

    def close(self) -> None:
        """Let go of the link; the box makes its outputs safe by itself."""
        ...


class Acquisition(Protocol):
    """Where sweeps come from."""

    def take(self) -> list[Sweep]:
        """Return the sweeps completed since the last call, in time order."""
        ...


class Connection(Struct, frozen=True):
    """An open rig: a clock, a link and perhaps an acquisition.

    ``about`` goes into the record's header (versions, seeds, knobs), values as text.
    """

    clock: Clock
    link: LinkEnd
    acquisition: Acquisition | None
    simulated: bool
    about: dict[str, str]


class OpenOptions(Struct, frozen=True):
    """What the command line may ask of a backend when opening it."""

    seed: int = 0
    faults: str = ""
    real_time: bool = False


class Backend(Protocol):
    """A backend plugin. The class is called without arguments."""

    simulated: bool

    def describe_faults(self) -> list[tuple[str, str, str]]:
        """Return (key, unit, what it does) for every fault that can be injected; often none."""
        ...

    def knobs_schema(self) -> dict[str, Any]:
        """Return the JSON Schema of the backend's own table in the rig file."""
        ...

    def open(self, rig: Rig, plan: Plan, options: OpenOptions) -> Connection:
        """Open the rig for one session.

        Raises
        ------
        InputError
            An option or a knob that the backend does not take.
        LinkError
            The box is not there, or is held by somebody else.
        """
        ...
