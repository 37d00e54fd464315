"""The ledger: which triggers fired, which spikes were seen, and what became of each pairing.

Only delivered pre events and detected post spikes count. What is not known is *unknown*, never
taken as intended.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right, insort
from collections.abc import Iterator

from msgspec import Struct

from rigctl.protocol.plan import Plan, PlanLine, PlanPairing, PlanPhase, PlanTrigger
from rigctl.session.rows import (
    PAIR_FATES,
    PairFate,
    PairingRow,
    Row,
    SpikePairRow,
    SpikeRow,
    TriggerFate,
    TriggerRow,
)


class Delivery(Struct):
    """One planned trigger on its way: planned, uploaded, resolved."""

    plan: PlanTrigger
    line: PlanLine
    phase: int
    planned_ns: int
    planned_tick: int
    fate: TriggerFate | None = None
    fired_ns: int | None = None
    boot: int = 0
    pre_spike: int | None = None
    pre_at_ns: int | None = None
    withdrawn: bool = False


class Seen(Struct):
    """A spike edge that was seen; ``claimed`` once a pairing has taken it."""

    at_ns: int
    id: int
    line: str
    reference: str
    claimed: bool = False

    def __lt__(self, other: Seen) -> bool:
        return (self.at_ns, self.id) < (other.at_ns, other.id)


class JudgedPairing(Struct, frozen=True):
    """A judged pairing: its rows, and the Δt errors that can be told."""

    rows: list[Row]
    fate: PairFate
    errors_ns: list[int]


def worst(fates: list[PairFate]) -> PairFate:
    """Return the worst of some fates (``on_target`` when there are none)."""
    return max(fates, key=PAIR_FATES.index, default="on_target")


class Ledger:
    """Deliveries and spikes of a session, judged pairing by pairing.

    Parameters
    ----------
    plan : Plan
    tick_bound_ns : int
        How far a box time may be from the edge it stands for: one tick.
    """

    def __init__(self, plan: Plan, tick_bound_ns: int) -> None:
        self._plan = plan
        self._tick_bound_ns = tick_bound_ns
        self._lines = {line.name: line for line in plan.lines}
        self._detected_pre = {i.pathway: i for i in plan.inputs if i.detects == "pre"}
        self._deliveries: dict[int, Delivery] = {}
        self._of_pairing: dict[int, list[Delivery]] = {}
        # When post pulses are planned in this phase: a response ends where the next one begins.
        self._post_times: list[int] = []
        self._post: list[Seen] = []
        self._pre: dict[str | None, list[Seen]] = {p: [] for p in self._detected_pre}
        self._next_spike = 1

    # --- triggers ---------------------------------------------------------------------------

    def begin_phase(self, phase: PlanPhase) -> None:
        """Forget the phase before; its pairings have been judged."""
        self._deliveries.clear()
        self._of_pairing.clear()
        self._post_times.clear()

    def plan_trigger(self, phase: int, trigger: PlanTrigger, at_ns: int, tick: int) -> Delivery:
        """Take on a trigger with its absolute time; again when it was moved by a pause."""
        delivery = self._deliveries.get(trigger.id)
        if delivery is None:
            delivery = Delivery(trigger, self._lines[trigger.line], phase, at_ns, tick)
            self._deliveries[trigger.id] = delivery
            if trigger.pairing is not None:
                self._of_pairing.setdefault(trigger.pairing, []).append(delivery)
        elif delivery.line.drives == "post":
            self._post_times.remove(delivery.planned_ns)
        if delivery.line.drives == "post":
            insort(self._post_times, at_ns)
        delivery.planned_ns, delivery.planned_tick = at_ns, tick
        delivery.withdrawn, delivery.fate = False, None
        return delivery

    def delivery(self, trigger: int) -> Delivery | None:
        """Return what is known of a trigger of this phase."""
        return self._deliveries.get(trigger)

    def deliveries(self) -> Iterator[Delivery]:
        """Iterate over this phase's triggers."""
        return iter(self._deliveries.values())

    def deliveries_of(self, pairing: int) -> list[Delivery]:
        """Return the triggers of a pairing of this phase."""
        return self._of_pairing.get(pairing, [])

    def fired(self, delivery: Delivery, at_ns: int, boot: int) -> list[Row]:
        """Log an edge; a pre line's reference event follows from it unless it is detected."""
        delivery.fate, delivery.fired_ns, delivery.boot = "fired", at_ns, boot
        rows: list[Row] = [self.trigger_row(delivery)]
        line = delivery.line
        if line.drives == "pre" and line.pathway not in self._detected_pre:
            delivery.pre_spike, delivery.pre_at_ns = self._new_id(), at_ns + line.latency_ns
            rows.append(
                SpikeRow(
                    delivery.pre_spike,
                    line.name,
                    None,
                    line.pathway,
                    delivery.pre_at_ns,
                    2 * line.latency_sd_ns + self._tick_bound_ns,
                    "pre",
                    "derived",
                    line.reference,
                    delivery.plan.pairing,
                )
            )
        return rows

    def resolved(self, delivery: Delivery, fate: TriggerFate) -> list[Row]:
        """Log that a trigger did not fire, or that nobody knows."""
        delivery.fate = fate
        return [self.trigger_row(delivery)]

    def trigger_row(self, delivery: Delivery) -> TriggerRow:
        """Return the record's row of a trigger."""
        return TriggerRow(
            delivery.plan.id,
            delivery.plan.line,
            delivery.phase,
            delivery.plan.pairing,
            delivery.planned_ns,
            delivery.planned_tick,
            delivery.plan.width_ns,
            delivery.fired_ns,
            None,
            self._tick_bound_ns if delivery.fired_ns is not None else None,
            delivery.boot,
            delivery.fate or "unknown",
        )

    # --- spikes -----------------------------------------------------------------------------

    def _new_id(self) -> int:
        self._next_spike += 1
        return self._next_spike - 1

    def post_seen(self, line: str, reference: str, at_ns: int) -> None:
        """Take in a detected post spike; its row is written once its pairing is known."""
        insort(self._post, Seen(at_ns, self._new_id(), line, reference))

    def pre_seen(self, pathway: str | None, line: str, reference: str, at_ns: int) -> None:
        """Take in a detected pre event."""
        insort(self._pre[pathway], Seen(at_ns, self._new_id(), line, reference))

    def _between(self, seen: list[Seen], start_ns: int, end_ns: int) -> list[Seen]:
        """Return what lies in [start, end)."""
        first = bisect_left(seen, start_ns, key=lambda s: s.at_ns)
        return seen[first : bisect_left(seen, end_ns, key=lambda s: s.at_ns)]

    def spike_between(self, start_ns: int, end_ns: int) -> bool:
        """Tell whether a post spike, not yet written, lies in [start, end)."""
        return bool(self._between(self._post, start_ns, end_ns))

    def _row(self, spike: Seen, side: str, pathway: str | None, pairing: int | None) -> SpikeRow:
        bound_ns = self._tick_bound_ns
        if side == "pre":
            return SpikeRow(
                spike.id,
                spike.line,
                None,
                pathway,
                spike.at_ns,
                bound_ns,
                "pre",
                "detector",
                spike.reference,
                pairing,
            )
        return SpikeRow(
            spike.id,
            spike.line,
            None,
            None,
            spike.at_ns,
            bound_ns,
            "post",
            "detector",
            spike.reference,
            pairing,
        )

    def flush(self, before_ns: int) -> list[Row]:
        """Write the spikes before ``before_ns`` that no pairing took: unplanned."""
        rows: list[Row] = []
        for pathway, side, seen in [(None, "post", self._post)] + [
            (pathway, "pre", seen) for pathway, seen in self._pre.items()
        ]:
            end = bisect_left(seen, before_ns, key=lambda s: s.at_ns)
            rows += [self._row(s, side, pathway, None) for s in seen[:end] if not s.claimed]
            del seen[:end]
        return rows

    # --- judging ----------------------------------------------------------------------------

    def judge(self, pairing: PlanPairing, phase: int) -> JudgedPairing:
        """Judge a pairing of which everything has been heard."""
        triggers = self._of_pairing.get(pairing.id, [])
        rows: list[Row] = []
        spikes = self._claim_post(pairing, triggers, rows)
        self._claim_pre(pairing, triggers, rows)
        by_id = {d.plan.id: d for d in triggers}
        fates: list[PairFate] = []
        errors_ns: list[int] = []
        dts_ns: list[int | None] = []
        for pair in pairing.pairs:
            pre, post = by_id[pair.pre_trigger], by_id[pair.post_trigger]
            seen = spikes.get(pair.post_trigger, [])
            fate, dt_ns = self._judge_pair(pre, post, seen, pair.target_dt_ns)
            if dt_ns is not None:
                errors_ns.append(dt_ns - pair.target_dt_ns)
            fates.append(fate)
            dts_ns.append(dt_ns)
            rows.append(
                SpikePairRow(
                    pairing.id,
                    pair.k,
                    pre.pre_spike,
                    seen[0].id if seen else None,
                    pair.target_dt_ns,
                    dt_ns,
                    fate,
                )
            )
        if not pairing.pairs:
            fates = self._judge_control(triggers, spikes)
        fate = worst(fates)
        rows.append(
            PairingRow(
                pairing.id,
                phase,
                pairing.pathway,
                pairing.target_dt_ns,
                dts_ns[0] if len(dts_ns) == 1 else None,
                fate,
                None,
            )
        )
        return JudgedPairing(rows, fate, errors_ns)

    def _claim_post(
        self, pairing: PlanPairing, triggers: list[Delivery], rows: list[Row]
    ) -> dict[int, list[Seen]]:
        """Give each post trigger the spikes of its response window (up to the next post pulse).

        A control without post triggers has a window after each pre event instead, keyed by that
        trigger.
        """
        posts = [d for d in triggers if d.line.drives == "post"]
        openers = posts or [d for d in triggers if d.line.drives == "pre"]
        found: dict[int, list[Seen]] = {}
        for delivery in openers:
            start_ns = delivery.fired_ns if posts else delivery.pre_at_ns or delivery.fired_ns
            if start_ns is None:
                continue
            end_ns = start_ns + self._plan.response_window_ns
            following = bisect_right(self._post_times, max(start_ns, delivery.planned_ns))
            if following < len(self._post_times):
                end_ns = min(end_ns, self._post_times[following])
            seen = self._between(self._post, start_ns, end_ns)
            found[delivery.plan.id] = [s for s in seen if not s.claimed]
            for spike in found[delivery.plan.id]:
                spike.claimed = True
                rows.append(self._row(spike, "post", None, pairing.id))
        return found

    def _claim_pre(self, pairing: PlanPairing, triggers: list[Delivery], rows: list[Row]) -> None:
        """Where pre events are detected, give each pre trigger the first one it evoked."""
        if pairing.pathway not in self._detected_pre:
            return
        for delivery in triggers:
            if delivery.line.drives != "pre" or delivery.fired_ns is None:
                continue
            end_ns = delivery.fired_ns + self._plan.response_window_ns
            for spike in self._between(self._pre[pairing.pathway], delivery.fired_ns, end_ns):
                if not spike.claimed:
                    spike.claimed = True
                    delivery.pre_spike, delivery.pre_at_ns = spike.id, spike.at_ns
                    rows.append(self._row(spike, "pre", pairing.pathway, pairing.id))
                    break

    def _judge_pair(
        self, pre: Delivery, post: Delivery, seen: list[Seen], target_dt_ns: int
    ) -> tuple[PairFate, int | None]:
        fates: list[PairFate] = []
        for delivery, missing in ((pre, "no_pre"), (post, "no_post")):
            if delivery.fate in (None, "unknown"):
                fates.append("unknown")
            elif delivery.fate != "fired":
                fates.append("no_pre" if missing == "no_pre" else "no_post")
        if pre.fate == post.fate == "cancelled":
            return "not_run", None
        if pre.fate == "fired" and pre.pre_at_ns is None:
            fates.append("no_pre")
        if post.fate == "fired":
            if not seen:
                fates.append("no_post")
            elif len(seen) > 1:
                fates.append("doublet")
        dt_ns = None
        if seen and pre.pre_at_ns is not None:
            dt_ns = seen[0].at_ns - pre.pre_at_ns
            within = abs(dt_ns - target_dt_ns) <= self._plan.on_target_within_ns
            fates.append("on_target" if within else "off_target")
        return worst(fates), dt_ns

    def _judge_control(
        self, triggers: list[Delivery], spikes: dict[int, list[Seen]]
    ) -> list[PairFate]:
        """Judge what is not a spike pair: each pulse must come, and evoke what it should."""
        fates: list[PairFate] = []
        for delivery in triggers:
            if delivery.line.drives == "step":
                continue
            is_post = delivery.line.drives == "post"
            seen = len(spikes.get(delivery.plan.id, []))
            wanted = 1 if is_post and delivery.line.evokes_spike else 0
            if delivery.fate == "cancelled":
                fates.append("not_run")
            elif delivery.fate in (None, "unknown"):
                fates.append("unknown")
            elif delivery.fate != "fired":
                fates.append("no_post" if is_post else "no_pre")
            elif seen > wanted:
                fates.append("doublet")
            elif seen < wanted:
                fates.append("no_post")
            else:
                fates.append("on_target")
        return fates
