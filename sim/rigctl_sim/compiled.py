"""Compiles inner loops where numba is installed; plain Python, slower, where it is not."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

F = TypeVar("F", bound=Callable[..., Any])

try:
    from numba import njit
except ImportError:
    COMPILED = False

    def compiled(function: F) -> F:
        """Return ``function`` as it is."""
        return function
else:
    COMPILED = True

    def compiled(function: F) -> F:
        """Return ``function`` compiled at first use; the result is kept on disk."""
        return cast(F, njit(cache=True)(function))


NOT_COMPILED = (
    "The conductance cell runs uncompiled, about forty times slower: install the extra `fast` "
    "(pip install 'rigctl[fast]') to have it compiled."
)
