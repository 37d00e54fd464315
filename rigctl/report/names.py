"""Names as people say them."""

from __future__ import annotations

_EVENTS = {
    "epsp_onset": "EPSP onset",
    "presynaptic_spike": "presynaptic spike",
    "field_epsp_onset": "onset of the field EPSP",
    "spike_peak": "spike peak",
    "spike_threshold": "spike threshold",
    "trigger": "trigger",
}


def event_name(reference: str) -> str:
    """Return a reference event's name in words."""
    return _EVENTS.get(reference, reference.replace("_", " "))


def phase_name(name: str) -> str:
    """Return a phase's name; the one that the program gives in words."""
    return name.replace("follow_up", "follow-up")


def fate_name(fate: str) -> str:
    """Return a fate in words."""
    return fate.replace("_", " ")
