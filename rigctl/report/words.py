"""What the page says in sentences: five lines, the figures' claims, a drafted methods paragraph.

Every number comes from the record. A forecast says "under this rule these delivered times imply";
it never says that the synapse changed.
"""

from __future__ import annotations

from rigctl.plasticity.forecast import extrapolates
from rigctl.protocol.plan import PlanLine
from rigctl.report.facts import Facts
from rigctl.report.names import event_name, fate_name, phase_name
from rigctl.report.summary import label
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


def five_lines(facts: Facts) -> list[str]:
    """Return what was asked and what happened, a line each."""
    return [_asked(facts), _happened(facts), _delta_t(facts), _missed(facts), _forecast(facts)]


def _asked(facts: Facts) -> str:
    planned = facts.summary["pairings"]["planned"]
    targets = facts.targets_ms()
    pre, post = event_name(facts.plan.pre_reference), event_name(facts.plan.post_reference)
    on = f"on pathway {facts.paired}" if facts.paired else "on no pathway"
    if not targets:
        return f"Asked: {planned} pairings {on} without a spike pair: a control."
    at = f"{targets[0]:+g} ms"
    if len(targets) > 1:
        at = f"from {targets[0]:+g} to {targets[-1]:+g} ms ({len(targets)} values)"
    return f"Asked: {planned} pairings {on}, Δt {at} from {pre} to {post} (positive: pre leads)."


def _happened(facts: Facts) -> str:
    counts = facts.summary["pairings"]
    ended = _ENDED.get(facts.summary["ended"], facts.summary["ended"])
    after = f"{ended} after {facts.summary['duration_s'] / 60:.1f} min."
    if not facts.targets_ms():
        return f"Happened: {counts['delivered']} pairings were delivered. {after}"
    return (
        f"Happened: {counts['delivered']} pairings were delivered with both spikes, "
        f"{counts['on_target']} of them on target. {after}"
    )


def _delta_t(facts: Facts) -> str:
    dt = facts.summary["dt_ms"]
    _numbers, errors = facts.errors_ms()
    if len(errors) == 0:
        return "Δt: none was delivered."
    if dt["mean"] is None:
        spread = f" ± {errors.std(ddof=1):.2f} ms (SD)" if len(errors) > 1 else " ms"
        text = f"Δt: error {errors.mean():+.2f}{spread} over {len(errors)} spike pairs."
    else:
        spread = "" if dt["sd"] is None else f" ± {dt['sd']:.2f}"
        text = (
            f"Δt: {dt['mean']:+.2f}{spread} ms (mean{' ± SD' if spread else ''}), "
            f"{dt['min']:+.2f} to {dt['max']:+.2f} ms; mean error "
            f"{dt['mean'] - dt['target']:+.2f} ms over {len(errors)} spike pairs."
        )
    return text + _creep(facts)


def _creep(facts: Facts) -> str:
    creep = facts.creep()
    if creep is None:
        return ""
    target = facts.summary["dt_ms"]["target"]
    what, start = ("Δt", target) if target is not None else ("the error of Δt", 0.0)
    # Where every pre event is trigger + a fixed latency, only the spike's latency can move Δt.
    who = "Spike latency" if facts.pre_is_derived else "Latency"
    text = (
        f" {who} crept by {creep.total_ms:+.1f} ms over the induction (95 % interval "
        f"{creep.low_ms:+.1f} to {creep.high_ms:+.1f}): {what} moved from "
        f"{start + creep.first_ms:+.1f} to {start + creep.last_ms:+.1f} ms"
    )
    first = facts.first_off_target()
    if first is None:
        return f"{text}; no pairing was off target."
    return f"{text}; the first pairing off target was number {first}."


def _missed(facts: Facts) -> str:
    counts = facts.summary["pairings"]
    parts = [f"{counts[f]} {fate_name(f)}" for f in PAIR_FATES[1:] if counts[f]]
    ledger = "Ledger: " + (", ".join(parts) if parts else "no pairing missed, doubled or unknown")
    alarms = len(facts.summary["alarms"])
    return f"{ledger}; {alarms} alarm{'' if alarms == 1 else 's'}."


def _forecast(facts: Facts) -> str:
    plan, parts = facts.plan, []
    for choice in plan.forecasts:
        name = label(plan, choice.rule, choice.parameter_set)
        value = facts.summary["forecast"].get(name)
        if value is None:
            continue
        text = (
            f"under {name} with {choice.parameter_set} these delivered times imply "
            f"{percent(value['change_pct'])} "
            f"[{value['low_pct']:+.1f}, {value['high_pct']:+.1f}]"
        )
        notes = []
        planned = facts.summary["forecast_as_planned"].get(name)
        if planned:
            notes.append(f"planned exactly {percent(planned['change_pct'])}")
        if choice.preparation is None:
            notes.append("NO PREPARATION NAMED")
        if extrapolates(choice, facts.summary["pairings"]["delivered"]):
            notes.append("extrapolated")
        parts.append(f"{text} ({'; '.join(notes)})" if notes else text)
    return "Forecast: " + ("; ".join(parts) or "none") + "."


def percent(value_pct: float) -> str:
    """Return a change in %, signed; no minus before a zero."""
    return f"{round(value_pct, 1) or 0.0:+.1f} %"


def methods(facts: Facts) -> str:
    """Return a methods paragraph that says only what the record holds."""
    plan, summary, header = facts.plan, facts.summary, facts.record.header
    counts, dt = summary["pairings"], summary["dt_ms"]
    pre, post = event_name(plan.pre_reference), event_name(plan.post_reference)
    phases = ", ".join(
        f"{phase_name(p.name)} ({(p.end_ns - p.start_ns) / 6e10:.1f} min)" for p in facts.phases
    )
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
    sentences += [_dated(facts, line) for line in plan.lines if line.drives == "pre"]
    timed = "a trigger box" if header.get("timed_by") == "box" else "the host computer"
    late = summary["lateness_us"]["max"]
    responses = facts.responses()
    if responses:
        counts_of = ", ".join(f"{len(values)} on {p}" for p, values in responses.items())
        sentences.append(f"Responses to test stimuli were measured as amplitudes: {counts_of}.")
    if late is not None:
        sentences.append(
            f"Pulses were timed by {timed}; the largest lateness of a pulse was {late:g} µs."
        )
    sentences.append(
        f"The protocol's plan has the SHA-256 {summary['plan_hash'][:16]}…; every Δt "
        "given here is of delivered events."
    )
    return " ".join(sentences)


def _dated(facts: Facts, line: PlanLine) -> str:
    """Say how the pre events of a line were dated."""
    name = event_name(line.reference)
    detector = next(
        (
            i.name
            for i in facts.plan.inputs
            if i.detects == "pre" and i.pathway in (None, line.pathway)
        ),
        None,
    )
    if detector is not None:
        return f"On {line.name} the {name} was detected (input {detector})."
    if line.reference == "trigger":
        return f"On {line.name} the pre event is the trigger's edge itself."
    return (
        f"On {line.name} the {name} was dated by the trigger's edge plus a measured latency of "
        f"{line.latency_ns / 1e6:.2f} ± {line.latency_sd_ns / 1e6:.2f} ms (n = {line.latency_n})."
    )
