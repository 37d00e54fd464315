"""Charge through an electrode: the published formulas, one function each."""

from __future__ import annotations

import math

from rigctl.protocol.rig import Electrode

SHANNON = (
    "Shannon 1992, IEEE TBME 39:424; damage seen from 1.85, clinical devices 1.5–1.8: "
    "Merrill et al. 2005, J Neurosci Meth 141:171; Cogan et al. 2016, J Neural Eng 13:021001; "
    "read second-hand"
)
MICRO = (
    "Cogan et al. 2016, J Neural Eng 13:021001, read in the paper: 2 nC safe, 4 nC damaged "
    "(200 µs, 50 Hz, 2000 µm²); McCreery et al. 2010, J Neural Eng 7:036005, read second-hand"
)
COGAN = "Cogan 2008, Annu Rev Biomed Eng 10:275, read second-hand"
MICRO_AREA_UM2 = 2000.0
HEAT_C_PER_MW = 0.25

# The conservative end of each published range, µC/cm² per phase.
_DENSITY_UC_CM2 = {
    "Pt": 50.0,
    "PtIr": 50.0,
    "AIROF": 1_000.0,
    "SIROF": 1_000.0,
    "TiN": 1_000.0,
    "PEDOT": 15_000.0,
}


def area_cm2(electrode: Electrode) -> float | None:
    """Return the electrode's area in cm² (a disc's, from its diameter), or None if not stated."""
    if electrode.area_um2 is not None:
        return electrode.area_um2 * 1e-8
    if electrode.diameter_um is not None:
        return math.pi * (electrode.diameter_um / 2) ** 2 * 1e-8
    return None


def per_phase_uc(current_ua: float, width_us: float) -> float:
    """Return the charge per phase, µC."""
    return current_ua * width_us * 1e-6


def density_uc_cm2(charge_uc: float, area: float) -> float:
    """Return the charge density per phase, µC/cm²."""
    return charge_uc / area


def shannon_k(charge_uc: float, area: float) -> float:
    """Return k = log10(Q·D) = log10(Q²/A): Shannon 1992, log10 D = k − log10 Q."""
    return math.log10(charge_uc**2 / area)


def largest_current_ua(k: float, area: float, width_us: float) -> float:
    """Return the current at which a pulse reaches ``k``, µA: √(A·10^k) / width."""
    return math.sqrt(area * 10**k) / (width_us * 1e-6)


def density_limit(material: str) -> tuple[float | None, str]:
    """Return the published limit of a material (µC/cm² per phase), if any, and its source."""
    if material in _DENSITY_UC_CM2:
        return _DENSITY_UC_CM2[material], f"{material}: {COGAN}"
    return None, f"no published limit here for {material}"
