"""What types alone cannot say about a protocol or a rig: each violation is one sentence."""

from __future__ import annotations

import itertools
from typing import get_args

from rigctl.errors import InputError, nearest
from rigctl.protocol.patterns import LEAST_DT_NS, dt_ranges_us
from rigctl.protocol.rig import Rig
from rigctl.protocol.schema import (
    Contingent,
    Induction,
    Pairings,
    Poisson,
    PostReference,
    PreReference,
    Protocol,
)


def check_protocol(protocol: Protocol, where: str) -> None:
    """Refuse what contradicts itself inside a protocol."""
    names: set[str] = set()
    for n, phase in enumerate(protocol.phases, 1):
        path = f"phase[{n}]"
        if phase.name in names:
            raise InputError.at(where, f"{path}.name", phase.name, "two phases have this name")
        names.add(phase.name)
        if isinstance(phase, Induction):
            if not phase.blocks:
                raise InputError(f"{where}: {path}.block: an induction needs at least one block.")
            for m, block in enumerate(phase.blocks, 1):
                inside = f"{path}.block[{m}]"
                if isinstance(block, Pairings):
                    _check_pairings(block, where, inside)
                elif isinstance(block, Poisson):
                    _check_poisson(block, where, inside)
                else:
                    _check_contingent(block, where, inside, len(phase.blocks))
        elif not phase.tests:
            raise InputError(
                f"{where}: {path}.test: a phase of tests needs at least one test series."
            )
        for m, test in enumerate(phase.tests, 1):
            if test.first_at_s >= test.every_s:
                raise InputError.at(
                    where,
                    f"{path}.test[{m}].first_at_s",
                    test.first_at_s,
                    f"less than every_s = {test.every_s:g} is needed",
                )
    _check_arms(protocol, where)


def _check_arms(protocol: Protocol, where: str) -> None:
    across = protocol.across_cells
    if across is None:
        return
    for n, dt_ms in enumerate(across.dt_ms, 1):
        if _no_order(dt_ms):
            raise InputError.at(where, f"across_cells.dt_ms[{n}]", dt_ms, _ZERO)
    blocks = [b for p in protocol.phases if isinstance(p, Induction) for b in p.blocks]
    if not any(isinstance(b, Pairings) and b.dt_ms is not None for b in blocks):
        raise InputError(
            f"{where}: across_cells: no pairings block states dt_ms, so all arms would be the same."
        )


def _no_order(dt_ms: float | None) -> bool:
    return dt_ms is not None and abs(dt_ms) * 1e6 < LEAST_DT_NS


_ZERO = "Δt = 0 has no order: give it a sign, at least 0.001 ms"


def _check_pairings(block: Pairings, where: str, path: str) -> None:
    if (block.rate_hz is None) == (block.every_s is None) and (
        block.pairings > 1 or block.rate_hz is not None
    ):
        raise InputError(f"{where}: {path}: give exactly one of rate_hz and every_s.")
    forms = [
        name
        for name, given in (
            ("dt_ms", block.dt_ms is not None),
            ("dt_random", block.dt_random is not None),
            ("pre_at_ms/post_at_ms", block.pre_at_ms is not None or block.post_at_ms is not None),
        )
        if given
    ]
    if len(forms) != 1:
        given = " and ".join(forms) or "none"
        raise InputError(
            f"{where}: {path}: give exactly one of dt_ms, dt_random, and pre_at_ms with "
            f"post_at_ms; given: {given}."
        )
    if _no_order(block.dt_ms):
        raise InputError.at(where, f"{path}.dt_ms", block.dt_ms, _ZERO)
    if block.dt_random is not None:
        _check_random(block, where, path)
    long_form = block.pre_at_ms is not None or block.post_at_ms is not None
    if long_form:
        _check_long_form(block, where, path)
    elif block.spike_pairs is not None and len(forms) == 1 and block.dt_random is not None:
        raise InputError(f"{where}: {path}.spike_pairs: not together with dt_random.")
    for side, count, rate in (
        ("pre", block.pre_count, block.pre_rate_hz),
        ("post", block.post_count, block.post_rate_hz),
    ):
        if count > 1 and rate is None:
            raise InputError(f"{where}: {path}.{side}_rate_hz: needed with {side}_count = {count}.")
        if count == 1 and rate is not None:
            raise InputError.at(
                where, f"{path}.{side}_rate_hz", rate, f"only with {side}_count above 1"
            )
    for n, repeat in enumerate(block.repeat, 1):
        if (repeat.rate_hz is None) == (repeat.every_ms is None):
            raise InputError(
                f"{where}: {path}.repeat[{n}]: give exactly one of rate_hz and every_ms."
            )


