"""Stimulation limits against worked examples (computed here from the published formulas)."""

from __future__ import annotations

import math

import pytest

from rigctl.protocol.rig import Electrode
from rigctl.safety import charge
from rigctl.safety.limits import Verdict, verdicts
from tests.conftest import make_plan, make_rig

ISOLATOR = 'stimulus = "isolator_a"'
DISC_125 = Electrode(diameter_um=125)
DISC_25 = Electrode(diameter_um=25)
MICRO = Electrode(area_um2=2000)


# Q in µC, D in µC/cm², k: Shannon 1992, IEEE TBME 39:424 (read second-hand), k = log10(Q²/A).
@pytest.mark.parametrize(
    ("current_ua", "width_us", "electrode", "q_uc", "density", "k"),
    [
        (100, 100, DISC_125, 0.01, 81.5, -0.089),
        (500, 200, DISC_125, 0.1, 815, 1.911),
        (100, 100, DISC_25, 0.01, 2037, 1.309),
        (20, 200, MICRO, 0.004, 200, -0.097),
    ],
)
def test_worked_examples(
    current_ua: float, width_us: float, electrode: Electrode, q_uc: float, density: float, k: float
) -> None:
    area = charge.area_cm2(electrode)
    assert area is not None
    found_q = charge.per_phase_uc(current_ua, width_us)
    assert found_q == pytest.approx(q_uc)
    assert charge.density_uc_cm2(found_q, area) == pytest.approx(density, rel=6e-4)
    assert charge.shannon_k(found_q, area) == pytest.approx(k, abs=5e-4)
    # The two ways of writing k are one: log10 D = k − log10 Q.
    again = math.log10(charge.density_uc_cm2(found_q, area)) + math.log10(found_q)
    assert charge.shannon_k(found_q, area) == pytest.approx(again, abs=1e-12)


def test_largest_current() -> None:
    area = charge.area_cm2(DISC_125)
    assert area is not None
    largest = charge.largest_current_ua(1.5, area, 200)
    assert round(largest, 1) == 311.5
    assert charge.shannon_k(charge.per_phase_uc(largest, 200), area) == pytest.approx(1.5)


# Charge injection limits: Cogan 2008, Annu Rev Biomed Eng 10:275 (read second-hand), the
# conservative end of each range.
@pytest.mark.parametrize(
    ("material", "limit"),
    [("Pt", 50), ("PtIr", 50), ("AIROF", 1000), ("SIROF", 1000), ("TiN", 1000), ("PEDOT", 15000)],
)
def test_material_limits(material: str, limit: float) -> None:
    found, source = charge.density_limit(material)
    assert found == limit
    assert "Cogan 2008" in source


def _check(name: str, amplitude_ua: float, width_us: float, electrode: str) -> Verdict:
    rig = make_rig(
        replace={
            "amplitude_ua = 60": f"amplitude_ua = {amplitude_ua}",
            "width_us = 100\n" + ISOLATOR: f"width_us = {width_us}\n" + ISOLATOR,
            'diameter_um = 125\nmaterial = "PtIr"': electrode,
        }
    )
    plan = make_plan(rig=rig)
    return next(v for v in verdicts(plan, rig) if v.name == name and v.line == "pre1")


def test_the_examples_are_refused_or_pass_as_they_should() -> None:
    disc_125 = 'diameter_um = 125\nmaterial = "PtIr"'
    disc_25 = 'diameter_um = 25\nmaterial = "PtIr"'
    micro = 'area_um2 = 2000\nmaterial = "AIROF"'
    assert _check("k", 100, 100, disc_125).ok is True
    assert _check("charge density", 100, 100, disc_125).ok is False  # 81.5 over 50
    assert _check("k", 500, 200, disc_125).ok is False
    assert _check("k", 100, 100, disc_25).ok is True  # passes k …
    assert _check("charge per phase", 100, 100, disc_25).ok is False  # … but 10 nC
    # 4 nC damaged, 2 nC safe: Cogan et al. 2016, J Neural Eng 13:021001 (read in the paper).
    assert _check("k", 20, 200, micro).ok is True
    assert _check("charge per phase", 20, 200, micro).ok is False
    assert _check("charge per phase", 10, 200, micro).ok is True
