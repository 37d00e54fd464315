"""Pair rules as trace variables: each spike costs O(1).

A pre spike followed by a post spike Δt later changes the weight by ``+a_plus·f₊(w)·exp(−Δt/τ₊)``, a
post spike followed by a pre spike by ``−a_minus·f₋(w)·exp(−|Δt|/τ₋)``. Which pairs count:

* ``pair-all``: every pre with every post.
* ``pair-nearest``, ``nearest = "symmetric"``: each spike with the last one of the other train.
* ``pair-nearest``, ``nearest = "presynaptic"``: each pre with the last post before it and the next
  one after it (Izhikevich & Desai 2003, Neural Comput 15:1511).

Simultaneous spikes do not pair. The weight starts at ``w_start`` (1 unless given), so that
amplitudes are relative changes per pair. How the weight enters, f₊ and f₋:

=================  ==========================  ==========================
``weight``         potentiation f₊             depression f₋
=================  ==========================  ==========================
additive           1                           1
multiplicative     w, or 1 − u with ``w_max``  w, or u with ``w_max``
power              w₀^(1−μ)·w^μ, or (1 − u)^μ  w₀^(1−μ)·w^μ, or u^μ
=================  ==========================  ==========================

with u = (w − w_min)/(w_max − w_min) and w₀ = ``w_start``. ``weight_plus`` and ``weight_minus`` set
one side alone: van Rossum, Bi & Turrigiano 2000 (J Neurosci 20:8812) is additive up and
multiplicative down; Gütig et al. 2003 (J Neurosci 23:3697) is ``power`` with bounds 0 and 1;
Morrison, Aertsen & Diesmann 2007 (Neural Comput 19:1437) is ``power`` up, multiplicative down,
without bounds. ``w_min`` and ``w_max`` are hard bounds in every form; without them additive is
unbounded.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Literal

from rigctl.errors import InputError, nearest

RULES = ("pair-all", "pair-nearest")
LATER_RULES = ("suppression", "calcium")
_WEIGHTS = ("additive", "multiplicative", "power")
_NEAREST = ("symmetric", "presynaptic")
_NUMBERS = {
    "a_plus": (0.0, True),
    "a_minus": (0.0, True),
    "tau_plus_ms": (0.0, False),
    "tau_minus_ms": (0.0, False),
    "mu": (0.0, True),
    "w_start": (0.0, False),
    "w_min": (0.0, True),
    "w_max": (0.0, False),
}
_NEEDED = ("a_plus", "a_minus", "tau_plus_ms", "tau_minus_ms")
_WORDS = {
    "weight": _WEIGHTS,
    "weight_plus": _WEIGHTS,
    "weight_minus": _WEIGHTS,
    "nearest": _NEAREST,
}

Form = Callable[[float], float]


def rule(name: str, **parameters: Any) -> PairRule:
    """Return a rule, ready to be told spikes.

    Parameters
    ----------
    name : str
        ``"pair-all"`` or ``"pair-nearest"``.
    **parameters
        ``a_plus``, ``a_minus`` (relative change per pair, ≥ 0), ``tau_plus_ms``,
        ``tau_minus_ms``, and optionally ``weight``, ``mu``, ``w_start``, ``w_min``, ``w_max``,
        ``weight_plus``, ``weight_minus`` and, for ``pair-nearest``, ``nearest``. A value of None
        counts as not given.

    Raises
    ------
    InputError
        Unknown rule or parameter, or a value out of its range.
    """
    given = {key: value for key, value in parameters.items() if value is not None}
    check_rule_name(name, "rule", "")
    for key in given:
        if key not in _NUMBERS and key not in _WORDS:
            known = [*_NUMBERS, *_WORDS]
            raise InputError(
                f"rule {name}: {key}: there is no such parameter{nearest(key, known)}"
                f"{'' if nearest(key, known) else '; known: ' + ', '.join(known) + '.'}"
            )
    for key in _NEEDED:
        if key not in given:
            raise InputError(f"rule {name}: {key}: this parameter is needed.")
    for key, words in _WORDS.items():
        if key in given and given[key] not in words:
            raise InputError.at(f"rule {name}", key, given[key], f"one of {', '.join(words)}")
    for key, (least, may_equal) in _NUMBERS.items():
        value = given.get(key)
        if value is None:
            continue
        if not isinstance(value, int | float) or not math.isfinite(value):
            raise InputError.at(f"rule {name}", key, value, "a finite number is needed")
        if value < least or (value == least and not may_equal):
            word = "or more" if may_equal else "is too small: more"
            raise InputError.at(f"rule {name}", key, value, f"{least:g} {word} is needed")
    if name == "pair-all" and "nearest" in given:
        raise InputError("rule pair-all: nearest: belongs to pair-nearest.")
    return PairRule(name, given)


def check_rule_name(name: str, where: str, key: str) -> None:
    """Refuse a name that is no rule of today."""
    at = f"{where}: {key}" if key else where
    if name in LATER_RULES:
        raise InputError(f"{at} = {name!r}: not in this version; it runs {' and '.join(RULES)}.")
    if name not in RULES:
        hint = nearest(name, list(RULES))
        raise InputError(f"{at} = {name!r}: {' or '.join(RULES)} is needed{hint or '.'}")


def _form(
    kind: str, mu: float, w_start: float, w_min: float, w_max: float | None, up: bool
) -> Form:
    if kind == "additive":
        return lambda w: 1.0
    if w_max is None:
        if kind == "multiplicative":
            return lambda w: w
        scale = w_start ** (1 - mu)
        return lambda w: scale * max(w, 0.0) ** mu
    span = w_max - w_min
    power = 1.0 if kind == "multiplicative" else mu
    if up:
        return lambda w: max(0.0, 1.0 - (w - w_min) / span) ** power
    return lambda w: max(0.0, (w - w_min) / span) ** power


class PairRule:
    """A pair rule with its traces. Make one with :func:`rule`."""

    def __init__(self, name: str, parameters: dict[str, Any]) -> None:
        self.name = name
        self.parameters = dict(parameters)
        self._mode: Literal["all", "symmetric", "presynaptic"] = (
            "all" if name == "pair-all" else parameters.get("nearest", "symmetric")
        )
        self._a_plus = float(parameters["a_plus"])
        self._a_minus = float(parameters["a_minus"])
        self._tau_plus_s = parameters["tau_plus_ms"] / 1000
        self._tau_minus_s = parameters["tau_minus_ms"] / 1000
        self._w_start = float(parameters.get("w_start", 1.0))
        self._w_min: float | None = parameters.get("w_min")
        self._w_max: float | None = parameters.get("w_max")
        if self._w_min is not None and self._w_max is not None and self._w_min >= self._w_max:
            raise InputError.at(
                f"rule {name}", "w_max", self._w_max, f"more than w_min = {self._w_min:g} is needed"
            )
        if not (self._w_min or 0.0) <= self._w_start <= (
            math.inf if self._w_max is None else self._w_max
        ) and (self._w_min is not None or self._w_max is not None):
            raise InputError.at(
                f"rule {name}", "w_start", self._w_start, "it must lie between w_min and w_max"
            )
        weight = parameters.get("weight", "additive")
        mu = float(parameters.get("mu", 1.0))
        bounds = (self._w_start, self._w_min or 0.0, self._w_max)
        self._f_plus = _form(parameters.get("weight_plus", weight), mu, *bounds, up=True)
        self._f_minus = _form(parameters.get("weight_minus", weight), mu, *bounds, up=False)
        self._w = self._w_start
        self._now_s = -math.inf
        # A trace, when it was last brought up to date, and what spikes at that very time add to
        # it: they count only from later on, so that simultaneous spikes do not pair.
        self._x, self._x_new, self._x_at_s = 0.0, 0.0, -math.inf
        self._y, self._y_new, self._y_at_s = 0.0, 0.0, -math.inf

    @property
    def change(self) -> float:
        """Relative weight change so far; 0.1 is +10 %."""
        return self._w / self._w_start - 1.0

    def _to(self, at_s: float) -> None:
        if not at_s >= self._now_s:
            raise InputError(
                f"rule {self.name}: a spike at {at_s!r} s after one at {self._now_s!r} s; times "
                "must not decrease."
            )
        self._now_s = at_s

    def pre(self, at_s: float) -> None:
        """A presynaptic event at ``at_s``, s; not before any spike told already."""
        self._to(at_s)
        y = self._post_trace(at_s)
        if y:
            w = self._w - self._a_minus * self._f_minus(self._w) * y
            self._w = w if self._w_min is None else max(w, self._w_min)
        x = self._pre_trace(at_s)
        if self._mode == "symmetric":
            # The latest one replaces the others, but only for spikes after it.
            self._x, self._x_new = x, 1.0
        else:
            self._x, self._x_new = x, self._x_new + 1.0

    def post(self, at_s: float) -> None:
        """A postsynaptic spike at ``at_s``, s; not before any spike told already."""
        self._to(at_s)
        x = self._pre_trace(at_s)
        if x:
            w = self._w + self._a_plus * self._f_plus(self._w) * x
            self._w = w if self._w_max is None else min(w, self._w_max)
        self._x = 0.0 if self._mode == "presynaptic" else x
        y = self._post_trace(at_s)
        self._y = y
        self._y_new = self._y_new + 1.0 if self._mode == "all" else 1.0

    def _pre_trace(self, at_s: float) -> float:
        """Return the pre trace left at ``at_s`` by earlier spikes."""
        if at_s > self._x_at_s:
            before = (
                self._x_new
                if self._x_new and self._mode == "symmetric"
                else (self._x + self._x_new)
            )
            self._x = before and before * math.exp((self._x_at_s - at_s) / self._tau_plus_s)
            self._x_new, self._x_at_s = 0.0, at_s
        return self._x

    def _post_trace(self, at_s: float) -> float:
        """Return the post trace left at ``at_s`` by earlier spikes."""
        if at_s > self._y_at_s:
            before = self._y_new if self._y_new and self._mode != "all" else self._y + self._y_new
            self._y = before and before * math.exp((self._y_at_s - at_s) / self._tau_minus_s)
            self._y_new, self._y_at_s = 0.0, at_s
        return self._y
