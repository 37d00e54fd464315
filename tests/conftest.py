"""Shared: short protocols, and rehearsals through the very road that the command line takes."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from rigctl.backends.base import OpenOptions
from rigctl.execute import Ended, Prepared, execute, prepare
from rigctl.operator import StandIn
from rigctl.protocol.compile import compile_plan
from rigctl.protocol.load import parse_protocol, parse_rig
from rigctl.protocol.plan import Plan
from rigctl.protocol.rig import Rig

ROOT = Path(__file__).parents[1]
EXAMPLES = ROOT / "examples"
RIG_TEXT = (ROOT / "rigctl/data/rehearsal_rig.toml").read_text(encoding="utf-8")

SHORT = """
title = "short"
preparation = "none: a test"

[[forecast]]
rule = "pair-all"
set = "bi-poo-2001"

[[phase]]
kind = "baseline"
duration_min = 0.5

[[phase.test]]
pathway = "s1"
every_s = 4

[[phase.test]]
pathway = "s2"
every_s = 4
first_at_s = 2

[[phase]]
kind = "induction"

[[phase.block]]
kind = "pairings"
pathway = "s1"
dt_ms = 10
pairings = 12
rate_hz = 1

[[phase]]
kind = "follow_up"
duration_min = 0.5

[[phase.test]]
pathway = "s1"
every_s = 4

[[phase.test]]
pathway = "s2"
every_s = 4
first_at_s = 2
"""


def make_rig(extra: str = "", replace: dict[str, str] | None = None) -> Rig:
    """Return the rehearsal rig, with text replaced and appended."""
    text = RIG_TEXT
    for old, new in (replace or {}).items():
        assert old in text
        text = text.replace(old, new)
    return parse_rig(text + extra, "rig.toml")


def make_plan(protocol: str = SHORT, rig: Rig | None = None) -> Plan:
    """Compile a protocol text on the rehearsal rig."""
    return compile_plan(
        parse_protocol(protocol, "protocol.toml"),
        rig or make_rig(),
        protocol_file="protocol.toml",
        rig_file="rig.toml",
    )


def prepared(folder: Path, protocol: str = SHORT, rig: str = RIG_TEXT) -> Prepared:
    """Write a protocol and a rig and prepare them."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "protocol.toml").write_text(protocol, encoding="utf-8")
    (folder / "rig.toml").write_text(rig, encoding="utf-8")
    return prepare(folder / "protocol.toml", folder / "rig.toml")


def rehearsed(
    folder: Path,
    protocol: str = SHORT,
    rig: str = RIG_TEXT,
    seed: int = 1,
    faults: str = "",
    commands: list[tuple[int, str, str]] | None = None,
) -> Ended:
    """Rehearse, and return how it ended; the record is in ``folder``/out."""
    return execute(
        prepared(folder, protocol, rig),
        folder / "out",
        OpenOptions(seed, faults),
        operator=StandIn(commands or []),
    )


@pytest.fixture(scope="session")
def short_record(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A closed record of the short protocol; tests must not change it."""
    return rehearsed(tmp_path_factory.mktemp("short")).record


@pytest.fixture(scope="session")
def standard_record(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The standard session with latency creep, misses and doublets planted."""
    folder = tmp_path_factory.mktemp("standard")
    text = (EXAMPLES / "pre_post.toml").read_text(encoding="utf-8")
    return rehearsed(folder, text, seed=3, faults="creep_ms=3,misses=8,doublets=3").record


Rehearse = Callable[..., Ended]
