"""Reading a record: everything that reports and exports are made from."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from functools import cached_property
from pathlib import Path
from types import TracebackType
from typing import Any, TypeVar

import msgspec

from rigctl.errors import InputError
from rigctl.record import RECORD_VERSION
from rigctl.record.sqlite import sidecar
from rigctl.session.rows import (
    EventRow,
    ForecastRow,
    MeasureRow,
    PairingRow,
    Row,
    SpikePairRow,
    SpikeRow,
    SyncRow,
    TriggerRow,
)
from rigctl.session.sweeps import Sweep

R = TypeVar("R", bound=Row)
# What every record says of itself; without these nothing can be made from it.
_NEEDED = ("protocol_file", "protocol_text", "rig_file", "rig_text", "plan_hash", "simulated")
_MAGIC = b"SQLite format 3\0"


class DamagedRecord(InputError):
    """A record that cannot be read whole."""


class Record:
    """An open record, read-only. Tables are read when they are first asked for.

    Use as a context manager, or call :meth:`close`.
    """

    def __init__(self, path: Path, db: sqlite3.Connection, header: dict[str, str]) -> None:
        self.path = path
        self.header = header
        self._db = db

    def __enter__(self) -> Record:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Let go of the file."""
        self._db.close()

    @property
    def simulated(self) -> bool:
        """Whether the simulated rig made it."""
        return self.header.get("simulated") == "true"

    @property
    def closed(self) -> bool:
        """Whether the session came to its end."""
        return bool(self.events) and self.events[-1].kind == "closed"

    @property
    def file_hash(self) -> str | None:
        """The file's hash as noted beside it when it was closed."""
        beside = sidecar(self.path)
        words = beside.read_text(encoding="ascii").split() if beside.is_file() else []
        return words[0] if words else None

    def rows(self, table: type[R]) -> Iterator[R]:
        """Iterate over a table in the order of its key.

        Raises
        ------
        InputError
            The file is damaged here.
        """
        names = ", ".join(f'"{n}"' for n in table.__struct_fields__)
        order = ", ".join(f'"{n}"' for n in table.KEY)
        try:
            for values in self._db.execute(f'SELECT {names} FROM "{table.TABLE}" ORDER BY {order}'):
                yield table(*values)
        except sqlite3.DatabaseError as error:
            raise _damaged(self.path, error) from None

    @cached_property
    def triggers(self) -> list[TriggerRow]:
        """All triggers, by id."""
        return list(self.rows(TriggerRow))

    @cached_property
    def spikes(self) -> list[SpikeRow]:
        """All spikes, by time."""
        return sorted(self.rows(SpikeRow), key=lambda s: (s.at_ns, s.id))

    @cached_property
    def pairings(self) -> list[PairingRow]:
        """All pairings, by id."""
        return list(self.rows(PairingRow))

    @cached_property
    def spike_pairs(self) -> list[SpikePairRow]:
        """All spike pairs, by pairing and k."""
        return list(self.rows(SpikePairRow))

    @cached_property
    def forecasts(self) -> list[ForecastRow]:
        """All forecasts, by time."""
        return list(self.rows(ForecastRow))

    @cached_property
    def measures(self) -> list[MeasureRow]:
        """All measures, by time."""
        return list(self.rows(MeasureRow))

    @cached_property
    def sync(self) -> list[SyncRow]:
        """All clock exchanges, by time."""
        return list(self.rows(SyncRow))

    @cached_property
    def events(self) -> list[EventRow]:
        """All events but for clock exchanges and the like that tables hold already."""
        names = ", ".join(EventRow.__struct_fields__)
        bulky = "('sync', 'fired', 'edge', 'complete', 'woke', 'sweep')"
        try:
            rows = self._db.execute(
                f"SELECT {names} FROM event WHERE kind NOT IN {bulky} ORDER BY seq"
            )
            return [EventRow(*values) for values in rows]
        except sqlite3.DatabaseError as error:
            raise _damaged(self.path, error) from None

    def bodies(self, kind: str) -> list[dict[str, Any]]:
        """Return the bodies of the events of a kind, each with its ``at_ns``.

        Raises
        ------
        InputError
            A body is not what the session writes.
        """
        return [{"at_ns": e.at_ns, **self.body(e)} for e in self.events if e.kind == kind]

    def body(self, event: EventRow) -> dict[str, Any]:
        """Return an event's body."""
        try:
            return msgspec.json.decode(event.body, type=dict[str, Any])
        except msgspec.DecodeError as error:
            raise DamagedRecord(
                f"{self.path}: the record is damaged: event {event.seq} ({event.kind}): {error}."
            ) from None

    def sweeps(self, from_ns: int, to_ns: int) -> Iterator[Sweep]:
        """Iterate over the sweeps whose first sample lies in [from_ns, to_ns)."""
        try:
            for at_ns, cell, clamp, rate_hz, unit, scale, samples in self._db.execute(
                "SELECT at_ns, cell, clamp, rate_hz, unit, scale, samples FROM sweep "
                "WHERE at_ns >= ? AND at_ns < ? ORDER BY at_ns",
                (from_ns, to_ns),
            ):
                yield Sweep(at_ns, rate_hz, unit, scale, samples, cell, clamp)
        except sqlite3.DatabaseError as error:
            raise _damaged(self.path, error) from None

    def sweep_at(self, at_ns: int) -> Sweep | None:
        """Return the sweep that covers ``at_ns``, or None."""
        row = self._one(
            "SELECT at_ns, cell, clamp, rate_hz, unit, scale, samples FROM sweep "
            "WHERE at_ns <= ? ORDER BY at_ns DESC LIMIT 1",
            (at_ns,),
        )
        if row is None:
            return None
        start_ns, cell, clamp, rate_hz, unit, scale, samples = row
        if start_ns + len(samples) // 2 / rate_hz * 1e9 <= at_ns:
            return None
        return Sweep(start_ns, rate_hz, unit, scale, samples, cell, clamp)

    def count(self, table: type[Row]) -> int:
        """Return the number of rows of a table."""
        row = self._one(f'SELECT count(*) FROM "{table.TABLE}"')
        return int(row[0]) if row else 0

    @cached_property
    def chain_tip(self) -> str:
        """The chain value of the last event."""
        row = self._one("SELECT chain FROM event ORDER BY seq DESC LIMIT 1")
        return str(row[0]) if row else ""

    def _one(self, query: str, values: tuple[int, ...] = ()) -> tuple[Any, ...] | None:
        try:
            row: tuple[Any, ...] | None = self._db.execute(query, values).fetchone()
        except sqlite3.DatabaseError as error:
            raise _damaged(self.path, error) from None
        return row


