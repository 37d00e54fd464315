"""Is a record what the session wrote, and does replay give the same ledger and forecast?

Three checks, each on its own: the file against its hash (closed records), the event chain, and a
replay of the recorded inputs through a fresh session core, whose rows must equal every stored row.
"""

from __future__ import annotations

import math
import sqlite3
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, Literal, get_type_hints

import msgspec
from msgspec import Struct

from rigctl.errors import RigctlError
from rigctl.protocol.compile import compile_plan
from rigctl.protocol.load import parse_protocol, parse_rig
from rigctl.protocol.plan import Plan
from rigctl.record.read import DamagedRecord, connect
from rigctl.record.sqlite import file_sha256, sidecar
from rigctl.session import inputs as inp
from rigctl.session.chain import CHAIN_START, link
from rigctl.session.core import SessionCore
from rigctl.session.rows import TABLES, EventRow, Row, SweepRow
from rigctl.session.sweeps import Sweep

FLOAT_TOLERANCE = 1e-9
_MOST_FINDINGS = 20


class Verdict(Struct, frozen=True):
    """What verification found.

    ``status`` says whether the record is ``closed``, ``open`` (the session was interrupted) or
    ``truncated`` (the file or its events are cut). ``findings`` is empty when all is well;
    ``decisions`` lists recorded decisions that replay would not have made.
    """

    record: str
    status: Literal["closed", "open", "truncated"]
    events: int
    rows: dict[str, int]
    chain_tip: str
    findings: list[str]
    decisions: list[str]

    @property
    def ok(self) -> bool:
        """Whether nothing was found."""
        return not self.findings and not self.decisions


def plan_of(header: dict[str, str]) -> Plan:
    """Compile the plan again from the texts in a record's header."""
    protocol_file, rig_file = header["protocol_file"], header["rig_file"]
    return compile_plan(
        parse_protocol(header["protocol_text"], protocol_file),
        parse_rig(header["rig_text"], rig_file),
        protocol_file=protocol_file,
        rig_file=rig_file,
        arm=int(header["arm"]) if header.get("arm") else None,
    )


def verify(path: Path, progress: Callable[[float], None] | None = None) -> Verdict:
    """Verify a record.

    Parameters
    ----------
    path : Path
    progress : callable, optional
        Told the fraction done, now and then.

    Raises
    ------
    InputError
        The file is not there, is not a record, or is from a newer version.
    """
    try:
        db, header = connect(path)
    except DamagedRecord as error:
        return Verdict(str(path), "truncated", 0, {}, "", [str(error)], [])
    try:
        return _verify(db, header, path, progress or (lambda fraction: None))
    finally:
        db.close()


def _verify(
    db: sqlite3.Connection,
    header: dict[str, str],
    path: Path,
    progress: Callable[[float], None],
) -> Verdict:
    findings: list[str] = []
    state = _integrity(db)
    if state != "ok":
        findings.append(f"the file is damaged: {state}")
    try:
        stored_events = list(_rows(db, EventRow))
    except sqlite3.DatabaseError as error:
        return Verdict(str(path), "truncated", 0, {}, "", [f"the file is damaged: {error}"], [])
    closed = bool(stored_events) and stored_events[-1].kind == "closed"
    status: Literal["closed", "open", "truncated"] = "closed" if closed else "open"
    if state != "ok":
        status = "truncated"
    tip = _check_chain(stored_events, findings)
    _check_sidecar(path, closed, findings)
    progress(0.2)
    counts: dict[str, int] = {}
    decisions: list[str] = []
    try:
        expected = _replay(db, header, stored_events, findings, decisions, progress)
        for table in TABLES:
            if table is not EventRow:
                counts[table.TABLE] = _compare(db, table, expected.get(table, {}), findings)
    except (RigctlError, msgspec.MsgspecError, KeyError, ValueError, TypeError) as error:
        findings.append(f"replay stopped: {error}")
    except sqlite3.DatabaseError as error:
        status = "truncated"
        findings.append(f"the file is damaged: {error}")
    counts["event"] = len(stored_events)
    progress(1.0)
    more = len(findings) - _MOST_FINDINGS
    shown = findings[:_MOST_FINDINGS] + ([f"and {more} more"] if more > 0 else [])
    return Verdict(
        str(path), status, len(stored_events), counts, tip, shown, decisions[:_MOST_FINDINGS]
    )


def _integrity(db: sqlite3.Connection) -> str:
    try:
        return str(db.execute("PRAGMA integrity_check(1)").fetchone()[0])
    except sqlite3.DatabaseError as error:
        return str(error)


def _rows(db: sqlite3.Connection, table: type[Any]) -> Iterator[Any]:
    names = ", ".join(f'"{n}"' for n in table.__struct_fields__)
    order = ", ".join(f'"{n}"' for n in table.KEY)
    for values in db.execute(f'SELECT {names} FROM "{table.TABLE}" ORDER BY {order}'):
        yield table(*values)


