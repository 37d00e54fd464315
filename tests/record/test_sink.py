"""The record's writer: batches, order, replaced rows, disks that fail."""

from __future__ import annotations

import sqlite3
import threading
from collections.abc import Sequence
from contextlib import closing
from pathlib import Path

import pytest

from rigctl.errors import InputError
from rigctl.record.sink import MemorySink, RecordFailed, ThreadedSink
from rigctl.record.sqlite import SqliteSink
from rigctl.session.rows import HeaderRow, PairingRow, Row


def _pairing(number: int, fate: str) -> PairingRow:
    return PairingRow(number, 1, "s1", 10, None, fate, None)  # type: ignore[arg-type]


def test_rows_are_durable_after_flush_and_later_ones_replace(tmp_path: Path) -> None:
    path = tmp_path / "session.sqlite"
    sink = ThreadedSink(SqliteSink(path))
    sink.write([_pairing(1, "unknown"), HeaderRow("a", "b")])
    sink.flush()
    with closing(sqlite3.connect(path)) as db:
        assert db.execute("SELECT id, fate FROM pairing").fetchall() == [(1, "unknown")]
    sink.write([_pairing(1, "on_target")])
    sink.close(finished=True)
    with closing(sqlite3.connect(path)) as db:
        assert db.execute("SELECT id, fate FROM pairing").fetchall() == [(1, "on_target")]
        assert db.execute("PRAGMA journal_mode").fetchone() == ("delete",)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["session.sha256", "session.sqlite"]


def test_an_unfinished_record_has_no_hash_beside_it(tmp_path: Path) -> None:
    sink = ThreadedSink(SqliteSink(tmp_path / "session.sqlite"))
    sink.write([_pairing(1, "on_target")])
    sink.close(finished=False)
    assert not (tmp_path / "session.sha256").exists()


def test_a_record_is_never_overwritten(tmp_path: Path) -> None:
    (tmp_path / "session.sqlite").touch()
    with pytest.raises(InputError, match="already there"):
        SqliteSink(tmp_path / "session.sqlite")


class FullDisk(MemorySink):
    """Fails at the second batch."""

    def __init__(self) -> None:
        super().__init__()
        self.closed_as: bool | None = None
        self.batches = 0

    def write(self, rows: Sequence[Row]) -> None:
        self.batches += 1
        if self.batches == 2:
            raise RecordFailed("record: the disk is full.")
        super().write(rows)

    def close(self, finished: bool) -> None:
        self.closed_as = finished


def test_a_full_disk_is_told_at_the_next_call_and_never_closed_as_finished() -> None:
    inner = FullDisk()
    sink = ThreadedSink(inner)
    sink.write([_pairing(1, "on_target")])
    sink.flush()
    sink.write([_pairing(2, "on_target")])
    with pytest.raises(RecordFailed, match="disk is full"):
        sink.flush()
    with pytest.raises(RecordFailed):
        sink.write([_pairing(3, "on_target")])
    with pytest.raises(RecordFailed):
        sink.close(finished=True)
    assert inner.closed_as is False
    assert [r.id for r in inner.rows] == [1]  # type: ignore[attr-defined]


def test_a_beginning_that_fails_leaves_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(table: type[Row]) -> str:
        raise sqlite3.OperationalError("database or disk is full")

    monkeypatch.setattr("rigctl.record.sqlite.create_sql", fail)
    with pytest.raises(InputError, match="cannot be made there: database or disk is full"):
        SqliteSink(tmp_path / "session.sqlite")
    assert list(tmp_path.iterdir()) == []


class Gated(MemorySink):
    """Stands in the middle of a write until it is let go."""

    def __init__(self) -> None:
        super().__init__()
        self.entered, self.go = threading.Event(), threading.Event()

    def write(self, rows: Sequence[Row]) -> None:
        self.entered.set()
        self.go.wait()
        super().write(rows)


def test_flush_waits_for_a_batch_that_is_being_written() -> None:
    inner = Gated()
    sink = ThreadedSink(inner)
    sink.write([_pairing(1, "on_target")])
    inner.entered.wait()
    flushing = threading.Thread(target=sink.flush)
    flushing.start()
    flushing.join(0.05)
    assert flushing.is_alive()
    inner.go.set()
    flushing.join()
    assert len(inner.rows) == 1
    sink.close(finished=True)
