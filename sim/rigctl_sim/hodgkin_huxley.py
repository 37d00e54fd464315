"""The squid axon of Hodgkin & Huxley 1952 (J Physiol 117:500), 6.3 °C, in today's sign convention.

C 1 µF/cm², conductances 120, 36 and 0.3 mS/cm², reversal potentials 50, −77 and −54.387 mV.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from rigctl_sim.compiled import compiled

Floats = npt.NDArray[np.float64]

C_UF_CM2 = 1.0
G_NA, G_K, G_LEAK = 120.0, 36.0, 0.3
E_NA, E_K, E_LEAK = 50.0, -77.0, -54.387


@compiled
def _ratio(x: float) -> float:
    """Return x / (1 − exp(−x)), whose singularity at 0 is removable."""
    if abs(x) < 1e-7:
        return 1.0 + x / 2.0
    return x / (1.0 - math.exp(-x))


@compiled
def rates(v_mv: float) -> tuple[float, float, float, float, float, float]:
    """Return α and β of m, h and n, 1/ms, at a membrane potential."""
    alpha_m = _ratio((v_mv + 40.0) / 10.0)
    beta_m = 4.0 * math.exp(-(v_mv + 65.0) / 18.0)
    alpha_h = 0.07 * math.exp(-(v_mv + 65.0) / 20.0)
    beta_h = 1.0 / (1.0 + math.exp(-(v_mv + 35.0) / 10.0))
    alpha_n = 0.1 * _ratio((v_mv + 55.0) / 10.0)
    beta_n = 0.125 * math.exp(-(v_mv + 65.0) / 80.0)
    return alpha_m, beta_m, alpha_h, beta_h, alpha_n, beta_n


@compiled
def _slope(
    v: float, m: float, h: float, n: float, current: float
) -> tuple[float, float, float, float]:
    alpha_m, beta_m, alpha_h, beta_h, alpha_n, beta_n = rates(v)
    ionic = (
        G_NA * m * m * m * h * (v - E_NA) + G_K * n * n * n * n * (v - E_K) + G_LEAK * (v - E_LEAK)
    )
    return (
        (current - ionic) / C_UF_CM2,
        alpha_m * (1.0 - m) - beta_m * m,
        alpha_h * (1.0 - h) - beta_h * h,
        alpha_n * (1.0 - n) - beta_n * n,
    )


@compiled
def integrate(
    v: float, m: float, h: float, n: float, current: float, pulse_steps: int, dt_ms: float,
    out: Floats,
) -> tuple[float, float, float, float]:  # fmt: skip
    """Integrate by Runge–Kutta of fourth order; write the potential after each step to ``out``.

    Parameters
    ----------
    v, m, h, n : float
        State, mV and fractions.
    current : float
        Current density, µA/cm², during the first ``pulse_steps`` steps; 0 afterwards.
    dt_ms : float
    out : ndarray, shape (steps,)

    Returns
    -------
    tuple of float
        The final state.
    """
    for k in range(len(out)):
        i = current if k < pulse_steps else 0.0
        a0, a1, a2, a3 = _slope(v, m, h, n, i)
        half = dt_ms / 2.0
        b0, b1, b2, b3 = _slope(v + half * a0, m + half * a1, h + half * a2, n + half * a3, i)
        c0, c1, c2, c3 = _slope(v + half * b0, m + half * b1, h + half * b2, n + half * b3, i)
        d0, d1, d2, d3 = _slope(v + dt_ms * c0, m + dt_ms * c1, h + dt_ms * c2, n + dt_ms * c3, i)
        v += dt_ms / 6.0 * (a0 + 2.0 * b0 + 2.0 * c0 + d0)
        m += dt_ms / 6.0 * (a1 + 2.0 * b1 + 2.0 * c1 + d1)
        h += dt_ms / 6.0 * (a2 + 2.0 * b2 + 2.0 * c2 + d2)
        n += dt_ms / 6.0 * (a3 + 2.0 * b3 + 2.0 * c3 + d3)
        out[k] = v
    return v, m, h, n


def steady(v_mv: float) -> tuple[float, float, float]:
    """Return m, h and n settled at a membrane potential."""
    alpha_m, beta_m, alpha_h, beta_h, alpha_n, beta_n = rates(v_mv)
    return (
        alpha_m / (alpha_m + beta_m),
        alpha_h / (alpha_h + beta_h),
        alpha_n / (alpha_n + beta_n),
    )


def rest_mv() -> float:
    """Return the resting potential: where the settled ionic current is zero, by bisection."""
    low, high = -80.0, -50.0
    for _ in range(80):
        middle = (low + high) / 2
        m, h, n = steady(middle)
        if _slope(middle, m, h, n, 0.0)[0] > 0:
            low = middle
        else:
            high = middle
    return (low + high) / 2


def respond(current: float, pulse_ms: float, run_ms: float, dt_ms: float = 0.01) -> Floats:
    """Return the potential, from rest, under a pulse of current density (µA/cm²)."""
    v = rest_mv()
    m, h, n = steady(v)
    out = np.empty(round(run_ms / dt_ms))
    integrate(v, m, h, n, current, round(pulse_ms / dt_ms), dt_ms, out)
    return out


def upward_crossings_ms(trace: Floats, dt_ms: float = 0.01, level_mv: float = 0.0) -> Floats:
    """Return when a trace from :func:`respond` crosses a level upwards, interpolated."""
    below = trace < level_mv
    at = np.flatnonzero(below[:-1] & ~below[1:])
    fraction = (level_mv - trace[at]) / (trace[at + 1] - trace[at])
    crossings: Floats = (at + 1 + fraction) * dt_ms
    return crossings
