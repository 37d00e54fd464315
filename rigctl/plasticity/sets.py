"""Published parameter sets by name: source, preparation, form, amplitudes per pair.

Windows in papers are totals after that paper's own number of pairings. A session needs amplitudes
per pair; how each was converted is said with the set. The same Δt gives different signs in
different preparations: no set is a silent default, and none travels between preparations.
"""

from __future__ import annotations

from typing import Any

from msgspec import Struct

from rigctl.errors import InputError, nearest
from rigctl.plasticity.rules import check_rule_name, rule
from rigctl.protocol.plan import RuleChoice
from rigctl.protocol.schema import Forecast

FALLBACK_RULE = "pair-all"
FALLBACK_SET = "bi-poo-2001"


class ParameterSet(Struct, frozen=True):
    """One published set.

    ``pairings`` is the source's own number of pairings, where amplitudes come from such a total.
    ``how_sure`` says in words how the numbers were come by.
    """

    name: str
    source: str
    preparation: str
    conversion: str
    how_sure: str
    pairings: int | None
    parameters: dict[str, float | str]


def _set(
    name: str,
    source: str,
    preparation: str,
    conversion: str,
    how_sure: str,
    pairings: int | None,
    **parameters: float | str,
) -> ParameterSet:
    return ParameterSet(name, source, preparation, conversion, how_sure, pairings, dict(parameters))


SETS: dict[str, ParameterSet] = {
    s.name: s
    for s in (
        _set(
            "bi-poo-2001",
            "Bi & Poo 2001, Annu Rev Neurosci 24:139",
            "rat hippocampal neurons in culture",
            "window amplitudes .777 and .273 (fraction after 60 pairs at 1 Hz) divided by 60; "
            "additive, so that 60 pairs give the window back at every Δt",
            "read second-hand",
            60,
            weight="additive",
            a_plus=0.777 / 60,
            a_minus=0.273 / 60,
            tau_plus_ms=16.8,
            tau_minus_ms=33.7,
        ),
        _set(
            "froemke-dan-2002",
            "Froemke & Dan 2002, Nature 416:433",
            "rat visual cortex layer 2/3, slice",
            "window amplitudes 1.01 and .52 divided by 60 pairings; additive; the pair window "
            "alone, without that paper's suppression between spikes",
            "window read second-hand (a second recalled set, 1.03/13.3/.51/34.5, conflicts); "
            "the number of pairings from memory",
            60,
            weight="additive",
            a_plus=1.01 / 60,
            a_minus=0.52 / 60,
            tau_plus_ms=14.8,
            tau_minus_ms=33.8,
        ),
        _set(
            "song-2000",
            "Song, Miller & Abbott 2000, Nat Neurosci 3:919",
            "model: no preparation",
            ".005 and 1.05 × .005 of the largest weight per pair, as stated; hard bounds 0 and 1; "
            "the weight starts half way (our choice)",
            "read second-hand",
            None,
            weight="additive",
            a_plus=0.005,
            a_minus=0.00525,
            tau_plus_ms=20.0,
            tau_minus_ms=20.0,
            w_start=0.5,
            w_min=0.0,
            w_max=1.0,
        ),
        _set(
            "van-rossum-2000",
            "van Rossum, Bi & Turrigiano 2000, J Neurosci 20:8812",
            "model after rat hippocampal neurons in culture",
            "+1 pS and −.003·w per pair, as stated; the weight is in pS and starts at its mean "
            "field fixed point (our choice)",
            "from memory",
            None,
            weight_plus="additive",
            weight_minus="multiplicative",
            a_plus=1.0,
            a_minus=0.003,
            tau_plus_ms=20.0,
            tau_minus_ms=20.0,
            w_start=1.0 / 0.003,
        ),
        _set(
            "guetig-2003",
            "Gütig et al. 2003, J Neurosci 23:3697",
            "model: no preparation",
            "λ = .005, α = 1.05, μ = .02 between 0 and 1; λ and the start half way are our choice",
            "form read second-hand; λ chosen",
            None,
            weight="power",
            mu=0.02,
            a_plus=0.005,
            a_minus=0.00525,
            tau_plus_ms=20.0,
            tau_minus_ms=20.0,
            w_start=0.5,
            w_min=0.0,
            w_max=1.0,
        ),
        _set(
            "morrison-2007",
            "Morrison, Aertsen & Diesmann 2007, Neural Comput 19:1437",
            "model after rat hippocampal neurons in culture",
            "+λ·w₀^.6·w^.4 and −αλ·w per pair, λ = .1, α = .11, w₀ = the starting weight",
            "μ read second-hand; λ and α from memory",
            None,
            weight_plus="power",
            weight_minus="multiplicative",
            mu=0.4,
            a_plus=0.1,
            a_minus=0.011,
            tau_plus_ms=20.0,
            tau_minus_ms=20.0,
        ),
    )
}


def lookup(name: str, where: str, key: str) -> ParameterSet:
    """Return a set by name, or say which there are."""
    if name not in SETS:
        hint = nearest(name, list(SETS))
        known = "" if hint else f" Known: {', '.join(SETS)}."
        raise InputError(f"{where}: {key} = {name!r}: no such parameter set{hint or ';'}{known}")
    return SETS[name]


def resolve(choice: Forecast | None, default_set: str | None, where: str, key: str) -> RuleChoice:
    """Complete a forecast's choice of rule and parameters.

    Parameters
    ----------
    choice : Forecast or None
        What the protocol says; None where it says nothing.
    default_set : str or None
        The rig file's ``forecast_set``.
    where, key : str
        For the sentence when something is wrong.

    Returns
    -------
    RuleChoice
        Complete parameters. Where neither file names a set, the fallback is taken and the
        preparation left None, so that everything that shows it can say "no preparation named".
    """
    own = {} if choice is None else _own_parameters(choice)
    name = FALLBACK_RULE if choice is None else choice.rule
    check_rule_name(name, where, f"{key}.rule" if choice is not None else key)
    set_name = (choice.set if choice is not None else None) or default_set
    named = set_name is not None
    if set_name is None and not {"a_plus", "a_minus", "tau_plus_ms", "tau_minus_ms"} <= set(own):
        set_name = FALLBACK_SET
    parameters: dict[str, float | str | None] = {}
    source, preparation, pairings = "stated in the protocol", None, None
    if set_name is not None:
        found = lookup(set_name, where, f"{key}.set" if choice is not None else key)
        parameters |= found.parameters
        source = f"{found.source}; {found.conversion}; {found.how_sure}"
        preparation = found.preparation if named else None
        pairings = found.pairings
    parameters |= own
    # Made once here, so that a wrong parameter is found when the plan is compiled.
    try:
        rule(name, **parameters)
    except InputError as error:
        raise InputError(f"{where}: {key}: {error}") from None
    own_numbers = bool(own.keys() - {"nearest"})
    label = set_name if set_name and not own_numbers else "own"
    return RuleChoice(name, label, parameters, source, preparation, pairings)


def _own_parameters(choice: Forecast) -> dict[str, Any]:
    names = [n for n in choice.__struct_fields__ if n not in ("rule", "set")]
    return {n: getattr(choice, n) for n in names if getattr(choice, n) is not None}
