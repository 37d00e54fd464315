"""Backends are found by entry point, imported only when used; a clash is an error."""

from __future__ import annotations

from importlib.metadata import EntryPoint

import pytest

from rigctl import backends
from rigctl.errors import InputError


def test_the_simulated_rig_is_a_plugin() -> None:
    assert "sim" in backends.names()
    assert backends.load("sim").simulated is True


def test_an_unknown_backend_gets_a_sentence() -> None:
    with pytest.raises(InputError, match='did you mean "sim"'):
        backends.load("sin")


def _pretend(monkeypatch: pytest.MonkeyPatch, *values: str) -> None:
    points = [EntryPoint("twice", value, backends.GROUP) for value in values]
    monkeypatch.setattr(backends, "entry_points", lambda **kw: points)


def test_two_plugins_of_one_name_are_an_error(monkeypatch: pytest.MonkeyPatch) -> None:
    _pretend(monkeypatch, "one.module:Backend", "other.module:Backend")
    with pytest.raises(InputError, match="two plugins claim this name"):
        backends.load("twice")


def test_a_broken_plugin_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    _pretend(monkeypatch, "no_such_module_at_all:Backend")
    with pytest.raises(InputError, match="cannot be imported"):
        backends.load("twice")
