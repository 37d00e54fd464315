"""Who sits at the rig: in a rehearsal, a stand-in who says go and follows a list of commands."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

Command = tuple[int, str, str]


class StandIn:
    """Passes every operator gate at once, and gives commands at set session times.

    Parameters
    ----------
    commands : iterable of (at_ns, command, text)
        Session times at which to give a command, e.g. ``(60_000_000_000, "pause", "")``.
    """

    def __init__(self, commands: Iterable[Command] = ()) -> None:
        self._commands = sorted(commands)
        self._go: list[tuple[str, str]] = []

    def asked(self, phase: str, text: str, now_ns: int) -> None:
        """A gate waits: answer it at the next turn."""
        self._go.append(("go", f"stand-in: {phase}"))

    def take(self, now_ns: int) -> Sequence[tuple[str, str]]:
        """Return what has come due."""
        due, self._go = self._go, []
        while self._commands and self._commands[0][0] <= now_ns:
            _, command, text = self._commands.pop(0)
            due.append((command, text))
        return due

    def next_ns(self) -> int:
        """Return when there is something to take next."""
        if self._go:
            return 0
        return self._commands[0][0] if self._commands else 1 << 62
