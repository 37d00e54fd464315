"""The JSON Schemas that editors use: every example fits, what is wrong does not."""

from __future__ import annotations

import tomllib
from pathlib import Path

import jsonschema
import pytest

from rigctl.protocol.jsonschema import schema
from tests.conftest import EXAMPLES, ROOT

PROTOCOLS = sorted(EXAMPLES.glob("*.toml"))
RIGS = [*sorted((EXAMPLES / "rigs").glob("*.toml")), ROOT / "rigctl/data/rehearsal_rig.toml"]


@pytest.mark.parametrize("path", PROTOCOLS, ids=lambda p: p.stem)
def test_protocols(path: Path) -> None:
    jsonschema.Draft202012Validator(schema("protocol")).validate(
        tomllib.loads(path.read_text("utf-8"))
    )


@pytest.mark.parametrize("path", RIGS, ids=lambda p: p.stem)
def test_rigs(path: Path) -> None:
    jsonschema.Draft202012Validator(schema("rig")).validate(tomllib.loads(path.read_text("utf-8")))


@pytest.mark.parametrize("change", [{"title": 3}, {"titel": "x"}, {"phase": []}])
def test_what_is_wrong_does_not_fit(change: dict[str, object]) -> None:
    raw = {**tomllib.loads(PROTOCOLS[0].read_text("utf-8")), **change}
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.Draft202012Validator(schema("protocol")).validate(raw)


@pytest.mark.parametrize("path", PROTOCOLS, ids=lambda p: p.stem)
def test_each_example_says_what_it_shows_and_the_readme_lists_it(path: Path) -> None:
    raw = tomllib.loads(path.read_text("utf-8"))
    assert path.read_text("utf-8").startswith(f"# Shows: {raw['shows']}\n")
    row = f"| [{path.stem}]({path.name}) | {raw['shows']} |"
    assert row in (EXAMPLES / "README.md").read_text("utf-8")
