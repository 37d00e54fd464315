"""What the documents say is so."""

from __future__ import annotations

import re

import pytest

from rigctl.cli import cli
from tests.conftest import ROOT, make_plan

README = (ROOT / "README.md").read_text(encoding="utf-8")
PROSE = [
    *ROOT.glob("*.md"),
    *(ROOT / "hardware_notes").glob("*.md"),
    *(ROOT / "examples").glob("*.md"),
    *(ROOT / "benchmarks").glob("*.md"),
]


def test_the_readmes_protocol_compiles() -> None:
    (text,) = re.findall(r"```toml\n(.*?)```", README, re.DOTALL)
    plan = make_plan(text)
    assert len(plan.phases[1].pairings) == 60
    assert plan.phases[1].pairings[0].target_dt_ns == 8_000_000


def test_every_command_is_in_the_readme_and_none_else() -> None:
    named = set(re.findall(r"pairctl ([a-z]+)", README))
    assert named == set(cli.commands)


@pytest.mark.parametrize("path", PROSE, ids=lambda p: p.name)
def test_links_lead_somewhere(path: object) -> None:
    text = path.read_text(encoding="utf-8")  # type: ignore[attr-defined]
    for target in re.findall(r"\]\(([^)#:]+)\)", text):
        assert (path.parent / target).exists(), target  # type: ignore[attr-defined]


def test_the_readmes_order_is_job_commands_picture_protocol_cautions() -> None:
    order = ["pairctl` controls the pairing", "make dryrun", "docs/page.png",
             "## Your first protocol", "## Cautions"]  # fmt: skip
    places = [README.index(words) for words in order]
    assert places == sorted(places)