def connect(path: Path) -> tuple[sqlite3.Connection, dict[str, str]]:
    """Open a record's file read-only and return it with its header.

    Raises
    ------
    InputError
        Not there, not SQLite, not a record, damaged, or from a newer version.
    """
    try:
        with path.open("rb") as file:
            magic = file.read(len(_MAGIC))
    except FileNotFoundError:
        raise InputError(f"{path}: there is no record.") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read as a record: {error.strerror}.") from None
    if magic != _MAGIC:
        raise InputError(f"{path}: not a record: the file is not SQLite.")
    db = sqlite3.connect(f"{path.resolve().as_uri()}?mode=ro", uri=True)
    try:
        header = dict(db.execute("SELECT key, value FROM header").fetchall())
    except sqlite3.DatabaseError as error:
        db.close()
        if "no such table" in str(error):
            raise InputError(f"{path}: SQLite, but not a record of a session.") from None
        raise _damaged(path, error) from None
    version = header.get("record_version", "")
    if not version.isdigit():
        db.close()
        raise InputError(f"{path}: SQLite, but not a record of a session.")
    if int(version) > RECORD_VERSION:
        db.close()
        raise InputError(
            f"{path}: the record is of version {version}; this program reads up to "
            f"{RECORD_VERSION}: use a newer one."
        )
    missing = [key for key in _NEEDED if key not in header]
    if missing:
        db.close()
        raise DamagedRecord(
            f"{path}: the record is damaged: its header lacks {', '.join(missing)}."
        )
    return db, header


def open_record(path: Path) -> Record:
    """Open a record for reading; see :func:`connect` for what is refused."""
    db, header = connect(path)
    return Record(path, db, header)


def _damaged(path: Path, error: sqlite3.Error) -> DamagedRecord:
    return DamagedRecord(f"{path}: the record is damaged or truncated: {error}.")
