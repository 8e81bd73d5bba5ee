"""Apparent viscosity by radius and hematocrit, written from the published formulas."""

from dataclasses import dataclass

import numpy as np

from vasohm_synthetic.arrays import FloatArray

LAW_NAMES = ("constant", "pries-in-vivo")
REFERENCE_HEMATOCRIT = 0.45
THINNEST_DIAMETER_UM = 1.1  # the law of 1994 diverges here


@dataclass(frozen=True, slots=True)
class Blood:
    """Blood of a whole picture; `hematocrit` is the discharge hematocrit, the same everywhere."""

    law: str = "pries-in-vivo"
    hematocrit: float = 0.45
    plasma_viscosity_mpa_s: float = 1.2
    viscosity_mpa_s: float = 3.0  # of law "constant"


def blood_problems(blood: Blood) -> list[str]:
    """Say everything that is impossible about the blood; empty where nothing is."""
    checks = [
        (blood.law in LAW_NAMES, f"law {blood.law!r} is none of {LAW_NAMES}"),
        (0 <= blood.hematocrit <= 0.75, f"hematocrit {blood.hematocrit:g} is not within 0 and 0.75"),
        (
            blood.plasma_viscosity_mpa_s > 0,
            f"plasma_viscosity_mpa_s {blood.plasma_viscosity_mpa_s:g} is not positive",
        ),
        (blood.viscosity_mpa_s > 0, f"viscosity_mpa_s {blood.viscosity_mpa_s:g} is not positive"),
    ]
    return [problem for fine, problem in checks if not fine]


def viscosity(blood: Blood, radius_um: FloatArray) -> FloatArray:
    """Apparent viscosity in mPa s, elementwise.

    References
    ----------
    Pries, Secomb, Gessner, Sperandio, Gross & Gaehtgens, Circ Res 1994;75:904-915, doi:10.1161/01.RES.75.5.904.
    """
    if blood.law == "constant":
        return np.full_like(np.asarray(radius_um, float), blood.viscosity_mpa_s)
    return blood.plasma_viscosity_mpa_s * _relative_in_vivo(2.0 * np.asarray(radius_um, float), blood.hematocrit)


def _relative_in_vivo(diameter_um: FloatArray, hematocrit: float) -> FloatArray:
    """Viscosity over plasma's in living vessels; NaN where the diameter is at or below 1.1 um.

    The hematocrit's factor ((1-H)^C - 1) / ((1-0.45)^C - 1) is 0/0 where C = 0 (diameter 8.05 um): both powers are
    taken as exp(C ln(...)) - 1, and their quotient as that of the logarithms where C vanishes.
    """
    diameter = np.where(diameter_um > THINNEST_DIAMETER_UM, diameter_um, np.nan)
    fast = 1.0 / (1.0 + 1e-11 * diameter**12)
    exponent = (0.8 + np.exp(-0.075 * diameter)) * (fast - 1.0) + fast
    at_reference = 6.0 * np.exp(-0.085 * diameter) + 3.2 - 2.44 * np.exp(-0.06 * diameter**0.645)
    log_here, log_reference = np.log1p(-hematocrit), np.log1p(-REFERENCE_HEMATOCRIT)
    flat = np.abs(exponent) < 1e-12
    safe = np.where(flat, 1.0, exponent)
    ratio = np.where(flat, log_here / log_reference, np.expm1(safe * log_here) / np.expm1(safe * log_reference))
    wall = (diameter / (diameter - THINNEST_DIAMETER_UM)) ** 2
    relative: FloatArray = (1.0 + (at_reference - 1.0) * ratio * wall) * wall
    return relative
