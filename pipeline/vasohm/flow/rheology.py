"""What a viscosity law is, and the laws by name."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

from vasohm.arrays import FloatArray


@dataclass(frozen=True, slots=True)
class BloodSettings:
    """Blood as the study file describes it; `hematocrit` is the discharge hematocrit entering the network."""

    law: str
    hematocrit: float
    plasma_viscosity_mpa_s: float
    viscosity_mpa_s: float  # of law "constant"
    parameters: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class ViscosityLaw:
    """A published relation of apparent viscosity to radius and hematocrit.

    `viscosity(radius_um, hematocrit, *, plasma_viscosity_mpa_s, parameters)` is elementwise and returns mPa·s.
    """

    viscosity: Callable[..., FloatArray]
    valid_radius_um: tuple[float, float]
    valid_hematocrit: tuple[float, float]
    citation: str  # authors, year, DOI, equation
