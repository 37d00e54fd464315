"""From files to a closed record: load, compile, check the limits, open the rig, run.

``rehearse`` and ``run`` are this one road; only the backend and who sits at the rig differ.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from importlib import resources
from pathlib import Path

from msgspec import Struct

from rigctl import __version__, backends
from rigctl.backends.base import OpenOptions
from rigctl.errors import InputError, Refused
from rigctl.operator import StandIn
from rigctl.protocol.compile import compile_plan
from rigctl.protocol.load import parse_protocol, parse_rig
from rigctl.protocol.plan import Plan
from rigctl.protocol.rig import Rig
from rigctl.protocol.schema import Protocol
from rigctl.record import RECORD_VERSION
from rigctl.record.sink import ThreadedSink
from rigctl.record.sqlite import SqliteSink
from rigctl.runtime import OperatorSeat, Runtime
from rigctl.safety import limits

RECORD_NAME = "session.sqlite"
PAGE_NAME = "report.html"
REHEARSAL_RIG = "rehearsal_rig.toml"
_LARGEST_FILE = 4_000_000

# How a session may have ended, and the exit code of each.
EXIT_CODES = {
    "as_planned": 0,
    "induction_ended_early": 0,
    "abandoned": 4,
    "gate_failed": 4,
    "interrupted": 4,
    "refused": 5,
    "link_lost": 5,
    "box_reset": 5,
    "box_disarmed": 5,
}


class Prepared(Struct, frozen=True):
    """A protocol and a rig, read, compiled and checked."""

    protocol_file: str
    protocol_text: str
    protocol: Protocol
    rig_file: str
    rig_text: str
    rig: Rig
    plan: Plan
    verdicts: list[limits.Verdict]
    arm: int | None


class Ids(Struct, frozen=True):
    """What the user calls the preparation."""

    cell: str = ""
    slice: str = ""
    animal: str = ""
    note: str = ""


class Ended(Struct, frozen=True):
    """How a session ended, and where its record is."""

    how: str
    record: Path

    @property
    def exit_code(self) -> int:
        """The command's exit code."""
        return EXIT_CODES[self.how]


def read_text(path: Path) -> str:
    """Read a file that a person wrote; one sentence when that cannot be."""
    try:
        if path.stat().st_size > _LARGEST_FILE:
            raise InputError(
                f"{path}: larger than {_LARGEST_FILE // 1_000_000} MB: not such a file."
            )
        return path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file.") from None
    except IsADirectoryError:
        raise InputError(f"{path}: this is a folder; a file is needed.") from None
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: not UTF-8 text (byte {error.start + 1}).") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}.") from None


def prepare(protocol_path: Path, rig_path: Path | None, arm: int | None = None) -> Prepared:
    """Read, compile and check; the limits' verdicts are not acted on yet.

    Without a rig file the rehearsal rig that comes with the program is taken.
    """
    protocol_text = read_text(protocol_path)
    if rig_path is None:
        rig_file = REHEARSAL_RIG
        rig_text = resources.files("rigctl.data").joinpath(REHEARSAL_RIG).read_text("utf-8")
    else:
        rig_file = rig_path.name
        rig_text = read_text(rig_path)
    protocol_file = protocol_path.name
    protocol = parse_protocol(protocol_text, protocol_file)
    rig = parse_rig(rig_text, rig_file)
    plan = compile_plan(protocol, rig, protocol_file=protocol_file, rig_file=rig_file, arm=arm)
    return Prepared(
        protocol_file,
        protocol_text,
        protocol,
        rig_file,
        rig_text,
        rig,
        plan,
        limits.verdicts(plan, rig),
        arm,
    )


def ensure_folder(out: Path) -> Path:
    """Make a folder to write into, or say why that cannot be."""
    try:
        out.mkdir(parents=True, exist_ok=True)
        probe = out / ".writable"
        probe.touch()
        probe.unlink()
    except FileExistsError:
        raise InputError(f"{out}: there is a file of that name; a folder is needed.") from None
    except NotADirectoryError:
        raise InputError(f"{out}: part of this path is a file; a folder is needed.") from None
    except OSError as error:
        raise InputError(f"{out}: nothing can be written there: {error.strerror}.") from None
    return out


def make_folder(out: Path) -> Path:
    """Make the folder of a session; refuse one that holds a record already."""
    ensure_folder(out)
    if (out / RECORD_NAME).exists():
        raise InputError(
            f"{out}: holds a record already ({RECORD_NAME}); records are never overwritten: "
            "name another folder with --out."
        )
    return out


def next_folder(parent: Path, stem: str) -> Path:
    """Return the first of ``stem-001``, ``stem-002``, … that is not there yet."""
    n = 1
    while (parent / f"{stem}-{n:03d}").exists():
        n += 1
    return parent / f"{stem}-{n:03d}"


def refuse_what_cannot_run(prepared: Prepared) -> None:
    """Refuse what a limit forbids, and what this version cannot run yet."""
    limits.refuse(prepared.verdicts)
    for phase in prepared.plan.phases:
        if phase.rule is not None:
            raise Refused(
                f"{prepared.protocol_file}: phase {phase.name} is contingent on spikes; this "
                "version compiles, audits and checks such a phase but does not run it yet."
            )


def execute(
    prepared: Prepared,
    out: Path,
    options: OpenOptions,
    ids: Ids | None = None,
    operator: OperatorSeat | None = None,
    progress: Callable[[int], None] | None = None,
) -> Ended:
    """Run one session and leave its record in ``out``.

    Raises
    ------
    Refused
        A limit said no; nothing was made.
    InputError
        The folder or a knob cannot be used; nothing was made.
    LinkError
        The rig is not there.
    """
    refuse_what_cannot_run(prepared)
    backend = backends.load(prepared.rig.backend)
    connection = backend.open(prepared.rig, prepared.plan, options)
    folder = make_folder(out)
    path = folder / RECORD_NAME
    ids = ids or Ids()
    header = {
        "record_version": str(RECORD_VERSION),
        "rigctl_version": __version__,
        "python_version": ".".join(map(str, sys.version_info[:3])),
        "protocol_file": prepared.protocol_file,
        "protocol_text": prepared.protocol_text,
        "rig_file": prepared.rig_file,
        "rig_text": prepared.rig_text,
        "arm": "" if prepared.arm is None else str(prepared.arm),
        "plan_hash": prepared.plan.hash(),
        "plan_seed": str(prepared.plan.plan_seed),
        "world_seed": str(options.seed) if connection.simulated else "",
        "simulated": "true" if connection.simulated else "false",
        "backend": prepared.rig.backend,
        "faults": options.faults,
        "started_utc": connection.clock.utc(),
        "timed_by": "box",
        "cell": ids.cell,
        "slice": ids.slice,
        "animal": ids.animal,
        "note": ids.note,
        **{f"about.{key}": value for key, value in connection.about.items()},
    }
    sink = ThreadedSink(SqliteSink(path))
    runtime = Runtime(prepared.plan, header, connection, sink, operator or StandIn(), progress)
    finished = False
    try:
        runtime.run()
        finished = runtime.core.finished
    except KeyboardInterrupt:
        return Ended("interrupted", path)
    finally:
        sink.close(finished)
    return Ended(runtime.core.ended or "interrupted", path)
