"""A pathway's synapses: short-term depression, failures, and plasticity that nobody is told of.

Depression is that of Tsodyks & Markram 1997 (PNAS 94:719): recovered, active and inactive
fractions; a release uses ``use`` of what has recovered. Release is binomial over ``sites``, each
vesicle with its own size: at rest (1 − use)^sites of the events fail. The hidden rule is the
efficacy-suppression form of Froemke & Dan 2002 (Nature 416:433), multiplied in, with parameters
drawn per seed around the published ones; what it decides shows only over minutes, and less the
longer the cell has been dialysed: break-in is where world time is 0.
"""

from __future__ import annotations

import math

from rigctl_sim.knobs import SynapseKnobs
from rigctl_sim.streams import stream

# Per pairing: the paper's window spread over 60 pairings (number from memory).
_A_PLUS, _A_MINUS = 1.01 / 60, 0.52 / 60
_TAU_PLUS_S, _TAU_MINUS_S = 0.0148, 0.0338
_SUPPRESS_PRE_S, _SUPPRESS_POST_S = 0.034, 0.075
_SPREAD = 0.25
_BOUNDS = (0.2, 3.0)
_REACH_S = 0.2


class Depression:
    """The three fractions of Tsodyks & Markram 1997."""

    def __init__(self, use: float, tau_rec_s: float, tau_inact_s: float) -> None:
        self._use = use
        self._tau_rec_s = tau_rec_s
        self._tau_inact_s = tau_inact_s
        self._recovered = 1.0
        self._active = 0.0
        self._at_s = -math.inf

    def release(self, at_s: float) -> float:
        """Return the fraction released by an event at ``at_s``."""
        gone_s = at_s - self._at_s
        if gone_s < math.inf:
            rec = math.exp(-gone_s / self._tau_rec_s)
            inact = math.exp(-gone_s / self._tau_inact_s) if self._tau_inact_s else 0.0
            # Exact solution between events: active decays, inactive recovers.
            inactive = 1.0 - self._recovered - self._active
            apart_s = self._tau_rec_s - self._tau_inact_s
            if abs(apart_s) > 1e-9 * self._tau_rec_s:
                passed_on = self._tau_rec_s / apart_s * (rec - inact)
            else:
                # The limit of the line above, which is 0/0 where the two are equal.
                passed_on = gone_s / self._tau_rec_s * rec
            inactive = inactive * rec + self._active * passed_on
            self._active *= inact
            self._recovered = 1.0 - inactive - self._active
        self._at_s = at_s
        used = self._use * self._recovered
        self._recovered -= used
        self._active += used
        return used


class HiddenRule:
    """Efficacy suppression, product form, parameters of its own for every seed."""

    def __init__(self, knobs: SynapseKnobs, seed: int, pathway: str) -> None:
        rng = stream(seed, f"hidden rule {pathway}")
        spread = rng.uniform(1 - _SPREAD, 1 + _SPREAD, 4)
        self._a_plus = _A_PLUS * spread[0] * knobs.plasticity_scale
        self._a_minus = _A_MINUS * spread[1] * knobs.plasticity_scale
        self._tau_plus_s = _TAU_PLUS_S * spread[2]
        self._tau_minus_s = _TAU_MINUS_S * spread[3]
        self._washout_s = knobs.washout_tau_min * 60
        self._recent: dict[bool, list[tuple[float, float]]] = {True: [], False: []}
        self._last_s = {True: -math.inf, False: -math.inf}
        self.weight = 1.0

    def spike(self, at_s: float, is_post: bool) -> None:
        """A spike of either side, in order of time."""
        tau_s = _SUPPRESS_POST_S if is_post else _SUPPRESS_PRE_S
        efficacy = 1.0 - math.exp(-(at_s - self._last_s[is_post]) / tau_s)
        self._last_s[is_post] = at_s
        fresh = math.exp(-at_s / self._washout_s)
        others = self._recent[not is_post]
        while others and at_s - others[0][0] > _REACH_S:
            others.pop(0)
        for other_s, other_efficacy in others:
            gap_s = at_s - other_s
            if gap_s <= 0:
                continue
            if is_post:
                step = self._a_plus * math.exp(-gap_s / self._tau_plus_s)
            else:
                step = -self._a_minus * math.exp(-gap_s / self._tau_minus_s)
            self.weight *= 1.0 + fresh * efficacy * other_efficacy * step
        self.weight = min(max(self.weight, _BOUNDS[0]), _BOUNDS[1])
        self._recent[is_post].append((at_s, efficacy))
        if len(self._recent[is_post]) > 64:
            del self._recent[is_post][:32]


class SimSynapse:
    """One pathway. See :class:`rigctl_sim.interfaces.Synapse`."""

    def __init__(self, knobs: SynapseKnobs, seed: int, pathway: str) -> None:
        self._depression = Depression(knobs.use, knobs.tau_rec_ms / 1000, knobs.tau_inact_ms / 1000)
        self._rng = stream(seed, f"release {pathway}")
        self._use = knobs.use
        self._sites = knobs.sites
        self._quantal_cv = knobs.quantal_cv
        self._rule = HiddenRule(knobs, seed, pathway)
        self._expression_s = knobs.expression_tau_min * 60
        self._expressed = 1.0
        self._expressed_at_s = 0.0

    def release(self, at_ns: int) -> float:
        """Return the strength of this event's EPSP; 1 is the first average one."""
        at_s = at_ns / 1e9
        self._express(at_s)
        probability = min(1.0, self._depression.release(at_s))
        self._rule.spike(at_s, is_post=False)
        released = int(self._rng.binomial(self._sites, probability))
        if released == 0:
            return 0.0
        size = released + self._quantal_cv * math.sqrt(released) * float(
            self._rng.standard_normal()
        )
        return max(0.0, size) / (self._sites * self._use) * self._expressed

    def post_spike(self, at_ns: int) -> None:
        """A postsynaptic spike."""
        at_s = at_ns / 1e9
        self._express(at_s)
        self._rule.spike(at_s, is_post=True)

    def _express(self, at_s: float) -> None:
        """What shows follows what was decided, slowly."""
        gone_s = at_s - self._expressed_at_s
        if gone_s > 0:
            rest = math.exp(-gone_s / self._expression_s)
            self._expressed = self._rule.weight + (self._expressed - self._rule.weight) * rest
            self._expressed_at_s = at_s

    @property
    def hidden_weight(self) -> float:
        """What the hidden rule has decided so far (for tests; never in a record)."""
        return self._rule.weight