def _check_random(block: Pairings, where: str, path: str) -> None:
    random = block.dt_random
    assert random is not None
    if random.high_ms <= random.low_ms:
        raise InputError.at(
            where,
            f"{path}.dt_random.high_ms",
            random.high_ms,
            f"more than low_ms = {random.low_ms:g} is needed",
        )
    if random.min_abs_ms >= max(abs(random.low_ms), abs(random.high_ms)):
        raise InputError.at(
            where,
            f"{path}.dt_random.min_abs_ms",
            random.min_abs_ms,
            "nothing between low_ms and high_ms is left",
        )
    if not dt_ranges_us(random):
        raise InputError.at(
            where,
            f"{path}.dt_random.high_ms",
            random.high_ms,
            f"no Δt of a whole us other than 0 lies between low_ms = {random.low_ms:g} and this",
        )
    if block.pre_count > 1 or block.post_count > 1:
        raise InputError(f"{where}: {path}.dt_random: for single pre and post events only.")


def _check_long_form(block: Pairings, where: str, path: str) -> None:
    if block.pre_at_ms is None or block.post_at_ms is None:
        raise InputError(f"{where}: {path}: pre_at_ms and post_at_ms go together.")
    if block.pre_count > 1 or block.post_count > 1:
        raise InputError(f"{where}: {path}: pre_count and post_count go with dt_ms.")
    for key, times in (("pre_at_ms", block.pre_at_ms), ("post_at_ms", block.post_at_ms)):
        if any(b <= a for a, b in itertools.pairwise(times)):
            raise InputError.at(where, f"{path}.{key}", times, "rising times are needed")
        if len(times) > 10_000:
            raise InputError(f"{where}: {path}.{key}: at most 10000 events in one pattern.")
    pre, post = len(block.pre_at_ms), len(block.post_at_ms)
    if pre + post == 0:
        raise InputError(f"{where}: {path}: the pattern has no event at all.")
    if (block.deliver == "pre" and not pre) or (block.deliver == "post" and not post):
        raise InputError.at(
            where, f"{path}.deliver", block.deliver, "the pattern has no event of this side"
        )
    pairs = block.spike_pairs
    if pairs is None:
        if block.deliver == "both" and pre and post and pre != post and 1 not in (pre, post):
            raise InputError(
                f"{where}: {path}.spike_pairs: needed, since {pre} pre and {post} post events "
                "can be paired in more than one way."
            )
        return
    for n, (i, j) in enumerate(pairs, 1):
        if not (1 <= i <= pre and 1 <= j <= post):
            raise InputError.at(
                where,
                f"{path}.spike_pairs[{n}]",
                [i, j],
                f"[pre 1..{pre}, post 1..{post}] is needed",
            )
        if block.pre_at_ms[i - 1] == block.post_at_ms[j - 1]:
            raise InputError.at(where, f"{path}.spike_pairs[{n}]", [i, j], _ZERO)
    if len({tuple(p) for p in pairs}) < len(pairs):
        raise InputError(f"{where}: {path}.spike_pairs: the same pair stands twice.")