def _check_chain(events: list[EventRow], findings: list[str]) -> str:
    previous = CHAIN_START
    for n, event in enumerate(events):
        if event.seq != n:
            findings.append(f"event {n} is missing (event {event.seq} stands in its place)")
            break
        expected = link(previous, event.seq, event.at_ns, event.kind, event.body)
        if event.chain != expected:
            findings.append(f"event {n} ({event.kind}) was changed: its chain value differs")
            break
        previous = expected
    return previous


def _check_sidecar(path: Path, closed: bool, findings: list[str]) -> None:
    beside = sidecar(path)
    if not closed:
        return
    if not beside.is_file():
        findings.append(f"{beside.name} is not beside the closed record")
        return
    words = beside.read_text(encoding="ascii", errors="replace").split()
    if not words or words[0] != file_sha256(path):
        findings.append(f"the file's bytes differ from {beside.name}")


def _replay(
    db: sqlite3.Connection,
    header: dict[str, str],
    events: list[EventRow],
    findings: list[str],
    decisions: list[str],
    progress: Callable[[float], None],
) -> dict[type[Row], dict[tuple[Any, ...], Row]]:
    """Feed the recorded inputs to a fresh core; return the rows that it writes, by key."""
    plan = plan_of(header)
    if plan.hash() != header.get("plan_hash"):
        findings.append("the header's texts compile to another plan hash than the recorded one")
    core = SessionCore(plan)
    expected: dict[type[Row], dict[tuple[Any, ...], Row]] = {}
    replayed: list[EventRow] = []
    for n, event in enumerate(events):
        if event.kind not in inp.INPUT_KINDS:
            continue
        item = inp.decode(event.body)
        sweep = _sweep(db, item, findings) if isinstance(item, inp.SweepTaken) else None
        if isinstance(item, inp.SweepTaken) and sweep is None:
            continue
        for row in core.handle(item, sweep).rows:
            if isinstance(row, EventRow):
                replayed.append(row)
            elif isinstance(row, SweepRow):
                # Samples are compared by hash; keeping them all would need the record's size.
                light = msgspec.structs.replace(row, samples=b"")
                expected.setdefault(SweepRow, {})[_key(light)] = light
            else:
                expected.setdefault(type(row), {})[_key(row)] = row
        if n % 500 == 0:
            progress(0.2 + 0.6 * n / max(1, len(events)))
    for stored, again in zip(events, replayed, strict=False):
        if (stored.kind, stored.body) != (again.kind, again.body):
            decisions.append(
                f"event {stored.seq}: recorded {stored.kind} {stored.body[:80]}, "
                f"replay makes {again.kind} {again.body[:80]}"
            )
            break
    if len(events) > len(replayed):
        decisions.append(f"{len(events) - len(replayed)} recorded decisions that replay lacks")
    return expected


def _sweep(db: sqlite3.Connection, item: inp.SweepTaken, findings: list[str]) -> Sweep | None:
    found = db.execute(
        "SELECT samples FROM sweep WHERE at_ns = ? AND sha256 = ?", (item.start_ns, item.sha256)
    ).fetchone()
    sweep = found and Sweep(
        item.start_ns, item.rate_hz, item.unit, item.scale, found[0], item.cell, item.clamp
    )
    if not sweep or sweep.sha256() != item.sha256:
        findings.append(f"the sweep at {item.start_ns} ns is missing or was changed")
        return None
    return sweep


def _key(row: Row) -> tuple[Any, ...]:
    return tuple(getattr(row, name) for name in row.KEY)


def _compare(
    db: sqlite3.Connection,
    table: type[Row],
    expected: dict[tuple[Any, ...], Row],
    findings: list[str],
) -> int:
    """Compare a stored table with what replay wrote; return the number of stored rows."""
    count = 0
    floats = {n for n, t in get_type_hints(table).items() if t is float}
    waiting = dict(expected)
    for stored in _rows(db, table):
        count += 1
        again = waiting.pop(_key(stored), None)
        if again is None:
            findings.append(f"{table.TABLE} {_key(stored)}: replay has no such row")
            continue
        for name in table.__struct_fields__:
            if table is SweepRow and name == "samples":
                continue
            here, there = getattr(stored, name), getattr(again, name)
            if name in floats and isinstance(here, int | float):
                same = math.isclose(here, there, rel_tol=FLOAT_TOLERANCE, abs_tol=1e-300)
            else:
                same = type(here) is type(there) and here == there
            if not same:
                findings.append(
                    f"{table.TABLE} {_key(stored)}: {name} is {str(here)[:60]!r}, "
                    f"replay gives {str(there)[:60]!r}"
                )
    findings.extend(f"{table.TABLE} {key}: the row is missing" for key in waiting)
    return count
