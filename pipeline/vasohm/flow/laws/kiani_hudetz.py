"""Apparent viscosity from a core of cells, a marginal layer of plasma and a least vessel that cells can pass."""

from collections.abc import Mapping

import numpy as np

from vasohm.arrays import FloatArray

VALID_RADIUS_UM = (1.35, 250.0)
VALID_HEMATOCRIT = (0.05, 0.60)
CITATION = (
    "Kiani MF, Hudetz AG (1991) A semi-empirical model of apparent blood viscosity as a function of vessel diameter "
    "and discharge hematocrit. Biorheology 28:65-73, doi:10.3233/BIR-1991-281-207"
)

LEAST_DIAMETER_UM = 2.7


def viscosity(
    radius_um: FloatArray, hematocrit: FloatArray, *, plasma_viscosity_mpa_s: float, parameters: Mapping[str, float]
) -> FloatArray:
    """Apparent viscosity in mPa·s; infinite up to a radius of 1.35 um. Takes no parameters.

    Where the marginal layer is wider than the tube there is no core left and the tube holds plasma alone.
    """
    del parameters
    diameter_um = 2.0 * radius_um
    layer_um = 2.03 - 2.0 * hematocrit
    core_mpa_s = np.exp(0.48 + 2.35 * hematocrit)
    core_share = np.maximum(1.0 - 2.0 * layer_um / diameter_um, 0.0) ** 4
    cells_pass = np.maximum(1.0 - (LEAST_DIAMETER_UM / diameter_um) ** 4, 0.0)
    passage = np.divide(1.0, cells_pass, out=np.full(np.shape(cells_pass), np.inf), where=cells_pass > 0)
    return plasma_viscosity_mpa_s / (1.0 - (1.0 - plasma_viscosity_mpa_s / core_mpa_s) * core_share) * passage
