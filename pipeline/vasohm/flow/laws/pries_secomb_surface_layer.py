"""Apparent viscosity of blood in living microvessels with an explicit endothelial surface layer."""

from collections.abc import Mapping

import numpy as np

from vasohm.arrays import FloatArray
from vasohm.flow.laws.pries_in_vitro import relative_viscosity

# The same mesenteric networks and glass tubes as the law of 1994 rests on.
VALID_RADIUS_UM = (2.5, 989.0)
VALID_HEMATOCRIT = (0.08, 0.68)
CITATION = (
    "Pries AR, Secomb TW (2005) Microvascular blood viscosity in vivo and the endothelial surface layer. "
    "Am J Physiol Heart Circ Physiol 289:H2657-H2664, doi:10.1152/ajpheart.00297.2005"
)

WIDEST_LAYER_UM = 2.6
ONSET_UM = 2.4
PEAK_UM = 10.5
HALF_UM = 100.0
PEAK_HEIGHT_UM = 1.1
PEAK_DECAY_PER_UM = 0.03
PHYSICAL_PART = 0.6
HEMATOCRIT_SLOPE = 1.18


def layer_um(diameter_um: FloatArray, hematocrit: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Thickness of the layer as red cells meet it and as the flow meets it."""
    above = np.maximum(diameter_um - ONSET_UM, 0.0)
    base = WIDEST_LAYER_UM * above / (above + HALF_UM - ONSET_UM)
    rise = above / (PEAK_UM - ONSET_UM)
    decay = np.exp(-PEAK_DECAY_PER_UM * np.maximum(diameter_um - PEAK_UM, 0.0))
    peak = PEAK_HEIGHT_UM * np.where(diameter_um <= PEAK_UM, rise, decay)
    return base + PHYSICAL_PART * peak, base + peak * (1.0 + HEMATOCRIT_SLOPE * hematocrit)


def viscosity(
    radius_um: FloatArray, hematocrit: FloatArray, *, plasma_viscosity_mpa_s: float, parameters: Mapping[str, float]
) -> FloatArray:
    """Apparent viscosity in mPa·s, referred to the anatomical radius; kinked at 5.25 um. Takes no parameters."""
    del parameters
    diameter_um = 2.0 * radius_um
    physical_um, effective_um = layer_um(diameter_um, hematocrit)
    narrowing = diameter_um / (diameter_um - 2.0 * effective_um)
    return plasma_viscosity_mpa_s * relative_viscosity(diameter_um - 2.0 * physical_um, hematocrit) * narrowing**4
