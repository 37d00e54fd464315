"""The membrane of the conductance cell: its kinetics on a fixed grid, its rest, its EPSP's size.

The kinetics are those of Hodgkin & Huxley 1952, adapted, not published as a neuron:

* sodium 60 and potassium 15 mS/cm² instead of 120 and 36, leak 0.04 mS/cm² with its reversal set so
  that the cell rests at −70 mV: at the usual 100 pF that is an input resistance of about 88 MΩ
  (measured by a −20 pA step) and a membrane time constant of about 8.5 ms;
* all rates four times faster (about 19 °C at a Q10 of 3);
* EPSPs are conductances (difference of exponentials, reversal 0 mV), scaled at rest.

Steps of 25 µs by exponential Euler, gates from tables. Currents are pA, conductances nS,
capacitance pF, potentials mV, times ms.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from rigctl.errors import InputError
from rigctl_sim.compiled import compiled
from rigctl_sim.hodgkin_huxley import E_K, E_NA, rates, steady
from rigctl_sim.knobs import ConductanceKnobs

Floats = npt.NDArray[np.float64]
Steps = npt.NDArray[np.int64]

STEP_NS = 25_000
# Noise is at full size so many steps after an input, then fades to nothing.
NOISE_FULL = 150_000_000 // STEP_NS
NOISE_GONE = 180_000_000 // STEP_NS
# Indices into the state vector.
V, M, H, N, RISE, DECAY, NOISE, DRAW, BEFORE, BEFORE2, UP, PRIOR = range(12)
# Values of ``state[UP]``: below 0 mV or past the peak; above 0 mV before it; just past it.
ABOVE, PEAKED = 1.0, 2.0

_DT_MS = STEP_NS / 1e6
_REST_MV = -70.0
_G_NA, _G_K, _G_LEAK = 60.0, 15.0, 0.04
_FASTER = 4.0
_V_LOW, _V_HIGH, _PER_MV = -120.0, 80.0, 20
_REST_FROM_MV, _REST_TO_MV = -115.0, -45.0
_SETTLED_MV = 1e-6
# A conductance density, mS/cm², that no EPSP below a spike comes near.
_EPSP_AT_MOST = 10.0
_WHERE = "rig file, table [sim]"


@compiled
def run(
    state: Floats, tables: Floats, par: Floats, first: int, last: int, noise_from: int,
    event_at: Steps, event_g: Floats, pulse_on: Steps, pulse_off: Steps, pulse_pa: Floats,
    out: Floats,
) -> int:  # fmt: skip
    """Integrate steps ``first`` to ``last`` (not included); stop after a spike's peak.

    Parameters
    ----------
    state : ndarray, shape (12,)
        Changed in place; see the indices above.
    tables, par : ndarray
        From :func:`gate_tables` and :func:`parameters`.
    noise_from : int
        The step of the last input.
    event_at, event_g : ndarray
        Steps, in order, at which EPSPs begin, and their conductances, nS.
    pulse_on, pulse_off, pulse_pa : ndarray
        Steps between which currents flow, and the currents.
    out : ndarray, shape (last − first,)
        Takes the potential at the end of each step.

    Returns
    -------
    int
        The step reached: ``last``, or the one after the peak was seen (``state[UP] == PEAKED``).
    """
    c, g_na, g_k, g_leak, e_leak, holding, rise_keep, decay_keep, noise_keep, noise_step = (
        par[0], par[1], par[2], par[3], par[4], par[5], par[6], par[7], par[8], par[9]
    )  # fmt: skip
    v, m, h, n = state[V], state[M], state[H], state[N]
    rise, decay, noise, draw = state[RISE], state[DECAY], state[NOISE], state[DRAW]
    before, before2, up = state[BEFORE], state[BEFORE2], state[UP]
    rows = tables.shape[1] - 2
    e = 0
    while e < len(event_at) and event_at[e] < first:
        e += 1
    k = first
    while k < last:
        while e < len(event_at) and event_at[e] <= k:
            rise += event_g[e]
            decay += event_g[e]
            e += 1
        current = holding
        for p in range(len(pulse_on)):
            if pulse_on[p] <= k and k < pulse_off[p]:
                current += pulse_pa[p]
        # Park & Miller's generator: exact in doubles, one number per step, so that the noise
        # depends on the step and not on how time is cut.
        draw = (16807.0 * draw) % 2147483647.0
        noise = noise * noise_keep + noise_step * (draw / 2147483647.0 - 0.5)
        since = k - noise_from
        size = 1.0
        if since > NOISE_FULL:
            size = max(0.0, (NOISE_GONE - since) / (NOISE_GONE - NOISE_FULL))
        current += noise * size
        # Beyond the tables' ends every gate is as good as settled: its last value stands.
        x = min(max((v - _V_LOW) * _PER_MV, 0.0), rows + 1.0)
        i = min(int(x), rows)
        f = x - i
        m_inf = tables[0, i] + f * (tables[0, i + 1] - tables[0, i])
        m_keep = tables[1, i] + f * (tables[1, i + 1] - tables[1, i])
        h_inf = tables[2, i] + f * (tables[2, i + 1] - tables[2, i])
        h_keep = tables[3, i] + f * (tables[3, i + 1] - tables[3, i])
        n_inf = tables[4, i] + f * (tables[4, i + 1] - tables[4, i])
        n_keep = tables[5, i] + f * (tables[5, i + 1] - tables[5, i])
        m = m_inf + (m - m_inf) * m_keep
        h = h_inf + (h - h_inf) * h_keep
        n = n_inf + (n - n_inf) * n_keep
        g1 = g_na * m * m * m * h
        g2 = g_k * n * n * n * n
        g3 = decay - rise
        total = g1 + g2 + g_leak + g3
        # The EPSP's reversal is 0 mV: it adds to the conductance only.
        v_inf = (g1 * E_NA + g2 * E_K + g_leak * e_leak + current) / total
        v = v_inf + (v - v_inf) * math.exp(-_DT_MS * total / c)
        rise *= rise_keep
        decay *= decay_keep
        out[k - first] = v
        k += 1
        if v > 0.0 and before <= 0.0:
            up = ABOVE
        if up == ABOVE and v < before and before >= before2:
            up = PEAKED
            state[PRIOR] = before2
        before2 = before
        before = v
        if up == PEAKED:
            break
    state[V], state[M], state[H], state[N] = v, m, h, n
    state[RISE], state[DECAY], state[NOISE], state[DRAW] = rise, decay, noise, draw
    state[BEFORE], state[BEFORE2], state[UP] = before, before2, up
    return k


def peak_ns(state: Floats, reached: int) -> int:
    """Return when the spike that stopped :func:`run` at step ``reached`` had its peak: between
    grid points, by a parabola through the three around it.
    """
    after, top, prior = state[BEFORE], state[BEFORE2], state[PRIOR]
    bend = after - 2.0 * top + prior
    shift = 0.0 if bend == 0 else 0.5 * (prior - after) / bend
    # A potential written at step k is the one at the end of that step.
    return round((reached - 1 + shift) * STEP_NS)


def gate_tables() -> Floats:
    """Return settled value and one step's persistence of each gate over the potential."""
    volts = np.arange(round((_V_HIGH - _V_LOW) * _PER_MV) + 2) / _PER_MV + _V_LOW
    tables = np.empty((6, len(volts)))
    for column, v in enumerate(volts):
        alpha_beta = rates(float(v))
        for gate in range(3):
            alpha, beta = alpha_beta[2 * gate], alpha_beta[2 * gate + 1]
            tables[2 * gate, column] = alpha / (alpha + beta)
            tables[2 * gate + 1, column] = np.exp(-_DT_MS * _FASTER * (alpha + beta))
    return tables


