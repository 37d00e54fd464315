"""From a protocol and a rig to the plan: reference events solved back to triggers.

A trigger comes its line's latency before the reference event it brings about. Within a phase every
time is absolute and lies on the box's tick grid, rounded half to even.
"""

from __future__ import annotations

import msgspec

from rigctl.errors import InputError
from rigctl.plasticity.sets import resolve
from rigctl.protocol import patterns, poisson
from rigctl.protocol.budget import TriggerBudget
from rigctl.protocol.builder import PhaseBuilder, Pulses
from rigctl.protocol.plan import ContingentRule, Plan, PlanPhase, RuleChoice
from rigctl.protocol.rig import Rig
from rigctl.protocol.schema import (
    Contingent,
    Induction,
    Pairings,
    Phase,
    Poisson,
    Protocol,
    TestSeries,
)
from rigctl.protocol.washout import check_washout, washout_of
from rigctl.protocol.wiring import Wiring

PLAN_VERSION = 1
# The test step begins this long after its stimulus: the response is over by then.
STEP_AFTER_NS = 150_000_000
# An induction is over this long after its last response window, so that tests resume at once.
AFTER_LAST_NS = 500_000_000
_S = 1_000_000_000


def compile_plan(
    protocol: Protocol, rig: Rig, *, protocol_file: str, rig_file: str, arm: int | None = None
) -> Plan:
    """Compile a plan.

    Parameters
    ----------
    protocol, rig
        As :mod:`rigctl.protocol.load` returns them.
    protocol_file, rig_file : str
        Names for the sentences.
    arm : int, optional
        Which arm of an across-cells protocol, from 1 (the default).

    Raises
    ------
    InputError
        Something cannot be done as written: one sentence with the key path.
    """
    compiler = _Compiler(protocol, rig, protocol_file, rig_file, arm)
    return compiler.plan()


