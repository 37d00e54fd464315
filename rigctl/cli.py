"""The command line: parse, call, print, exit code. Everything heavy is imported when needed."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, NoReturn

import click

from rigctl import __version__
from rigctl.errors import InputError, RigctlError

if TYPE_CHECKING:
    from pathlib import Path

    from rich.console import Console

    from rigctl.execute import Prepared

FIRST_STEPS = """\
pairctl times pre/post pairings on a rig, logs what was delivered, and forecasts from that alone.

Without hardware, to begin with:

  pairctl check PROTOCOL.toml       what would be delivered, when, and what is not stated
  pairctl rehearse PROTOCOL.toml    the whole session on the simulated rig: a record and a page
  pairctl schema protocol           JSON Schema, so that your editor completes the file

Protocols to start from are in the folder examples/. All commands: pairctl --help
"""


class Commands(click.Group):
    """A group that keeps its commands in the order of a session."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Return the commands in the order in which they were defined."""
        return list(self.commands)


@click.group(cls=Commands, invoke_without_command=True)
@click.version_option(__version__, prog_name="pairctl")
@click.pass_context
def cli(ctx: click.Context) -> None:
    """Closed-loop pairing control: protocol in, delivered pairings, record and forecast out.

    For research preparations only, never for people. Passing a check is no permission.
    """
    if ctx.invoked_subcommand is None:
        click.echo(FIRST_STEPS, nl=False)


class _LazyPath(click.ParamType[Any]):
    """A path; ``pathlib`` is imported only when one is given."""

    name = "path"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """Return ``value`` as a Path."""
        from pathlib import Path

        return Path(value)


PATH = _LazyPath()
json_option = click.option(
    "--json", "as_json", is_flag=True, help="One JSON object on standard output, nothing else."
)
rig_option = click.option(
    "--rig", type=PATH, metavar="RIG", help="Rig file; default: the rehearsal rig."
)
arm_option = click.option(
    "--arm", type=click.IntRange(1), help="Which arm of an across-cells protocol, from 1."
)


def _console(stderr: bool = False) -> Console:
    from rich.console import Console

    return Console(stderr=stderr, highlight=False)


@contextmanager
def _progress(label: str, total: float) -> Iterator[Callable[[float], None]]:
    """A progress bar with the remaining time on standard error, where a person watches."""
    if not sys.stderr.isatty():
        yield lambda done: None
        return
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (TextColumn("{task.description}"), BarColumn(), TimeRemainingColumn())
    with Progress(*columns, console=_console(stderr=True), transient=True) as bar:
        task = bar.add_task(label, total=total)
        yield lambda done: bar.update(task, completed=done)


def _print_json(value: object) -> None:
    click.echo(json.dumps(value, allow_nan=False))


def _prepare(protocol: Path, rig: Path | None, arm: int | None) -> Prepared:
    from rigctl.execute import prepare

    return prepare(protocol, rig, arm)


@cli.command()
@click.argument("protocol", type=PATH)
@rig_option
@arm_option
@json_option
def check(protocol: Path, rig: Path | None, arm: int | None, as_json: bool) -> None:
    """Validate a protocol, compile it, audit it, hold it against the limits.

    Prints the timeline to scale, counts, unintended pairs, the washout budget, the forecast if all
    went as planned, and the plan hash. Exit code 3 when a limit is exceeded.
    """
    from rigctl.protocol.audit import audit
    from rigctl.report import check_text
    from rigctl.safety import limits

    prepared = _prepare(protocol, rig, arm)
    found = audit(prepared.plan, prepared.rig)
    arms = _other_arms(protocol, rig, prepared) if arm is None else []
    if as_json:
        made = check_text.as_json(prepared.plan, found, prepared.verdicts)
        _print_json({**made, "arms": [check_text.arm_json(a) for a in arms]})
    else:
        _console().print(check_text.render(prepared.plan, found, prepared.verdicts))
        if arms:
            _console().print(check_text.render_arms(arms))
    for each in [prepared, *arms]:
        limits.refuse(each.verdicts)


def _other_arms(protocol: Path, rig: Path | None, first: Prepared) -> list[Prepared]:
    """Compile every arm of an across-cells protocol (none where it is not one)."""
    across = first.protocol.across_cells
    count = len(across.dt_ms) if across is not None else 0
    return [_prepare(protocol, rig, arm) for arm in range(1, count + 1)]


@cli.command()
@click.argument("protocol", type=PATH)
@rig_option
@click.option("--seed", type=click.IntRange(0), default=0, help="Seed of the simulated world.")
@click.option("--out", type=PATH, metavar="DIR", help="Default: rehearsals/PROTOCOL-NNN.")
@click.option("--faults", default="", metavar="SPEC", help="Faults to inject, e.g. creep_ms=3.")
@click.option("--real-time", is_flag=True, help="Take as long as the session would.")
@arm_option
@json_option
def rehearse(
    protocol: Path,
    rig: Path | None,
    seed: int,
    out: Path | None,
    faults: str,
    real_time: bool,
    arm: int | None,
    as_json: bool,
) -> None:
    """Run a protocol on the simulated rig; leaves DIR/session.sqlite and DIR/report.html.

    The same plan, session, link bytes and record as a real run; only the clock and what stands at
    the end of the link differ. Faults: see `pairctl faults`.
    """
    from pathlib import Path

    from rigctl import backends
    from rigctl.backends.base import OpenOptions
    from rigctl.execute import execute, next_folder

    prepared = _prepare(protocol, rig, arm)
    if not backends.load(prepared.rig.backend).simulated:
        raise InputError(
            f'{prepared.rig_file}: backend = "{prepared.rig.backend}": rehearse needs a simulated '
            'backend: "sim".'
        )
    folder = out or next_folder(Path("rehearsals"), Path(prepared.protocol_file).stem)
    with _progress("rehearsing", prepared.plan.duration_ns) as step:
        ended = execute(prepared, folder, OpenOptions(seed, faults, real_time), progress=step)
    _conclude(ended.record, ended.exit_code, ended.how, as_json)


