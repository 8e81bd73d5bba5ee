"""Apparent viscosity from a core of cells within a marginal zone of plasma, both chosen in the study."""

from collections.abc import Mapping

import numpy as np

from vasohm.arrays import FloatArray
from vasohm.errors import DomainError

VALID_RADIUS_UM = (0.0, np.inf)  # a model, not a fit: its range is that of the parameters chosen
VALID_HEMATOCRIT = (0.0, 0.75)
CITATION = (
    "Haynes RH (1960) Physical basis of the dependence of blood viscosity on tube radius. "
    "Am J Physiol 198:1193-1200, doi:10.1152/ajplegacy.1960.198.6.1193"
)


def viscosity(
    radius_um: FloatArray, hematocrit: FloatArray, *, plasma_viscosity_mpa_s: float, parameters: Mapping[str, float]
) -> FloatArray:
    """Apparent viscosity in mPa·s with `parameters` `core_viscosity_mpa_s` and `marginal_zone_um`.

    Both belong to one hematocrit, so hematocrit itself plays no part. Where the zone is wider than the tube there is
    no core left and the tube holds plasma alone.
    """
    core_mpa_s = parameters.get("core_viscosity_mpa_s", np.nan)
    zone_um = parameters.get("marginal_zone_um", np.nan)
    if not (0 < core_mpa_s < np.inf and 0 <= zone_um < np.inf):
        msg = (
            f"law 'haynes-marginal-zone': core_viscosity_mpa_s is {core_mpa_s}, marginal_zone_um is {zone_um}; "
            "give a positive viscosity and a width of 0 or more."
        )
        raise DomainError(msg)
    core_share = np.maximum(1.0 - zone_um / radius_um, 0.0) ** 4
    value = plasma_viscosity_mpa_s / (1.0 - core_share * (1.0 - plasma_viscosity_mpa_s / core_mpa_s))
    return np.broadcast_to(value, np.broadcast_shapes(np.shape(radius_um), np.shape(hematocrit)))
