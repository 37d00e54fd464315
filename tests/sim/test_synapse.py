"""The simulated synapse: failures, hidden plasticity, expression over minutes."""

from __future__ import annotations

import numpy as np
import pytest

from rigctl_sim.knobs import SynapseKnobs
from rigctl_sim.synapse import Depression, SimSynapse

S = 1_000_000_000


def test_the_first_response_is_one_on_average_and_varies_binomially() -> None:
    knobs = SynapseKnobs(quantal_cv=0)
    first = np.array([SimSynapse(knobs, seed, "s1").release(S) for seed in range(2000)])
    # Binomial release: variance q²NP(1 − P), here relative to the mean NP (read second-hand).
    variance = (1 - 0.5) / (12 * 0.5)
    assert abs(first.mean() - 1) < 5 * (variance / 2000) ** 0.5
    assert first.var() == pytest.approx(variance, rel=0.15)


@pytest.mark.parametrize("sites", [1, 3])
def test_failures_of_transmission_are_zero_and_as_many_as_said(sites: int) -> None:
    synapse = SimSynapse(SynapseKnobs(sites=sites, use=0.3), 1, "s1")
    strengths = [synapse.release(n * 10 * S) for n in range(1, 400)]
    failures = strengths.count(0.0) / len(strengths)
    expected = 0.7**sites
    assert abs(failures - expected) < 5 * (expected * (1 - expected) / 399) ** 0.5


@pytest.mark.parametrize("tau_s", [0.003, 0.8])
def test_recovery_may_be_as_fast_as_inactivation(tau_s: float) -> None:
    equal, nearly = Depression(0.5, tau_s, tau_s), Depression(0.5, tau_s, tau_s * (1 + 1e-6))
    for k in range(20):
        assert equal.release(0.002 * k) == pytest.approx(nearly.release(0.002 * k), rel=1e-5)


def _pair(synapse: SimSynapse, dt_ms: float, count: int) -> None:
    for n in range(1, count + 1):
        at_ns = n * 5 * S
        if dt_ms > 0:
            synapse.release(at_ns)
            synapse.post_spike(at_ns + round(dt_ms * 1e6))
        else:
            synapse.post_spike(at_ns)
            synapse.release(at_ns - round(dt_ms * 1e6))


def test_hidden_plasticity_has_the_sign_of_delta_t_and_can_be_switched_off() -> None:
    up, down, off = (
        SimSynapse(k, 1, "s1")
        for k in (SynapseKnobs(), SynapseKnobs(), SynapseKnobs(plasticity_scale=0))
    )
    _pair(up, 10, 60)
    _pair(down, -10, 60)
    _pair(off, 10, 60)
    assert up.hidden_weight > 1.1
    assert down.hidden_weight < 0.95
    assert off.hidden_weight == 1.0


def test_the_change_shows_over_minutes_not_at_once() -> None:
    knobs = SynapseKnobs(sites=100_000, quantal_cv=0, use=0.05, expression_tau_min=4)
    synapse = SimSynapse(knobs, 1, "s1")
    _pair(synapse, 10, 60)
    end_ns = 60 * 5 * S
    soon = synapse.release(end_ns + 10 * S)
    late = synapse.release(end_ns + 30 * 60 * S)
    assert soon < late
    assert late == pytest.approx(synapse.hidden_weight, rel=0.02)


def test_washout_weakens_a_late_induction() -> None:
    early, late = (SimSynapse(SynapseKnobs(washout_tau_min=10), 1, "s1") for _ in range(2))
    _pair(early, 10, 30)
    for n in range(1, 31):
        at_ns = 30 * 60 * S + n * 5 * S
        late.release(at_ns)
        late.post_spike(at_ns + 10_000_000)
    assert 0 < late.hidden_weight - 1 < 0.3 * (early.hidden_weight - 1)


def test_seeds_have_parameters_of_their_own() -> None:
    weights = set()
    for seed in range(5):
        synapse = SimSynapse(SynapseKnobs(), seed, "s1")
        _pair(synapse, 10, 20)
        weights.add(synapse.hidden_weight)
    assert len(weights) == 5