def _conclude(record: Path, code: int, how: str, as_json: bool) -> None:
    """Write the page, print the summary, leave with the session's exit code."""
    from rigctl.execute import PAGE_NAME
    from rigctl.record.read import open_record
    from rigctl.report.summary import as_text, summarise

    if how == "interrupted":
        raise _Interrupted(
            f"interrupted: {record} is left open; `pairctl verify` says what it holds."
        )
    page = record.parent / PAGE_NAME
    _write_page(record, page)
    with open_record(record) as opened:
        summary = summarise(opened)
    if as_json:
        _print_json(summary)
    else:
        _console().print(as_text(summary))
        click.echo(f"page: {page}")
    if code:
        sys.exit(code)


class _Interrupted(RigctlError):
    exit_code = 4


def _write_page(record: Path, page: Path) -> None:
    from rigctl.report.page import write_page

    if sys.stderr.isatty():
        with _console(stderr=True).status("drawing the page"):
            write_page(record, page)
    else:
        write_page(record, page)


@cli.command()
@click.argument("record", type=PATH)
@click.option("--out", type=PATH, metavar="DIR", help="Default: the record's folder.")
def report(record: Path, out: Path | None) -> None:
    """Draw the page again, from the record alone."""
    from rigctl.execute import PAGE_NAME, ensure_folder

    folder = record.parent if out is None else ensure_folder(out)
    page = folder / PAGE_NAME
    _write_page(record, page)
    click.echo(f"page: {page}")


@cli.command()
@click.argument("record", type=PATH)
@json_option
def verify(record: Path, as_json: bool) -> None:
    """Check a record's integrity, and that replay gives the same ledger and forecast.

    Exit code 6 when anything differs.
    """
    import msgspec

    from rigctl.record.verify import verify as verify_record

    with _progress("verifying", 1.0) as step:
        verdict = verify_record(record, step)
    if as_json:
        _print_json({**msgspec.to_builtins(verdict), "ok": verdict.ok})
    else:
        rows = ", ".join(f"{n} {table}" for table, n in verdict.rows.items())
        click.echo(f"{record}: {verdict.status}; {rows or 'no rows'}")
        click.echo(f"chain tip {verdict.chain_tip or 'none'}")
        for finding in [*verdict.findings, *verdict.decisions]:
            click.echo(f"  differs: {finding}")
        if verdict.ok:
            click.echo(
                "chain, file hash and replay agree"
                if verdict.status == "closed"
                else "chain and replay agree; the record was never closed"
            )
    if not verdict.ok:
        sys.exit(6)


@cli.command("list")
@click.argument("folder", type=PATH, metavar="DIR")
@json_option
def list_records(folder: Path, as_json: bool) -> None:
    """List the records in a folder and below it."""
    from rigctl.report.listing import as_table, find_records

    found = find_records(folder)
    if as_json:
        _print_json(found)
    else:
        _console().print(as_table(found, folder))


@cli.command()
@click.argument("spikes", type=PATH, metavar="SPIKES.csv")
@click.option("--rule", required=True, help="pair-all or pair-nearest.")
@click.option("--set", "set_name", help="A published parameter set.")
@click.option("--param", multiple=True, metavar="KEY=VALUE", help="A parameter of the rule.")
@json_option
def predict(
    spikes: Path, rule: str, set_name: str | None, param: tuple[str, ...], as_json: bool
) -> None:
    """Run a rule on pre/post times recorded elsewhere (columns at_s or at_ms, side)."""
    from rigctl.execute import read_text
    from rigctl.plasticity import predict as predicting

    result = predicting.predict(
        read_text(spikes), str(spikes), rule=rule, set_name=set_name, parameters=param
    )
    if as_json:
        _print_json(predicting.as_json(result))
    else:
        click.echo(predicting.as_text(result))


@cli.command()
@click.argument("which", type=click.Choice(["protocol", "rig", "sim"]))
def schema(which: str) -> None:
    """Print the JSON Schema of protocol or rig files, for editors.

    `sim` is the [sim] table of a rig file: every knob of the simulated rig, with its default.
    """
    if which == "sim":
        from rigctl import backends

        made = backends.load("sim").knobs_schema()
    else:
        from rigctl.protocol.jsonschema import schema as make

        made = make(which)
    click.echo(json.dumps(made, indent=2))


@cli.command()
def faults() -> None:
    """List the faults that `rehearse --faults` can inject."""
    from rigctl import backends

    for key, unit, what in backends.load("sim").describe_faults():
        click.echo(f"{key:20} {unit:8} {what}")


def main() -> NoReturn:
    """Run ``pairctl``: a sentence and an exit code for every error that is not our own."""
    as_json = "--json" in sys.argv
    try:
        cli.main(standalone_mode=False, prog_name="pairctl")
        code = 0
    except click.exceptions.Abort:
        code = _say("interrupted.", 4, as_json)
    except click.ClickException as error:
        code = _say(error.format_message(), 2, as_json)
    except click.exceptions.Exit as error:
        code = error.exit_code
    except RigctlError as error:
        code = _say(str(error), error.exit_code, as_json)
    except BrokenPipeError:
        code = 0
    sys.exit(code)


def _say(sentence: str, code: int, as_json: bool) -> int:
    """Print an error on standard error, and as the JSON object where one was asked for."""
    click.echo(f"pairctl: {sentence}", err=True)
    if as_json:
        _print_json({"error": sentence, "exit_code": code})
    return code
