"""What the page says in sentences: five lines, the figures' claims, a drafted methods paragraph.

Every number comes from the record. A forecast says "under this rule these delivered times imply";
it never says that the synapse changed.
"""

from __future__ import annotations

from rigctl.report.facts import Facts
from rigctl.session.rows import PAIR_FATES

SIMULATED_NOTE = (
    "The simulated rig made this record. It rehearses the method; it is evidence of nothing "
    "biological."
)
BAND_NOTE = (
    "The band holds what the times leave open: the uncertainty of the latency that dates each "
    "derived pre event, and events of which nobody knows. How well the rule or its parameters fit "
    "this preparation is not in it."
)
_ENDED = {
    "as_planned": "It ended as planned",
    "induction_ended_early": "The induction was ended early by the operator",
    "abandoned": "The operator abandoned the cell",
    "gate_failed": "A start gate failed",
    "link_lost": "The link to the box was lost",
    "box_reset": "The box started anew and the session was ended",
    "box_disarmed": "The box was disarmed",
    "refused": "The box could not do what the plan asks",
    "interrupted": "It was interrupted; the record is open",
}
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
    return _EVENTS.get(reference, reference)


def five_lines(facts: Facts) -> list[str]:
    """Return what was asked and what happened, a line each."""
    return [_asked(facts), _happened(facts), _delta_t(facts), _missed(facts), _forecast(facts)]


def _asked(facts: Facts) -> str:
    counts, dt = facts.summary["pairings"], facts.summary["dt_ms"]
    pre, post = event_name(facts.plan.pre_reference), event_name(facts.plan.post_reference)
    target = "" if dt["target"] is None else f" at Δt {dt['target']:+g} ms"
    return (
        f"Asked: {counts['planned']} pairings{target} on pathway {facts.paired or '(none)'}, "
        f"Δt from {pre} to {post} (positive: pre leads)."
    )


def _happened(facts: Facts) -> str:
    counts = facts.summary["pairings"]
    ended = _ENDED.get(facts.summary["ended"], facts.summary["ended"])
    return (
        f"Happened: {counts['delivered']} pairings delivered both spikes, "
        f"{counts['on_target']} of them on target. {ended} after "
        f"{facts.summary['duration_s'] / 60:.1f} min."
    )


def _delta_t(facts: Facts) -> str:
    dt = facts.summary["dt_ms"]
    _numbers, errors = facts.errors_ms()
    if dt["mean"] is None:
        if len(errors) == 0:
            return "Δt: none was delivered."
        spread = f" ± {errors.std(ddof=1):.2f} ms (SD)" if len(errors) > 1 else " ms"
        return f"Δt: error {errors.mean():+.2f}{spread} over {len(errors)} spike pairs."
    spread = "" if dt["sd"] is None else f" ± {dt['sd']:.2f} ms (SD)"
    text = (
        f"Δt: {dt['mean']:+.2f}{spread}, {dt['min']:+.2f} to {dt['max']:+.2f} ms; "
        f"mean error {dt['mean'] - dt['target']:+.2f} ms."
    )
    creep = facts.creep()
    if creep is not None:
        target = dt["target"]
        text += (
            f" Spike latency crept: Δt moved by {creep.total_ms:+.1f} ± {creep.half_ms:.1f} ms "
            f"over the induction, from {target + creep.first_ms:+.1f} to "
            f"{target + creep.last_ms:+.1f} ms."
        )
        first = facts.first_off_target()
        if first is not None:
            text += f" The first pairing off target was number {first}."
    return text


def _missed(facts: Facts) -> str:
    counts = facts.summary["pairings"]
    parts = [f"{counts[f]} {f.replace('_', ' ')}" for f in PAIR_FATES[1:] if counts[f]]
    ledger = "Ledger: " + (", ".join(parts) if parts else "no pairing missed, doubled or unknown")
    alarms = len(facts.summary["alarms"])
    return f"{ledger}; {alarms} alarm{'' if alarms == 1 else 's'}."


def _forecast(facts: Facts) -> str:
    parts = []
    for name, value in facts.summary["forecast"].items():
        planned = facts.summary["forecast_as_planned"].get(name)
        exactly = f" (planned exactly {planned['change_pct']:+.1f} %)" if planned else ""
        parts.append(
            f"under {name} these delivered times imply {value['change_pct']:+.1f} % "
            f"[{value['low_pct']:+.1f}, {value['high_pct']:+.1f}]{exactly}"
        )
    return "Forecast: " + ("; ".join(parts) or "none") + "."


def methods(facts: Facts) -> str:
    """Return a methods paragraph that says only what the record holds."""
    plan, summary, header = facts.plan, facts.summary, facts.record.header
    counts, dt = summary["pairings"], summary["dt_ms"]
    pre, post = event_name(plan.pre_reference), event_name(plan.post_reference)
    phases = ", ".join(f"{p.name} ({(p.end_ns - p.start_ns) / 6e10:.1f} min)" for p in facts.phases)
    sentences = []
    if facts.simulated:
        sentences.append("[SIMULATED: a rehearsal, no preparation.]")
    sentences.append(
        f"The session ran in {len(facts.phases)} phases: {phases}. Of {counts['planned']} planned "
        f"pairings {counts['delivered']} were delivered; {counts['no_post']} lacked the "
        f"postsynaptic spike, {counts['no_pre']} the presynaptic event, {counts['doublet']} had "
        f"more than the planned spikes, {counts['unknown']} are unknown, {counts['not_run']} "
        "were not run."
    )
    if dt["mean"] is not None and dt["sd"] is not None:
        sentences.append(
            f"Δt was counted from {pre} to {post}; the delivered Δt was {dt['mean']:+.2f} ± "
            f"{dt['sd']:.2f} ms (mean ± SD, target {dt['target']:+g} ms)."
        )
    sentences += [
        f"On {line.name} the {event_name(line.reference)} was dated by the trigger's edge plus a "
        f"measured latency of {line.latency_ns / 1e6:.2f} ± {line.latency_sd_ns / 1e6:.2f} ms "
        f"(n = {line.latency_n})."
        for line in plan.lines
        if line.drives == "pre" and line.reference != "trigger"
    ]
    timed = "a trigger box" if header.get("timed_by") == "box" else "the host computer"
    late = summary["lateness_us"]["max"]
    if late is not None:
        sentences.append(
            f"Pulses were timed by {timed}; the largest lateness of a pulse was {late:g} µs."
        )
    sentences.append(
        f"The protocol's plan has the SHA-256 {summary['plan_hash'][:16]}…; analysis used "
        "delivered times throughout."
    )
    return " ".join(sentences)
