"""The published axon's integrator: formulas near their singularities, order, compiled or not."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from rigctl_sim import hodgkin_huxley as hh
from rigctl_sim.compiled import COMPILED


@pytest.mark.parametrize(("singular_mv", "which", "limit"), [(-40.0, 0, 1.0), (-55.0, 4, 0.1)])
def test_rates_pass_smoothly_through_their_singularities(
    singular_mv: float, which: int, limit: float
) -> None:
    # 0.1 (V + 40) / (1 − exp(−(V + 40) / 10)) is 0/0 at −40 mV and tends to 1; likewise at −55.
    assert hh.rates(singular_mv)[which] == pytest.approx(limit, rel=1e-12)
    for off_mv in (1e-9, 1e-7, 1e-5, 1e-3):
        for side in (-1, 1):
            near = hh.rates(singular_mv + side * off_mv)[which]
            # The formula's slope there is half its value per 10 mV.
            assert near == pytest.approx(limit * (1 + side * off_mv / 20), rel=2e-9)


def test_the_integrator_is_of_fourth_order() -> None:
    fine = hh.respond(10.0, 5.0, 5.0, 0.00125)[-1]
    errors = [abs(hh.respond(10.0, 5.0, 5.0, dt_ms)[-1] - fine) for dt_ms in (0.02, 0.01)]
    # Half the step, a sixteenth of the error.
    assert 12 < errors[0] / errors[1] < 20


def test_another_method_finds_the_same_spikes() -> None:
    def slope(_t: float, y: np.ndarray) -> list[float]:  # type: ignore[type-arg]
        v, m, h, n = y
        am = 0.1 * (v + 40) / (1 - np.exp(-(v + 40) / 10))
        an = 0.01 * (v + 55) / (1 - np.exp(-(v + 55) / 10))
        bm, bn = 4 * np.exp(-(v + 65) / 18), 0.125 * np.exp(-(v + 65) / 80)
        ah, bh = 0.07 * np.exp(-(v + 65) / 20), 1 / (1 + np.exp(-(v + 35) / 10))
        ionic = 120 * m**3 * h * (v - 50) + 36 * n**4 * (v + 77) + 0.3 * (v + 54.387)
        return [15 - ionic, am * (1 - m) - bm * m, ah * (1 - h) - bh * h, an * (1 - n) - bn * n]

    def upward(_t: float, y: np.ndarray) -> float:  # type: ignore[type-arg]
        return float(y[0])

    upward.direction = 1  # type: ignore[attr-defined]
    rest = hh.rest_mv()
    solved = solve_ivp(
        slope, (0, 60), [rest, *hh.steady(rest)], "DOP853", events=upward, rtol=1e-8, atol=1e-9
    )
    ours = hh.upward_crossings_ms(hh.respond(15.0, 60.0, 60.0))
    assert len(ours) >= 4
    assert ours == pytest.approx(solved.t_events[0], abs=2e-3)


@pytest.mark.skipif(not COMPILED, reason="numba is not installed: there is nothing to compare")
def test_compiled_and_plain_python_agree() -> None:
    def run(integrate: object) -> np.ndarray:  # type: ignore[type-arg]
        out = np.empty(300)
        v = hh.rest_mv()
        integrate(v, *hh.steady(v), 10.0, 300, 0.01, out)  # type: ignore[operator]
        return out

    plain = hh.integrate.py_func  # type: ignore[attr-defined]
    assert run(plain) == pytest.approx(run(hh.integrate), rel=1e-10)
