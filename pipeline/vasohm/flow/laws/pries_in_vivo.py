"""Apparent viscosity of blood in living microvessels."""

from collections.abc import Mapping

import numpy as np

from vasohm.arrays import FloatArray
from vasohm.flow.laws.pries_in_vitro import hematocrit_factor, wide_tube_viscosity_45

# Fitted to mesenteric vessels from 5 um on; above 60 um the law is in effect that of glass tubes, with their upper end.
VALID_RADIUS_UM = (2.5, 989.0)
VALID_HEMATOCRIT = (0.08, 0.68)
CITATION = (
    "Pries AR, Secomb TW, Gessner T, Sperandio MB, Gross JF, Gaehtgens P (1994) Resistance to blood flow in "
    "microvessels in vivo. Circ Res 75:904-915, doi:10.1161/01.RES.75.5.904"
)

EXCLUDED_UM = 1.1  # diameter at which the law has its pole


def viscosity(
    radius_um: FloatArray, hematocrit: FloatArray, *, plasma_viscosity_mpa_s: float, parameters: Mapping[str, float]
) -> FloatArray:
    """Apparent viscosity in mPa·s; infinite up to the law's pole at a radius of 0.55 um. Takes no parameters.

    It does not go to that of plasma without red cells: the term (D / (D - 1.1))^2 stands for the vessel's wall.
    """
    del parameters
    diameter_um = 2.0 * radius_um
    open_um = np.maximum(diameter_um - EXCLUDED_UM, 0.0)
    viscosity_45 = 6.0 * np.exp(-0.085 * diameter_um) + wide_tube_viscosity_45(diameter_um)
    wall = np.square(np.divide(diameter_um, open_um, out=np.full(np.shape(diameter_um), np.inf), where=open_um > 0))
    cells = (viscosity_45 - 1.0) * hematocrit_factor(diameter_um, hematocrit)
    return plasma_viscosity_mpa_s * wall * (1.0 + cells * np.where(cells == 0, 0.0, wall))
