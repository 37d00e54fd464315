"""Published plasticity rules, run online on delivered spikes.

>>> from rigctl.plasticity import rule
>>> r = rule("pair-all", a_plus=0.01, a_minus=0.005, tau_plus_ms=17, tau_minus_ms=34)
>>> r.pre(0.000)
>>> r.post(0.010)
>>> round(r.change, 6)
0.005553
"""

from rigctl.plasticity.rules import RULES, PairRule, rule

__all__ = ["RULES", "PairRule", "rule"]
