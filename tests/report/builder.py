"""A record written row by row, for cases whose every number is known beforehand."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path

from rigctl.protocol.compile import compile_plan
from rigctl.protocol.load import parse_protocol, parse_rig
from rigctl.record import RECORD_VERSION
from rigctl.record.sqlite import SqliteSink
from rigctl.session.rows import (
    EventRow,
    ForecastRow,
    HeaderRow,
    PairFate,
    PairingRow,
    Row,
    SpikePairRow,
    SpikeRow,
    SyncRow,
    TriggerRow,
)
from tests.conftest import RIG_TEXT, SHORT

S = 1_000_000_000
MS = 1_000_000
TICK_NS = 500


def build(
    path: Path,
    dts_ms: Sequence[float | None] = (),
    fates: Sequence[PairFate] = (),
    late_ticks: Sequence[int] = (),
    protocol: str = SHORT,
    closed: bool = True,
    sync: Sequence[SyncRow] = (),
    **header: str,
) -> Path:
    """Write a record in which pairing n delivered ``dts_ms[n]`` at a target of +10 ms.

    Parameters
    ----------
    path : Path
    dts_ms : sequence of float or None
        Delivered Δt, one pairing each; None where there was none.
    fates : sequence of str
        The fates beside; by default ``on_target``, or ``no_post`` where there is no Δt.
    late_ticks : sequence of int
        Adds one fired trigger for each, this many ticks late.
    protocol : str
    closed : bool
        Whether the session came to its end.
    sync : sequence of SyncRow
    **header
        Header keys that differ.
    """
    plan = compile_plan(
        parse_protocol(protocol, "protocol.toml"),
        parse_rig(RIG_TEXT, "rig.toml"),
        protocol_file="protocol.toml",
        rig_file="rig.toml",
    )
    keys = {
        "record_version": str(RECORD_VERSION),
        "rigctl_version": "0",
        "protocol_file": "protocol.toml",
        "protocol_text": protocol,
        "rig_file": "rig.toml",
        "rig_text": RIG_TEXT,
        "arm": "",
        "plan_hash": plan.hash(),
        "plan_seed": str(plan.plan_seed),
        "world_seed": "0",
        "simulated": "true",
        "backend": "sim",
        "faults": "",
        "started_utc": "2000-01-01T00:00:00Z",
        "timed_by": "box",
    } | header
    rows: list[Row] = [HeaderRow(k, v) for k, v in keys.items()]
    for n, dt_ms in enumerate(dts_ms):
        fate: PairFate = "on_target" if dt_ms is not None else "no_post"
        rows += _pairing(n + 1, dt_ms, fates[n] if fates else fate)
    for n, late in enumerate(late_ticks):
        fired_ns = (1000 * n + late) * TICK_NS
        rows.append(
            TriggerRow(n + 1, "pre1", 1, None, 0, 1000 * n, 100_000, fired_ns, None, 1, 1, "fired")
        )
    rows += sync
    rows += _events(60 * S + len(dts_ms) * S, closed)
    sink = SqliteSink(path)
    sink.write(rows)
    sink.close(closed)
    return path


def _pairing(n: int, dt_ms: float | None, fate: PairFate) -> list[Row]:
    pre_ns = 60 * S + n * S
    dt_ns = None if dt_ms is None else round(dt_ms * MS)
    rows: list[Row] = [
        SpikeRow(2 * n, "pre1", None, "s1", pre_ns, 1, "pre", "derived", "epsp_onset", n),
        PairingRow(n, 1, "s1", 10 * MS, dt_ns, fate, None),
        SpikePairRow(n, 1, 2 * n, None if dt_ns is None else 2 * n + 1, 10 * MS, dt_ns, fate),
        ForecastRow(pre_ns, "s1", "pair-all", "bi-poo-2001", n / 100, n / 200, n / 50),
    ]
    if dt_ns is not None:
        rows.append(
            SpikeRow(2 * n + 1, "spike1", None, None, pre_ns + dt_ns, 1, "post", "detector",
                     "peak", n)
        )  # fmt: skip
    return rows


def _events(end_ns: int, closed: bool) -> list[Row]:
    told: list[tuple[int, str, dict[str, object]]] = [
        (0, "header", {}),
        (
            S,
            "connected",
            {
                "firmware": "built",
                "boot": 1,
                "tick_num": TICK_NS,
                "tick_den": 1,
                "queue_slots": 32,
            },
        ),
        (S, "phase_start", {"phase": 0, "name": "baseline", "kind": "baseline", "start_ns": S}),
        (60 * S, "phase_end", {"phase": 0, "name": "baseline", "at_ns": 60 * S}),
        (
            60 * S,
            "phase_start",
            {"phase": 1, "name": "induction", "kind": "induction", "start_ns": 60 * S},
        ),
    ]
    if closed:
        told += [
            (end_ns, "phase_end", {"phase": 1, "name": "induction", "at_ns": end_ns}),
            (end_ns, "ended", {"how": "as_planned", "text": "done"}),
            (end_ns, "closed", {}),
        ]
    return [
        EventRow(seq, at_ns, kind, json.dumps(body), f"chain{seq}")
        for seq, (at_ns, kind, body) in enumerate(told)
    ]
