"""Blood as a Newtonian fluid: one viscosity for all vessels."""

from collections.abc import Mapping

import numpy as np

from vasohm.arrays import FloatArray
from vasohm.errors import DomainError

VALID_RADIUS_UM = (0.0, np.inf)
VALID_HEMATOCRIT = (0.0, 0.75)
CITATION = "Newtonian fluid; its viscosity is chosen in the study"


def viscosity(
    radius_um: FloatArray, hematocrit: FloatArray, *, plasma_viscosity_mpa_s: float, parameters: Mapping[str, float]
) -> FloatArray:
    """Apparent viscosity in mPa·s: `parameters["viscosity_mpa_s"]` everywhere; plasma and hematocrit play no part."""
    del plasma_viscosity_mpa_s
    value = parameters.get("viscosity_mpa_s", np.nan)
    if not (np.isfinite(value) and value > 0):
        msg = f"law 'constant': viscosity_mpa_s is {value}; give a positive viscosity in mPa·s, such as 3.0."
        raise DomainError(msg)
    return np.full(np.broadcast_shapes(np.shape(radius_um), np.shape(hematocrit)), float(value))
