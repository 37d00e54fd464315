"""Opening records: what is refused, and what is read."""

from __future__ import annotations

import shutil
import sqlite3
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from rigctl.errors import InputError
from rigctl.record.read import open_record
from rigctl.record.sqlite import file_sha256
from rigctl.report.page import write_page
from tests.report.builder import build


def _text(path: Path) -> None:
    path.write_text("not a record at all, but long enough to have sixteen bytes")


def _empty(path: Path) -> None:
    path.write_bytes(b"")


def _folder(path: Path) -> None:
    path.mkdir()


def _other(path: Path) -> None:
    with sqlite3.connect(path) as db:
        db.execute("CREATE TABLE cats (name TEXT)")
    db.close()


def _newer(path: Path) -> None:
    build(path, record_version="7")


def _headless(path: Path) -> None:
    build(path)
    with sqlite3.connect(path) as db:
        db.execute("DELETE FROM header WHERE key = 'protocol_text'")
    db.close()


@pytest.mark.parametrize(
    ("make", "says"),
    [
        (lambda path: None, "there is no record."),
        (_folder, "cannot be read as a record"),
        (_text, "not a record: the file is not SQLite."),
        (_empty, "not a record: the file is not SQLite."),
        (_other, "SQLite, but not a record of a session."),
        (_newer, "the record is of version 7; this program reads up to 1: use a newer one."),
        (_headless, "the record is damaged: its header lacks protocol_text."),
    ],
)
def test_what_is_no_record_is_refused_in_a_sentence(
    tmp_path: Path, make: Callable[[Path], None], says: str
) -> None:
    path = tmp_path / "session.sqlite"
    make(path)
    with pytest.raises(InputError) as told:
        open_record(path)
    assert str(told.value).startswith(f"{path}: ")
    assert says in str(told.value)
    assert "\n" not in str(told.value)


@pytest.mark.parametrize("keep", [0.02, 0.3, 0.6, 0.9])
def test_a_truncated_record_makes_no_page(tmp_path: Path, short_record: Path, keep: float) -> None:
    path, page = tmp_path / "session.sqlite", tmp_path / "report.html"
    whole = short_record.read_bytes()
    path.write_bytes(whole[: int(keep * len(whole))])
    with pytest.raises(InputError, match=r"damaged or truncated|not a record of a session"):
        write_page(path, page)
    assert list(tmp_path.iterdir()) == [path]


def test_a_broken_event_makes_no_page(tmp_path: Path) -> None:
    path = build(tmp_path / "session.sqlite", [10.0])
    with sqlite3.connect(path) as db:
        db.execute("UPDATE event SET body = '{\"how\": ' WHERE kind = 'ended'")
    db.close()
    with pytest.raises(InputError, match=r"event 6 \(ended\)"):
        write_page(path, tmp_path / "report.html")


def test_reading_changes_nothing(tmp_path: Path, short_record: Path) -> None:
    path = tmp_path / "session.sqlite"
    shutil.copy(short_record, path)
    before = file_sha256(path)
    with open_record(path) as record:
        assert record.closed
        assert record.file_hash is None
        assert len(record.pairings) == 12
        with pytest.raises(sqlite3.OperationalError, match="readonly"):
            record._db.execute("DELETE FROM pairing")
    assert file_sha256(path) == before
    assert list(tmp_path.iterdir()) == [path]


def test_sweeps_come_one_by_one_and_by_time(short_record: Path) -> None:
    with open_record(short_record) as record:
        swept = record.sweeps(0, 1 << 62)
        assert isinstance(swept, Iterator)
        whole = list(swept)
        assert len(whole) > 12
        first, second = whole[0].at_ns, whole[1].at_ns
        assert [s.at_ns for s in record.sweeps(first, second)] == [first]
        for sweep in whole[:3]:
            end_ns = sweep.at_ns + round(len(sweep.samples) // 2 / sweep.rate_hz * 1e9)
            for at_ns, covered in (
                (sweep.at_ns, True),
                (end_ns - 1000, True),
                (sweep.at_ns - 1, False),
                (end_ns + 1000, False),
            ):
                found = record.sweep_at(at_ns)
                assert (found is not None and found.at_ns == sweep.at_ns) is covered


def test_an_open_record_is_read_as_far_as_it_goes(tmp_path: Path) -> None:
    path = build(tmp_path / "session.sqlite", [10.0, 9.0], closed=False)
    with open_record(path) as record:
        assert not record.closed
        assert len(record.pairings) == 2
        assert record.chain_tip == "chain4"