def _check_poisson(block: Poisson, where: str, path: str) -> None:
    if block.shared_fraction > 0 and block.shared_dt_ms is None:
        raise InputError(f"{where}: {path}.shared_dt_ms: needed with shared_fraction above 0.")
    if _no_order(block.shared_dt_ms):
        raise InputError.at(where, f"{path}.shared_dt_ms", block.shared_dt_ms, _ZERO)
    for key, rate in (("pre_rate_hz", block.pre_rate_hz), ("post_rate_hz", block.post_rate_hz)):
        if rate * block.dead_time_ms >= 1000:
            raise InputError.at(
                where,
                f"{path}.{key}",
                rate,
                f"with a dead time of {block.dead_time_ms:g} ms less than "
                f"{1000 / block.dead_time_ms:g} Hz is possible",
            )


def _check_contingent(block: Contingent, where: str, path: str, blocks: int) -> None:
    if block.dt_ms >= 0:
        raise InputError.at(
            where,
            f"{path}.dt_ms",
            block.dt_ms,
            "a spike that has happened can only lead: a negative Δt is needed",
        )
    if blocks > 1:
        raise InputError(f"{where}: {path}: a contingent block stands alone in its induction.")


_EVENTS = [e for e in (*get_args(PreReference), *get_args(PostReference)) if e != "trigger"]


def check_rig(rig: Rig, where: str) -> None:
    """Refuse what contradicts itself inside a rig file."""
    if not any(o.drives == "pre" for o in rig.outputs.values()):
        raise InputError(f"{where}: output: at least one line that drives pre is needed.")
    steps = [name for name, output in rig.outputs.items() if output.drives == "step"]
    if len(steps) > 1:
        raise InputError(
            f"{where}: output.{steps[1]}.drives: a rig has one line for the test step, and "
            f"{steps[0]} is it already."
        )
    for name, output in rig.outputs.items():
        path = f"output.{name}"
        if output.drives == "pre" and output.pathway is None:
            raise InputError(f"{where}: {path}.pathway: needed for a line that drives pre.")
        if output.stimulus is not None and output.stimulus not in rig.stimuli:
            hint = nearest(output.stimulus, list(rig.stimuli))
            raise InputError.at(
                where,
                f"{path}.stimulus",
                output.stimulus,
                f"no table [stimulus] of that name{hint}",
            )
        if output.width_us < rig.box.min_width_us:
            raise InputError.at(
                where,
                f"{path}.width_us",
                output.width_us,
                f"the box makes pulses of at least {rig.box.min_width_us:g} us",
            )
        for event, latency in output.latency.items():
            if event not in _EVENTS:
                hint = nearest(event, _EVENTS)
                raise InputError(
                    f"{where}: {path}.latency: {event!r} is no reference event"
                    f"{hint or ';'} {'Known' if hint else 'known'} here: {', '.join(_EVENTS)}."
                )
            if latency.mean_ms < 0:
                raise InputError.at(
                    where,
                    f"{path}.latency.{event}.mean_ms",
                    latency.mean_ms,
                    "an effect cannot come before its trigger: 0 or more is needed",
                )
    for name, line in rig.inputs.items():
        if line.detects == "pre" and line.pathway is None:
            raise InputError(
                f"{where}: input.{name}.pathway: needed for an input that detects pre."
            )
        if name in rig.outputs:
            raise InputError(f"{where}: input.{name}: an output has this name already.")
    for name, stimulus in rig.stimuli.items():
        if stimulus.electrode is not None and stimulus.electrode not in rig.electrodes:
            hint = nearest(stimulus.electrode, list(rig.electrodes))
            raise InputError.at(
                where,
                f"stimulus.{name}.electrode",
                stimulus.electrode,
                f"no table [electrode] of that name{hint}",
            )
    for name, electrode in rig.electrodes.items():
        if electrode.diameter_um is not None and electrode.area_um2 is not None:
            raise InputError(f"{where}: electrode.{name}: give diameter_um or area_um2, not both.")
