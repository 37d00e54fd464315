"""The records in a folder, a line each."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from rigctl.errors import InputError, RigctlError

if TYPE_CHECKING:
    from rich.table import Table


def find_records(folder: Path) -> list[dict[str, Any]]:
    """Return what each record below ``folder`` says of itself, in path order.

    A file that cannot be read as a record is listed with the sentence that says why.
    """
    from rigctl.record.read import open_record
    from rigctl.report.summary import summarise

    if not folder.is_dir():
        raise InputError(f"{folder}: there is no such folder.")
    found = []
    for path in sorted(folder.rglob("*.sqlite")):
        entry: dict[str, Any] = {"record": str(path)}
        try:
            with open_record(path) as record:
                header = record.header
                entry |= {
                    "simulated": header.get("simulated") == "true",
                    "started_utc": header.get("started_utc", ""),
                    "protocol": header.get("protocol_file", ""),
                    "cell": header.get("cell", ""),
                    "plan_hash": header.get("plan_hash", ""),
                    "closed": any(e.kind == "closed" for e in record.events[-1:]),
                }
                summary = summarise(record)
                entry |= {"ended": summary["ended"], "pairings": summary["pairings"]}
        except RigctlError as error:
            entry["problem"] = str(error)
        found.append(entry)
    return found


def as_table(found: list[dict[str, Any]], folder: Path) -> Table | str:
    """Return the list as a table for the terminal."""
    from rich.table import Table

    if not found:
        return f"no records below {folder}"
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for column in ("record", "started (UTC)", "protocol", "ended", "on target", "stamp"):
        table.add_column(column, overflow="fold", no_wrap=column in ("ended", "stamp"))
    for entry in found:
        record = str(Path(entry["record"]).relative_to(folder))
        if "problem" in entry:
            table.add_row(record, "", "", entry["problem"], "", "")
            continue
        pairings = entry["pairings"]
        table.add_row(
            record,
            entry["started_utc"].replace("T", " ").removesuffix("Z"),
            entry["protocol"],
            entry["ended"] if entry["closed"] else "open",
            f"{pairings['on_target']} of {pairings['planned']}",
            "SIMULATED" if entry["simulated"] else "",
        )
    return table