def parameters(knobs: ConductanceKnobs, at_step: int) -> Floats:
    """Return what :func:`run` needs (1 mS/cm² on 1 µF/cm² is 1 nS per pF), drift included."""
    c = knobs.capacitance_pf
    m, h, n = steady(_REST_MV)
    g_na, g_k, leak = _G_NA * c, _G_K * c, _G_LEAK * c
    drift = 1.0 + knobs.leak_drift_pct_per_min / 100.0 * (at_step * STEP_NS / 6e10)
    # The reversal that balances the other currents at −70 mV, without holding or drift.
    active = g_na * m**3 * h * (_REST_MV - E_NA) + g_k * n**4 * (_REST_MV - E_K)
    e_leak = _REST_MV + active / leak
    noise_keep = np.exp(-_DT_MS / knobs.noise_tau_ms)
    # Uniform steps of this size give the stationary SD; over many steps they sum to a normal.
    noise_step = knobs.noise_pa * np.sqrt(12.0 * (1.0 - noise_keep**2))
    return np.array(
        [c, g_na, g_k, max(leak * drift, leak * 0.05), e_leak, knobs.holding_pa,
         np.exp(-_DT_MS / knobs.rise_ms), np.exp(-_DT_MS / knobs.decay_ms),
         noise_keep, noise_step]
    )  # fmt: skip


