"""How blood moves in each segment, and whether the flow there can be the fully developed one of Poiseuille's law."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.flow.rheology import BloodSettings
from vasohm.units import M_PER_UM, MM_PER_M, PA_S_PER_MPA_S, S_PER_MIN

CREEPING_ENTRANCE = 0.619  # diameters, of Durst et al. 2005: what even the slowest flow needs to settle
INERTIAL_ENTRANCE = 0.0567  # diameters per Reynolds number
ENTRANCE_POWER = 1.6
LARGEST_REYNOLDS = 1.0  # up to it inertia is no larger than friction, in bends and branchings too
LARGEST_WOMERSLEY = 1.0  # up to it each moment of a beat is like steady flow: Womersley, J Physiol 1955;127:553


@dataclass(frozen=True, slots=True, eq=False)
class Motion:
    """Blood in motion, by segment (n_segments,); NaN where a thing is not known."""

    velocity_mm_s: FloatArray  # mean over the cross-section, never negative
    transit_s: FloatArray  # NaN where nothing flows
    wall_shear_rate_per_s: FloatArray
    wall_shear_pa: FloatArray
    reynolds: FloatArray
    womersley: FloatArray
    flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


def describe_motion(
    flow_m3_s: FloatArray,
    tube: tuple[FloatArray, FloatArray, FloatArray],
    blood: BloodSettings,
    flow_is_known: BoolArray,
) -> Motion:
    """Velocity, shear and dimensionless numbers in each segment, and flags where the flow cannot be fully developed.

    Parameters
    ----------
    flow_m3_s : (n_segments,) array
        NaN where it is not solved.
    tube : three (n_segments,) arrays
        Length and hydraulic radius in micrometres, apparent viscosity in mPa·s.
    blood : BloodSettings
        Density, and the heart rate where it was told.
    flow_is_known : (n_segments,) bool array
        Whether flow has its true size; where pressures are merely assumed, a Reynolds number would tell nothing.

    Returns
    -------
    Motion

    Notes
    -----
    V = Q / (π r²), wall shear rate 4 V / r and wall shear stress μ times that, Re = ρ V 2 r / μ and α = r (2 π f ρ /
    μ)^½. Flow settles within ((0.619)^1.6 + (0.0567 Re)^1.6)^(1/1.6) diameters of an end; a segment shorter than twice
    that is flagged as never reaching Poiseuille's profile.

    References
    ----------
    Durst F, Ray S, Ünsal B, Bayoumi OA (2005) The development lengths of laminar pipe and channel flows. J Fluids Eng
    127:1154-1160, doi:10.1115/1.2063088.
    """
    length_um, radius_um, viscosity_mpa_s = tube
    radius_m, viscosity = radius_um * M_PER_UM, viscosity_mpa_s * PA_S_PER_MPA_S
    velocity = np.abs(flow_m3_s) / (np.pi * radius_m**2)
    shear_rate = 4.0 * velocity / radius_m
    reynolds = np.where(flow_is_known, 2.0 * blood.density_kg_m3 * velocity * radius_m / viscosity, np.nan)
    beats_per_s = np.nan if blood.heart_rate_per_min is None else blood.heart_rate_per_min / S_PER_MIN
    womersley = radius_m * np.sqrt(2.0 * np.pi * beats_per_s * blood.density_kg_m3 / viscosity)
    inertial = INERTIAL_ENTRANCE * np.nan_to_num(reynolds)
    entrance_um = (
        2.0 * radius_um * (CREEPING_ENTRANCE**ENTRANCE_POWER + inertial**ENTRANCE_POWER) ** (1.0 / ENTRANCE_POWER)
    )
    flags = np.where(length_um < 2.0 * entrance_um, int(Flag.UNDEVELOPED), 0)
    flags |= np.where(reynolds > LARGEST_REYNOLDS, int(Flag.INERTIAL), 0)
    flags |= np.where(womersley > LARGEST_WOMERSLEY, int(Flag.PULSATILE), 0)
    moves = velocity > 0
    return Motion(
        velocity_mm_s=velocity * MM_PER_M,
        transit_s=np.divide(length_um * M_PER_UM, velocity, out=np.full(velocity.shape, np.nan), where=moves),
        wall_shear_rate_per_s=shear_rate,
        wall_shear_pa=viscosity * shear_rate,
        reynolds=reynolds,
        womersley=womersley,
        flags=flags,
    )


def tube_hematocrit(diameter_um: FloatArray, discharge_hematocrit: FloatArray) -> FloatArray:
    """Share of the volume within a vessel that cells fill at a time: less than what flows out, as cells are faster.

    Parameters
    ----------
    diameter_um : array
        Of a vessel with human cells.
    discharge_hematocrit : array
        Fraction.

    Returns
    -------
    array
        Never above the discharge hematocrit; below a diameter of 2.58 um, where the formula would give more, equal.

    References
    ----------
    Pries AR, Secomb TW, Gaehtgens P, Gross JF (1990) Blood flow in microvascular networks: experiments and simulation.
    Circ Res 67:826-834, doi:10.1161/01.RES.67.4.826.
    """
    slow = 1.0 + 1.7 * np.exp(-0.415 * diameter_um) - 0.6 * np.exp(-0.011 * diameter_um)
    ratio = discharge_hematocrit + (1.0 - discharge_hematocrit) * np.minimum(slow, 1.0)
    return np.asarray(discharge_hematocrit * ratio)
