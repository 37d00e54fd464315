"""The session's log in words: what the program, the box and the operator did, and when."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from rigctl.report.facts import Facts
from rigctl.report.names import phase_name

Body = dict[str, Any]


def _gate(body: Body) -> str:
    return f"{phase_name(body['phase'])}: gate {body['gate']}: {body['verdict']} ({body['text']})"


def _connected(body: Body) -> str:
    tick_ns = body["tick_num"] / body["tick_den"]
    return (
        f"box answered: {body['firmware']}, boot {body['boot']}, tick {tick_ns:g} ns, "
        f"{body['queue_slots']} places in its queue"
    )


def _operator(body: Body) -> str:
    said = f": {body['text']}" if body.get("text") else ""
    return f"{body['command'].replace('_', ' ')}{said}"


# By kind: who it was, and the words for its body.
_WORDS: dict[str, tuple[str, Callable[[Body], str]]] = {
    "connected": ("box", _connected),
    "armed": ("box", lambda b: "armed: both steps done"),
    "dropped_late": ("box", lambda b: f"trigger {b['trigger']} dropped: too late ({b['by']})"),
    "refused": ("box", lambda b: f"trigger {b['trigger']} refused: {b['reason']}"),
    "cancelled": ("box", lambda b: f"trigger {b['trigger']} withdrawn"),
    "link_fault": ("link", lambda b: f"mended: {b['what']} (× {b['count']})"),
    "link_lost": ("link", lambda b: f"LOST: {b['what']}"),
    "box_reset": ("box", lambda b: f"STARTED ANEW: boot {b['boot']}"),
    "box_disarmed": ("box", lambda b: f"disarmed: {b['reason']}"),
    "operator": ("operator", _operator),
    "state": ("session", lambda b: f"{b['from']} → {b['to']} ({b['cause']})".replace("_", " ")),
    "phase_start": ("session", lambda b: f"{phase_name(b['name'])} begins"),
    "phase_end": ("session", lambda b: f"{phase_name(b['name'])} ends"),
    "gate": ("session", _gate),
    "alarm": ("ALARM", lambda b: f"{b['name'].replace('_', ' ')}: {b['text']}"),
    "ended": ("session", lambda b: f"ended: {b['how']} ({b['text']})".replace("_", " ")),
    "closed": ("session", lambda b: "record closed"),
}
# What a reader must see without opening anything.
_INTERRUPTIONS = frozenset(
    {
        "dropped_late",
        "refused",
        "cancelled",
        "link_fault",
        "link_lost",
        "box_reset",
        "operator",
        "gate",
        "alarm",
    }
)


def log_rows(facts: Facts, interruptions_only: bool = False) -> list[tuple[str, str, str]]:
    """Return (minutes since the induction's start, who, what), in order.

    Parameters
    ----------
    facts : Facts
    interruptions_only : bool
        Leave out what a session without incident has too.
    """
    rows = []
    for event in facts.record.events:
        body = facts.record.body(event)
        if event.kind == "header" or (interruptions_only and not _interrupts(event.kind, body)):
            continue
        who, words = _WORDS.get(event.kind, (event.kind.replace("_", " "), _plain))
        minute = f"{facts.minutes(event.at_ns):+.3f}" if event.at_ns else "before"
        rows.append((minute, who, words(body)))
    return rows


def _interrupts(kind: str, body: Body) -> bool:
    if kind == "box_disarmed":
        return bool(body.get("reason") != "asked")
    if kind == "state":
        return body.get("cause") in ("pause", "resume")
    return kind in _INTERRUPTIONS


def _plain(body: Body) -> str:
    return ", ".join(f"{k} {v}" for k, v in body.items() if k not in ("type", "at_ns"))[:300]