def _gates_at(v: float, tables: Floats) -> tuple[float, float, float]:
    """Return settled gates as :func:`run` has them, so that its rest is this rest."""
    x = (v - _V_LOW) * _PER_MV
    i = int(x)
    m, h, n = (tables[[0, 2, 4], i] * (1 - (x - i)) + tables[[0, 2, 4], i + 1] * (x - i)).tolist()
    return m, h, n


def _outward_pa(v: float, par: Floats, tables: Floats) -> float:
    """Return the settled ionic current at a potential: what holding must balance."""
    _c, g_na, g_k, g_leak, e_leak = par[:5].tolist()
    m, h, n = _gates_at(v, tables)
    return float(g_na * m**3 * h * (v - E_NA) + g_k * n**4 * (v - E_K) + g_leak * (v - e_leak))


def rest_mv(par: Floats, tables: Floats) -> float:
    """Return the resting potential, by bisection; the end of the range when it has none in it."""
    low, high = _REST_FROM_MV, _REST_TO_MV
    for _ in range(80):
        v = (low + high) / 2
        low, high = (v, high) if par[5] > _outward_pa(v, par, tables) else (low, v)
    return (low + high) / 2


def resting_state(rest: float, draw: float, tables: Floats) -> Floats:
    """Return the state of a cell that has been left alone; ``draw`` is where its noise goes on."""
    m, h, n = _gates_at(rest, tables)
    return np.array([rest, m, h, n, 0.0, 0.0, 0.0, draw, rest, rest, 0.0, rest])


def is_settled(state: Floats, rest: float, tables: Floats) -> bool:
    """Whether nothing of the inputs is left: 1e-6 mV from rest, gates and EPSPs likewise."""
    gates = _gates_at(rest, tables)
    return bool(
        abs(state[V] - rest) < _SETTLED_MV
        and np.abs(state[[M, H, N]] - gates).max() < _SETTLED_MV
        and state[DECAY] < _SETTLED_MV
    )


def check(knobs: ConductanceKnobs, par: Floats, tables: Floats) -> None:
    """Refuse knobs that no cell can have together.

    Raises
    ------
    InputError
    """
    if knobs.decay_ms <= knobs.rise_ms:
        raise InputError.at(
            _WHERE,
            "conductance.decay_ms",
            knobs.decay_ms,
            f"an EPSP decays more slowly than it rises: above rise_ms = {knobs.rise_ms:g}",
        )
    volts = np.arange(_REST_FROM_MV, _REST_TO_MV, 0.5)
    outward = [_outward_pa(float(v), par, tables) for v in volts]
    if not outward[0] <= knobs.holding_pa <= max(outward):
        raise InputError.at(
            _WHERE,
            "conductance.holding_pa",
            knobs.holding_pa,
            f"a cell of {knobs.capacitance_pf:g} pF has a resting potential from "
            f"{math.ceil(outward[0])} to {math.floor(max(outward))} pA",
        )


def epsp_ns_per_strength(knobs: ConductanceKnobs, par: Floats, tables: Floats) -> float:
    """Return the conductance, nS, that makes strength 1 an EPSP of the wanted size.

    Raises
    ------
    InputError
        When no EPSP below a spike is that large.
    """
    if knobs.epsp_mv == 0:
        return 0.0
    rest = rest_mv(par, tables)
    quiet = par.copy()
    quiet[9] = 0.0
    none = np.zeros(0, dtype=np.int64)
    at = np.zeros(1, dtype=np.int64)
    steps = round((60.0 + 10.0 * knobs.rise_ms) * 1e6) // STEP_NS

    def height(g: float) -> float:
        """Return the EPSP's height, infinite when it fires the cell."""
        state = resting_state(rest, 1.0, tables)
        out = np.empty(steps)
        run(state, tables, quiet, 0, steps, 0, at, np.array([g]), none, none, np.zeros(0), out)
        return math.inf if state[UP] else float(out.max()) - rest

    # The two exponentials of size 1 differ by this at most.
    ratio = knobs.decay_ms / knobs.rise_ms
    largest = ratio ** (-1.0 / (ratio - 1.0)) * (1.0 - 1.0 / ratio)
    low, high = 0.0, _EPSP_AT_MOST * knobs.capacitance_pf / largest
    for _ in range(60):
        g = (low + high) / 2
        low, high = (low, g) if height(g) > knobs.epsp_mv else (g, high)
    reached = height(low)
    if reached < 0.99 * knobs.epsp_mv:
        raise InputError.at(
            _WHERE,
            "conductance.epsp_mv",
            knobs.epsp_mv,
            f"with this rise and decay an EPSP that fires no spike reaches at most "
            f"{math.floor(reached * 10) / 10:g} mV",
        )
    return low
