"""What can go wrong, as one clear sentence and an exit code each.

Every error that a user can cause is one of these classes. The command line prints ``str(error)``
and exits with ``error.exit_code``; a traceback is always our own fault (exit code 1).
"""

from __future__ import annotations

from difflib import get_close_matches
from typing import ClassVar


class RigctlError(Exception):
    """Base of all errors that are explained in a sentence instead of a traceback."""

    exit_code: ClassVar[int] = 1


class InputError(RigctlError):
    """A file or an argument that cannot be used (exit code 2)."""

    exit_code = 2

    @classmethod
    def at(cls, where: str, key: str, value: object, allowed: str) -> InputError:
        """Build the sentence: where, key path, value, what is allowed.

        Parameters
        ----------
        where : str
            File name as the user gave it.
        key : str
            Key path, e.g. ``phase[2].block[1].dt_ms`` (counted from 1, as people count).
        value : object
            The offending value; shortened when it is long.
        allowed : str
            What is allowed, as the end of a sentence.
        """
        shown = repr(value)
        if len(shown) > 60:
            shown = shown[:57] + "..."
        return cls(f"{where}: {key} = {shown}: {allowed}.")


class Refused(RigctlError):
    """A limit said no (exit code 3)."""

    exit_code = 3


class EndedEarly(RigctlError):
    """The session ended early: failed gate, exclusion, interlock, abandoned (exit code 4)."""

    exit_code = 4


class LinkError(RigctlError):
    """Link or hardware failure, port held (exit code 5)."""

    exit_code = 5


class VerifyError(RigctlError):
    """A record that does not verify (exit code 6)."""

    exit_code = 6


def nearest(word: str, known: list[str]) -> str:
    """Return ``'; did you mean "x"?'`` for the nearest known word, or an empty string."""
    close = get_close_matches(word, known, n=1, cutoff=0.5)
    return f'; did you mean "{close[0]}"?' if close else ""
