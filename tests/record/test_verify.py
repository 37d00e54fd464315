"""A record holds what the session wrote, and shows every change made to it afterwards."""

from __future__ import annotations

import shutil
import sqlite3
from pathlib import Path

import pytest

from rigctl.errors import InputError
from rigctl.record.sqlite import file_sha256, sidecar
from rigctl.record.verify import verify
from rigctl.session.rows import TABLES
from tests.conftest import rehearsed

TABLE_NAMES = [table.TABLE for table in TABLES]


def _copy(record: Path, folder: Path) -> Path:
    copy = folder / record.name
    shutil.copy(record, copy)
    shutil.copy(sidecar(record), sidecar(copy))
    return copy


def _rehash(record: Path) -> None:
    """Make the sidecar agree again: a forger would."""
    sidecar(record).write_text(f"{file_sha256(record)}  {record.name}\n")


def _dump(record: Path) -> dict[str, list[tuple[object, ...]]]:
    with sqlite3.connect(record) as db:
        return {
            name: db.execute(f'SELECT * FROM "{name}" ORDER BY 1, 2').fetchall()
            for name in TABLE_NAMES
        }


def test_a_closed_record_verifies(short_record: Path) -> None:
    verdict = verify(short_record)
    assert verdict.ok
    assert verdict.status == "closed"
    assert verdict.rows["pairing"] == 12
    assert all(verdict.rows[name] > 0 for name in TABLE_NAMES)
    assert file_sha256(short_record) == sidecar(short_record).read_text().split()[0]


def test_same_seed_same_record_and_another_seed_differs(tmp_path: Path, short_record: Path) -> None:
    first = _dump(short_record)
    again = _dump(rehearsed(tmp_path / "again").record)
    other = _dump(rehearsed(tmp_path / "other", seed=2).record)
    for name in TABLE_NAMES:
        assert again[name] == first[name], name
    # What the seed drives differs; the plan's own table of what was asked does not.
    for name in ("spike", "spike_pair", "forecast", "measure", "sweep", "sync", "event"):
        assert other[name] != first[name], name


@pytest.mark.parametrize("table", TABLES, ids=TABLE_NAMES)
def test_a_changed_row_is_found_even_by_a_careful_forger(
    table: type, short_record: Path, tmp_path: Path
) -> None:
    record = _copy(short_record, tmp_path)
    column = {
        "header": "value",
        "trigger": "fired_ns",
        "spike": "at_ns",
        "pairing": "delivered_dt_ns",
        "spike_pair": "delivered_dt_ns",
        "forecast": "change",
        "measure": "value",
        "sweep": "samples",
        "sync": "offset_ns",
        "event": "at_ns",
    }[table.TABLE]  # type: ignore[attr-defined]
    name = table.TABLE  # type: ignore[attr-defined]
    new = {
        "header": "value || 'x'",
        "sweep": "zeroblob(length(samples))",
    }.get(name, f'"{column}" * 1.0001 + 1')
    where = (
        "key = 'note'"
        if name == "header"
        else "rowid = (SELECT max(rowid) FROM t)".replace(
            "FROM t", f'FROM "{name}" WHERE "{column}" IS NOT NULL'
        )
    )
    with sqlite3.connect(record) as db:
        changed = db.execute(f'UPDATE "{name}" SET "{column}" = {new} WHERE {where}').rowcount
    assert changed == 1
    _rehash(record)
    verdict = verify(record)
    assert not verdict.ok


@pytest.mark.parametrize("table", TABLES, ids=TABLE_NAMES)
def test_a_missing_row_is_found(table: type, short_record: Path, tmp_path: Path) -> None:
    record = _copy(short_record, tmp_path)
    name = table.TABLE  # type: ignore[attr-defined]
    with sqlite3.connect(record) as db:
        db.execute(
            f'DELETE FROM "{name}" WHERE rowid = (SELECT rowid FROM "{name}" LIMIT 1 OFFSET 2)'
        )
    _rehash(record)
    assert not verify(record).ok


def test_an_added_row_is_found(short_record: Path, tmp_path: Path) -> None:
    record = _copy(short_record, tmp_path)
    with sqlite3.connect(record) as db:
        db.execute("INSERT INTO spike VALUES (9999,'spike1',NULL,NULL,5,1,'post','detector','x',1)")
    _rehash(record)
    verdict = verify(record)
    assert any("replay has no such row" in f for f in verdict.findings)


@pytest.mark.parametrize("share", [0.1, 0.35, 0.6, 0.9, 0.999])
def test_a_changed_byte_is_found(share: float, short_record: Path, tmp_path: Path) -> None:
    record = _copy(short_record, tmp_path)
    data = bytearray(record.read_bytes())
    data[int(share * len(data))] ^= 1
    record.write_bytes(data)
    verdict = verify(record)
    assert not verdict.ok


def test_a_lost_sidecar_is_said(short_record: Path, tmp_path: Path) -> None:
    record = _copy(short_record, tmp_path)
    sidecar(record).unlink()
    assert verify(record).findings == ["session.sha256 is not beside the closed record"]


def test_a_truncated_record_is_called_so(short_record: Path, tmp_path: Path) -> None:
    record = _copy(short_record, tmp_path)
    record.write_bytes(record.read_bytes()[:40_000])
    verdict = verify(record)
    assert verdict.status == "truncated"
    assert not verdict.ok


def test_what_is_no_record_is_refused_in_one_sentence(short_record: Path, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there is no record"):
        verify(tmp_path / "none.sqlite")
    text = tmp_path / "text.sqlite"
    text.write_text("hello, this is not a database at all")
    with pytest.raises(InputError, match="not SQLite"):
        verify(text)
    other = tmp_path / "other.sqlite"
    with sqlite3.connect(other) as db:
        db.execute("CREATE TABLE birds (name)")
    with pytest.raises(InputError, match="not a record of a session"):
        verify(other)
    newer = _copy(short_record, tmp_path)
    with sqlite3.connect(newer) as db:
        db.execute("UPDATE header SET value = '99' WHERE key = 'record_version'")
    with pytest.raises(InputError, match="version 99; this program reads up to 1"):
        verify(newer)


def test_replay_reports_a_decision_that_it_would_not_have_made(
    short_record: Path, tmp_path: Path
) -> None:
    from rigctl.session.chain import CHAIN_START, link

    record = _copy(short_record, tmp_path)
    with sqlite3.connect(record) as db:
        events = db.execute("SELECT seq, at_ns, kind, body FROM event ORDER BY seq").fetchall()
        chain = CHAIN_START
        for seq, at_ns, kind, body in events:
            text = body.replace("as_planned", "abandoned") if kind == "ended" else body
            chain = link(chain, seq, at_ns, kind, text)
            db.execute("UPDATE event SET body = ?, chain = ? WHERE seq = ?", (text, chain, seq))
    _rehash(record)
    verdict = verify(record)
    assert verdict.findings == []
    assert any("recorded ended" in d for d in verdict.decisions)
