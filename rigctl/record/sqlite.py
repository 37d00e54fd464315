"""The record as an SQLite file: tables from the row structs, group commits, closing."""

from __future__ import annotations

import contextlib
import hashlib
import sqlite3
from collections.abc import Callable, Sequence
from itertools import groupby
from operator import attrgetter
from pathlib import Path
from typing import Any, get_type_hints

from rigctl.errors import InputError
from rigctl.record.sink import RecordFailed
from rigctl.session.rows import TABLES, Row

_SQL_TYPES: dict[type, str] = {int: "INTEGER", float: "REAL", bytes: "BLOB"}


def _sql_type(annotation: Any) -> str:
    """Return the column type of a field annotation (text for anything not numeric)."""
    candidates = getattr(annotation, "__args__", (annotation,))
    for candidate in candidates:
        if candidate in _SQL_TYPES:
            null = "" if type(None) in candidates else " NOT NULL"
            return _SQL_TYPES[candidate] + null
    return "TEXT" + ("" if type(None) in candidates else " NOT NULL")


def create_sql(table: type[Row]) -> str:
    """Return the CREATE TABLE statement of a row struct."""
    hints = get_type_hints(table)
    columns = [f'"{name}" {_sql_type(hints[name])}' for name in table.__struct_fields__]
    key = ", ".join(f'"{name}"' for name in table.KEY)
    return f'CREATE TABLE "{table.TABLE}" ({", ".join(columns)}, PRIMARY KEY ({key}))'


def insert_sql(table: type[Row]) -> str:
    """Return the statement that writes a row, replacing one with the same key."""
    names = table.__struct_fields__
    columns = ", ".join(f'"{name}"' for name in names)
    return (
        f'INSERT OR REPLACE INTO "{table.TABLE}" ({columns}) VALUES ({", ".join("?" * len(names))})'
    )


def row_values(table: type[Row]) -> Callable[[Row], tuple[Any, ...]]:
    """Return a function from a row to its values in column order."""
    getter: Callable[[Row], tuple[Any, ...]] = attrgetter(*table.__struct_fields__)
    return getter


_INSERT = {table: (insert_sql(table), row_values(table)) for table in TABLES}


class SqliteSink:
    """Writes a new record file.

    Parameters
    ----------
    path : Path
        Must not exist: a record is never overwritten.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        if path.exists():
            raise InputError(f"{path}: a record is already there; name another folder with --out.")
        try:
            # The writer thread uses the connection that this thread opened; never both at once.
            self._db = sqlite3.connect(path, check_same_thread=False, isolation_level=None)
            self._db.execute("PRAGMA journal_mode=WAL")
            self._db.execute("PRAGMA synchronous=FULL")
            self._db.execute("BEGIN")
            for table in TABLES:
                self._db.execute(create_sql(table))
            self._db.execute("COMMIT")
        except sqlite3.Error as error:
            self._leave_nothing()
            raise InputError(f"{path}: a record cannot be made there: {error}.") from None

    def _leave_nothing(self) -> None:
        """Take away what a failed beginning has made."""
        if hasattr(self, "_db"):
            self._db.close()
        for suffix in ("", "-wal", "-shm"):
            self.path.with_name(self.path.name + suffix).unlink(missing_ok=True)

    def write(self, rows: Sequence[Row]) -> None:
        """Write ``rows`` into the open transaction."""
        try:
            if not self._db.in_transaction:
                self._db.execute("BEGIN")
            for table, group in groupby(sorted(rows, key=_table_order), key=type):
                sql, values = _INSERT[table]
                self._db.executemany(sql, map(values, group))
        except sqlite3.Error as error:
            raise RecordFailed(f"{self.path}: the record cannot be written: {error}.") from None

    def flush(self) -> None:
        """Commit, durably."""
        try:
            if self._db.in_transaction:
                self._db.execute("COMMIT")
        except sqlite3.Error as error:
            raise RecordFailed(f"{self.path}: the record cannot be written: {error}.") from None

    def close(self, finished: bool) -> None:
        """Commit and close; when ``finished``, leave one plain file and its hash beside it."""
        try:
            self.flush()
            if finished:
                self._db.execute("PRAGMA wal_checkpoint(TRUNCATE)")
                # Whoever reads the record at this moment keeps the mode as it is; the file itself
                # is whole either way.
                with contextlib.suppress(sqlite3.OperationalError):
                    self._db.execute("PRAGMA journal_mode=DELETE")
        except sqlite3.Error as error:
            raise RecordFailed(f"{self.path}: the record cannot be closed: {error}.") from None
        finally:
            self._db.close()
        if finished:
            digest = file_sha256(self.path)
            sidecar(self.path).write_text(f"{digest}  {self.path.name}\n", encoding="ascii")


_ORDER = {table: i for i, table in enumerate(TABLES)}


def _table_order(row: Row) -> int:
    return _ORDER[type(row)]


def sidecar(path: Path) -> Path:
    """Return where a record's file hash is kept: ``session.sha256`` beside ``session.sqlite``."""
    return path.with_suffix(".sha256")


def file_sha256(path: Path) -> str:
    """Return a file's SHA-256 (hex)."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
