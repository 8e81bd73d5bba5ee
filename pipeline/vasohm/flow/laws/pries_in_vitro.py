"""Apparent viscosity of blood in glass tubes."""

from collections.abc import Mapping

import numpy as np

from vasohm.arrays import FloatArray

VALID_RADIUS_UM = (1.65, 989.0)  # the data base held tubes of 3.3 to 1978 um
VALID_HEMATOCRIT = (0.0, 0.9)
CITATION = (
    "Pries AR, Neuhaus D, Gaehtgens P (1992) Blood viscosity in tube flow: dependence on diameter and hematocrit. "
    "Am J Physiol 263:H1770-H1778, doi:10.1152/ajpheart.1992.263.6.H1770"
)

REFERENCE_HEMATOCRIT = 0.45  # at which the dependence on diameter was fitted


def wide_tube_viscosity_45(diameter_um: FloatArray) -> FloatArray:
    """Return the part of the relative viscosity at hematocrit 0.45 that glass tubes and living vessels share."""
    return 3.2 - 2.44 * np.exp(-0.06 * diameter_um**0.645)


def hematocrit_factor(diameter_um: FloatArray, hematocrit: FloatArray) -> FloatArray:
    """((1 - H)^C - 1) / ((1 - 0.45)^C - 1) with the shape C of the diameter.

    C is 0 at D = 8.05 um, where the ratio is 0/0 as printed; its limit is ln(1 - H) / ln(1 - 0.45).
    """
    fading = 1.0 / (1.0 + 10.0 * (diameter_um / 10.0) ** 12)  # 1e-11 D^12, kept in floating range
    shape = (0.8 + np.exp(-0.075 * diameter_um)) * (fading - 1.0) + fading
    ln_plasma, ln_reference = np.log1p(-hematocrit), np.log1p(-REFERENCE_HEMATOCRIT)
    flat = np.abs(shape) < np.finfo(float).tiny / np.finfo(float).eps
    safe = np.where(flat, 1.0, shape)
    return np.where(flat, ln_plasma / ln_reference, np.expm1(safe * ln_plasma) / np.expm1(safe * ln_reference))


def relative_viscosity(diameter_um: FloatArray, hematocrit: FloatArray) -> FloatArray:
    """Viscosity over that of plasma in a glass tube."""
    viscosity_45 = 220.0 * np.exp(-1.3 * diameter_um) + wide_tube_viscosity_45(diameter_um)
    return 1.0 + (viscosity_45 - 1.0) * hematocrit_factor(diameter_um, hematocrit)


def viscosity(
    radius_um: FloatArray, hematocrit: FloatArray, *, plasma_viscosity_mpa_s: float, parameters: Mapping[str, float]
) -> FloatArray:
    """Apparent viscosity in mPa·s of blood in a glass tube; takes no parameters."""
    del parameters
    return plasma_viscosity_mpa_s * relative_viscosity(2.0 * radius_um, hematocrit)