class _Compiler:
    def __init__(
        self, protocol: Protocol, rig: Rig, protocol_file: str, rig_file: str, arm: int | None
    ) -> None:
        self._protocol = protocol
        self._rig = rig
        self._where = protocol_file
        self._rig_file = rig_file
        self._arm_dt_ms = self._arm(arm)
        self._wiring = Wiring(protocol, rig, protocol_file, rig_file)
        self._window_ns = patterns.to_ns(protocol.judging.response_window_ms)
        self._budget = TriggerBudget(protocol_file)
        self._next_trigger = 1
        self._next_pairing = 1
        self._stream = 0

    def _arm(self, arm: int | None) -> float | None:
        across = self._protocol.across_cells
        if across is None:
            if arm is not None:
                raise InputError(f"{self._where}: has no [across_cells], so no arm {arm}.")
            return None
        number = 1 if arm is None else arm
        if not 1 <= number <= len(across.dt_ms):
            raise InputError(f"{self._where}: arm {number}: 1 to {len(across.dt_ms)} are there.")
        return across.dt_ms[number - 1]

    def plan(self) -> Plan:
        protocol, rig = self._protocol, self._rig
        self._budget.count(protocol)
        phases = tuple(self._phase(n, phase) for n, phase in enumerate(protocol.phases))
        washout = washout_of(rig)
        check_washout(phases, washout, self._where, self._rig_file)
        limits, box = rig.limits, rig.box
        return Plan(
            plan_version=PLAN_VERSION,
            title=protocol.title,
            preparation=protocol.preparation or rig.preparation,
            pre_reference=protocol.reference.pre,
            post_reference=protocol.reference.post,
            tick_ns=box.tick_ns,
            lines=self._wiring.used(),
            inputs=self._wiring.inputs(),
            phases=phases,
            forecasts=self._forecasts(),
            on_target_within_ns=patterns.to_ns(protocol.judging.on_target_within_ms),
            response_window_ns=self._window_ns,
            context_ns=patterns.to_ns(protocol.judging.context_ms),
            gate_max_trend_pct=protocol.gates.max_trend_pct,
            gate_interval_pct=protocol.gates.interval_pct,
            gate_min_sweeps=protocol.gates.min_sweeps,
            box_limits={
                "min_width_ns": round(box.min_width_us * 1000),
                "max_width_ns": round(limits.max_width_us * 1000),
                "min_spacing_ns": round(max(limits.min_spacing_us, box.min_spacing_us) * 1000),
                "max_pulses_per_s": max(1, int(limits.max_rate_hz)),
                "max_duty_permille": max(1, int(limits.max_duty * 1000)),
                "max_pulses": limits.max_pulses,
            },
            declared={
                "stimulus": {n: o.stimulus for n, o in sorted(rig.outputs.items())},
                "stimuli": msgspec.to_builtins(rig.stimuli),
                "electrodes": msgspec.to_builtins(rig.electrodes),
                "limits": msgspec.to_builtins(limits),
                "box": msgspec.to_builtins(box),
                "approval": rig.approval,
                "access": rig.access,
            },
            washout=washout,
            plan_seed=protocol.plan_seed,
        )

    def _forecasts(self) -> tuple[RuleChoice, ...]:
        chosen = self._protocol.forecasts
        if not chosen:
            return (resolve(None, self._rig.forecast_set, self._rig_file, "forecast_set"),)
        made: dict[tuple[str, str], RuleChoice] = {}
        for n, choice in enumerate(chosen, 1):
            found = resolve(choice, self._rig.forecast_set, self._where, f"forecast[{n}]")
            key = (found.rule, found.parameter_set)
            if key in made:
                raise InputError(
                    f"{self._where}: forecast[{n}]: {found.rule} with the set "
                    f"{found.parameter_set} stands twice; a session keeps one forecast of each."
                )
            made[key] = found
        return tuple(made.values())

    # --- phases -----------------------------------------------------------------------------

    def _phase(self, index: int, phase: Phase) -> PlanPhase:
        path = f"phase[{index + 1}]"
        builder = PhaseBuilder(
            self._rig.box.tick_ns,
            round(self._rig.box.min_spacing_us * 1000),
            STEP_AFTER_NS,
            self._where,
        )
        rule: ContingentRule | None = None
        if isinstance(phase, Induction):
            rule, end_ns = self._blocks(builder, phase, path)
            kind = "induction"
        else:
            end_ns = round(phase.duration_min * 60 * _S)
            kind = phase.__struct_config__.tag  # type: ignore[assignment]
        for n, test in enumerate(phase.tests, 1):
            inside = f"{path}.test[{n}]"
            if isinstance(phase, Induction):
                # How long an induction lasts is known only now; the others are counted already.
                self._budget.tests(test, end_ns, test.step is not False, inside)
            self._tests(builder, test, end_ns, inside)
        triggers, pairings = builder.finish(self._next_trigger, self._next_pairing)
        self._next_trigger += len(triggers)
        self._next_pairing += len(pairings)
        return PlanPhase(
            index,
            phase.name,
            kind,  # type: ignore[arg-type]
            phase.start,
            max(end_ns, self._over_ns(builder)),
            triggers,
            pairings,
            rule,
        )

    def _blocks(
        self, builder: PhaseBuilder, phase: Induction, path: str
    ) -> tuple[ContingentRule | None, int]:
        start_ns = 0
        for n, block in enumerate(phase.blocks, 1):
            inside = f"{path}.block[{n}]"
            start_ns += round(block.after_s * _S)
            self._stream += 1
            if isinstance(block, Pairings):
                start_ns = self._pairings(builder, block, n, start_ns, inside)
            elif isinstance(block, Poisson):
                start_ns = self._poisson(builder, block, n, start_ns, inside)
            else:
                return self._contingent(block, inside), round(block.max_min * 60 * _S)
        return None, builder.last_ns + self._window_ns + AFTER_LAST_NS

    def _tests(self, builder: PhaseBuilder, test: TestSeries, end_ns: int, path: str) -> None:
        line = self._wiring.pre(test.pathway, test.pre_line, path)
        step = None if test.step is False else self._wiring.step(bool(test.step), path)
        every_ns = round(test.every_s * _S)
        at_ns = round(test.first_at_s * _S)
        # A test needs its response and its step inside the phase.
        needs_ns = self._window_ns + (STEP_AFTER_NS + step.width_ns if step else 0)
        while at_ns + needs_ns <= end_ns:
            builder.trigger(line, at_ns, None, path)
            if step is not None:
                builder.trigger(step, at_ns + STEP_AFTER_NS, None, path)
            at_ns += every_ns

    # --- blocks -----------------------------------------------------------------------------

    def _pairings(
        self, builder: PhaseBuilder, block: Pairings, number: int, start_ns: int, path: str
    ) -> int:
        pre = post = None
        if block.deliver != "post":
            pre = self._wiring.pre(block.pathway, block.pre_line, path)
        if block.deliver != "pre":
            post = self._wiring.post(block.post_line, path)
        step = self._wiring.step(True, path) if block.step else None
        pre_lead_ns = pre.latency_ns if pre else 0
        post_lead_ns = post.latency_ns if post else 0
        if block.offsets == "triggers":
            pre_lead_ns = post_lead_ns = 0
        interval_ns = patterns.interval_ns(block)
        dts_ms = None
        if block.dt_random is not None:
            dts_ms = patterns.random_dts_ms(block.dt_random, self._protocol.plan_seed, self._stream)
        dt_ms = block.dt_ms
        if dt_ms is not None and self._arm_dt_ms is not None:
            dt_ms = self._arm_dt_ms
        fixed = None if dts_ms else patterns.pattern_of(block, dt_ms, self._where, path)
        made = [
            fixed or patterns.pattern_of(block, next(dts_ms or iter(())), self._where, path)
            for _ in range(block.pairings)
        ]
        if post is not None and not post.evokes_spike:
            made = [patterns.Pattern(p.pre_ns, p.post_ns, ()) for p in made]
        # One shift for the whole block keeps its rhythm: its first trigger comes at its start.
        # Later pairings follow it, or are refused as overlapping.
        shift_ns = -min(
            [t - pre_lead_ns for t in made[0].pre_ns] + [t - post_lead_ns for t in made[0].post_ns]
        )
        raw_ns = 0
        if block.offsets == "triggers":
            # What was written are triggers; the intended Δt is what the latencies make of them.
            raw_ns = (post.latency_ns if post else 0) - (pre.latency_ns if pre else 0)

        def pulses_of(pattern: patterns.Pattern) -> Pulses:
            patterns.check_order(pattern, raw_ns, self._where, path)
            pre_at = [(pre, t - pre_lead_ns) for t in pattern.pre_ns] if pre else []
            post_at = [(post, t - post_lead_ns) for t in pattern.post_ns] if post else []
            pairs = [
                (i, len(pre_at) + j, pattern.post_ns[j] - pattern.pre_ns[i] + raw_ns)
                for i, j in pattern.pairs
            ]
            return Pulses((*pre_at, *post_at), tuple(pairs))

        shared = pulses_of(made[0]) if fixed else None
        for n, pattern in enumerate(made):
            builder.pairing(
                block.pathway,
                number,
                path,
                start_ns + n * interval_ns + shift_ns,
                shared or pulses_of(pattern),
                step,
                STEP_AFTER_NS,
            )
        return max(start_ns + block.pairings * interval_ns, self._over_ns(builder))

    def _poisson(
        self, builder: PhaseBuilder, block: Poisson, number: int, start_ns: int, path: str
    ) -> int:
        pre = self._wiring.pre(block.pathway, block.pre_line, path)
        post = self._wiring.post(block.post_line, path)
        pre_ns, post_ns, shared = poisson.trains(
            block, self._protocol.plan_seed, self._stream, self._where, path
        )
        shift_ns = start_ns + max(pre.latency_ns, post.latency_ns)
        for i, j in shared:
            builder.pairing(
                block.pathway,
                number,
                path,
                shift_ns,
                Pulses(
                    ((pre, pre_ns[i] - pre.latency_ns), (post, post_ns[j] - post.latency_ns)),
                    ((0, 1, post_ns[j] - pre_ns[i]),),
                ),
                None,
                0,
                may_interleave=True,
            )
        tied_pre, tied_post = {i for i, _ in shared}, {j for _, j in shared}
        for n, at_ns in enumerate(pre_ns):
            if n not in tied_pre:
                builder.trigger(pre, shift_ns + at_ns - pre.latency_ns, None, path)
        for n, at_ns in enumerate(post_ns):
            if n not in tied_post:
                builder.trigger(post, shift_ns + at_ns - post.latency_ns, None, path)
        return max(start_ns + round(block.duration_s * _S), self._over_ns(builder))

    def _over_ns(self, builder: PhaseBuilder) -> int:
        """Return when what has been added so far is over: pulses and the last response window."""
        return max(builder.last_ns + self._window_ns, builder.free_ns)

    def _contingent(self, block: Contingent, path: str) -> ContingentRule:
        pre = self._wiring.pre(block.pathway, block.pre_line, path)
        line = self._rig.inputs.get(block.on_input)
        if line is None or line.detects != "post":
            known = [n for n, i in self._rig.inputs.items() if i.detects == "post"]
            raise InputError.at(
                self._where,
                f"{path}.on_input",
                block.on_input,
                f"{self._rig_file} has these inputs that detect post: {', '.join(known) or 'none'}",
            )
        # Edge of the detector → trigger; the spike itself came edge_to_reference before the edge.
        edge_ns = -patterns.to_ns(line.edge_to_reference_ms)
        delay_ns = -patterns.to_ns(block.dt_ms) - pre.latency_ns - edge_ns
        least_ns = round(self._rig.box.min_rule_delay_us * 1000)
        if delay_ns < least_ns:
            reach_ms = (least_ns + pre.latency_ns + edge_ns) / 1e6
            raise InputError.at(
                self._where,
                f"{path}.dt_ms",
                block.dt_ms,
                f"detector, box and latency of {pre.name} allow Δt of −{reach_ms:.2f} ms or longer",
            )
        rate_hz = block.max_rate_hz or 1 / block.lockout_s
        return ContingentRule(
            on_input=block.on_input,
            line=pre.name,
            pathway=block.pathway,
            target_dt_ns=patterns.to_ns(block.dt_ms),
            delay_ns=delay_ns,
            width_ns=pre.width_ns,
            silence_ns=patterns.to_ns(block.silence_ms),
            lockout_ns=round(block.lockout_s * _S),
            max_pairings=block.max_pairings,
            duration_ns=round(block.max_min * 60 * _S),
            min_interval_ns=round(1e9 / rate_hz),
        )
