"""Backend plugins: found by entry point, imported only when a rig file names them."""

from __future__ import annotations

from importlib.metadata import EntryPoint, entry_points

from rigctl.backends.base import Backend
from rigctl.errors import InputError, nearest

GROUP = "rigctl.backends"


def names() -> list[str]:
    """Return the names of the installed backends."""
    return sorted({point.name for point in entry_points(group=GROUP)})


def load(name: str) -> Backend:
    """Return the backend called ``name``.

    Raises
    ------
    InputError
        No plugin of that name, two of them, or one that cannot be imported.
    """
    found: list[EntryPoint] = list(entry_points(group=GROUP, name=name))
    values = {point.value for point in found}
    if not found:
        hint = nearest(name, names())
        known = "" if hint else f"; installed: {', '.join(names()) or 'none'}."
        raise InputError(f"backend = {name!r}: there is no such backend{hint}{known}")
    if len(values) > 1:
        raise InputError(
            f"backend = {name!r}: two plugins claim this name ({' and '.join(sorted(values))}); "
            "uninstall one."
        )
    try:
        cls = found[0].load()
    except (ImportError, AttributeError) as error:
        raise InputError(f"backend = {name!r}: its plugin cannot be imported: {error}.") from None
    backend: Backend = cls()
    return backend
