"""From the radius along a segment to its resistance, its hydraulic radius and the doubt of both: arrays only."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.errors import DomainError
from vasohm.flags import Flag
from vasohm.flow.rheology import Blood
from vasohm.network.along import arc_shares
from vasohm.network.groups import mean_by, sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph
from vasohm.uncertainty import COVERAGE_FACTOR_95, quadrature
from vasohm.units import M_PER_UM, PA_S_PER_MPA_S

STEEP_SLOPE = 0.09  # a cone of 5° half angle: exact creeping flow is 1 % off the integral over r^-4
# ln of the largest correction for noise: that of r^-4 where r is known to 25 %, from where a point is unresolved.
# The expansion it comes from is asymptotic, and beyond this a single point would outweigh its whole segment.
LARGEST_LN_CORRECTION = 0.5 * 4.0**2 * 0.25**2
STEEPEST_EXPONENT = -20.0  # of R in r; published laws reach -8 at a radius of 1.25 um and diverge at their pole
LEAST_LENGTH_PX = 1e-3  # stands for the length of a segment whose nodes coincide, so that it joins and does not cut
LN_STEP = 1e-6  # of a one-sided difference in ln r: exponents to about 1e-6
LN_ROUNDING = 1e-12  # of ln R, at which the search for the hydraulic radius ends
SEARCH_TURNS = 100  # bisection alone narrows any bracket to rounding in fewer


def segment_resistance(length_um: ArrayLike, radius_um: ArrayLike, viscosity_mpa_s: ArrayLike) -> FloatArray:
    """Poiseuille resistance of a vessel segment.

    Parameters
    ----------
    length_um : array_like
        Arc length in micrometres.
    radius_um : array_like
        Lumen radius in micrometres: one number for a uniform tube, or an array with the radius at equally spaced
        points along its last axis, the first and the last at the segment's ends.
    viscosity_mpa_s : array_like
        Apparent viscosity in mPa·s: one number, or an array in the shape of `radius_um`.

    Returns
    -------
    array
        Resistance in Pa·s/m³; without the last axis of `radius_um`, broadcast against `length_um`.

    Raises
    ------
    DomainError
        A length, radius or viscosity that is not positive and finite, or a viscosity of another shape.

    Notes
    -----
    R = (8 / π) ∫ μ(s) r(s)⁻⁴ ds. Between two points radius and viscosity are taken to be linear and the integral is
    exact; for any other smooth profile the error falls with the square of the spacing. The formula holds for laminar,
    fully developed flow and wall slopes up to about 0.09 (1 % off there).

    References
    ----------
    Sutera SP, Skalak R (1993) The history of Poiseuille's law. Annu Rev Fluid Mech 25:1-20,
    doi:10.1146/annurev.fl.25.010193.000245, eq. 1.
    """
    length, radius = np.asarray(length_um, dtype=np.float64), np.asarray(radius_um, dtype=np.float64)
    viscosity = np.asarray(viscosity_mpa_s, dtype=np.float64)
    for name, value in (("length_um", length), ("radius_um", radius), ("viscosity_mpa_s", viscosity)):
        bad = np.flatnonzero(~(np.isfinite(value) & (value > 0)))
        if bad.size:
            msg = f"{name} is {value.flat[bad[0]]} at position {bad[0]}; it must be positive and finite."
            raise DomainError(msg)
    if radius.ndim and viscosity.ndim and viscosity.shape != radius.shape:
        msg = f"viscosity_mpa_s has shape {viscosity.shape}, radius_um {radius.shape}; give one number or equal shapes."
        raise DomainError(msg)
    if radius.ndim and radius.shape[-1] == 0:
        msg = "radius_um has no points along its last axis; give at least one."
        raise DomainError(msg)
    mean = _mean_of_viscosity_over_radius4(radius, viscosity)
    resistance: FloatArray = np.asarray(_in_si(length * mean))[()]
    return resistance


def _mean_of_viscosity_over_radius4(radius: FloatArray, viscosity: FloatArray) -> FloatArray:
    if radius.ndim == 0 or radius.shape[-1] == 1:
        uniform = np.asarray(viscosity / radius**4)
        return uniform[..., 0] if radius.ndim else uniform
    a, b = radius[..., :-1], radius[..., 1:]
    mu_a, mu_b = (viscosity[..., :-1], viscosity[..., 1:]) if viscosity.ndim else (viscosity, viscosity)
    frusta = mu_a * (a + 2.0 * b) / (a**3 * b**2) + mu_b * (2.0 * a + b) / (a**2 * b**3)
    return np.asarray(frusta.mean(axis=-1) / 6.0)


def _in_si(length_viscosity_over_radius4: FloatArray) -> FloatArray:
    """Turn an integral of μ r⁻⁴ in mPa·s/µm³ into a resistance in Pa·s/m³."""
    return 8.0 / np.pi * PA_S_PER_MPA_S / M_PER_UM**3 * length_viscosity_over_radius4


@dataclass(frozen=True, slots=True, eq=False)
class SegmentResistances:
    """What each segment resists, and how far that is known; NaN where a segment has no resistance.

    `ln_shared` holds one column a cause that all segments have in common: the change of ln R for one standard
    uncertainty of it. The causes are those of `MeasuredGraph.shared`, then the pixel size, the hematocrit and the
    viscosity of plasma.
    """

    hematocrit: FloatArray  # (n_segments,)
    resistance_pa_s_m3: FloatArray
    ln_random_se: FloatArray
    ln_shared: FloatArray  # (n_segments, n_causes + 3)
    radius_hydraulic_um: FloatArray
    radius_hydraulic_random_se_um: FloatArray
    radius_hydraulic_shared_se_um: FloatArray
    viscosity_mpa_s: FloatArray  # at the hydraulic radius
    flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


def measure_resistance(
    measured: MeasuredGraph, blood: Blood, hematocrit: FloatArray, radius_factor: FloatArray
) -> SegmentResistances:
    """Resistance of every segment: R = (8 / π) ∫ μ(r, H) r⁻⁴ ds over its points, by the trapezium rule.

    Parameters
    ----------
    measured : MeasuredGraph
        Radii along the segments with their uncertainty.
    blood : Blood
        A viscosity law with its constants.
    hematocrit : (n_segments,) array
        Discharge hematocrit of each segment.
    radius_factor : (n_segments,) array
        Factor on all radii of a segment; 1 leaves them as measured.

    Returns
    -------
    SegmentResistances

    Notes
    -----
    With p = d ln(μ r⁻⁴) / d ln r at a point, v the variance of its ln r and V that of ln R, the noise shifts each
    point's μ r⁻⁴ by the factor exp(± p² v / 2) and the sum's median by exp(∓ V / 2); both are taken out with the sign
    that `measured.noise_sign` states, each bounded by `LARGEST_LN_CORRECTION`. A lognormal radius gives 1 + 10 v for
    p = -4 when its mean is held and 1 + 8 v when its median is held, as here. V comes from the covariance along the
    segment with the gradient d ln R / d ln r of each point, and the shared causes and the pixel size (d ln R / d ln
    pixel size = 1 + mean p c, c being `measured.column`: a plasma layer does not grow with the pixel) and the
    hematocrit and plasma (means of d ln μ / d H and d ln μ / d ln of plasma's) follow to first order (JCGM 100:2008,
    eq. 13).

    A radius or a viscosity that is not positive and finite leaves its segment without resistance.
    """
    length_um = np.maximum(measured.length_um, LEAST_LENGTH_PX * measured.pixel_size_um)
    mean = _integrate(measured, blood, hematocrit, radius_factor)
    radius_um = _hydraulic_radius(blood, hematocrit, mean)
    # R/L depends on the hydraulic radius with the exponent of r there, so its doubt is that of R/L over the exponent;
    # of the hematocrit it takes only what the viscosity at that radius does not.
    viscosity = blood.viscosity(radius_um, hematocrit)
    per_exponent = radius_um / np.abs(local_exponent(blood, radius_um, hematocrit, viscosity))
    of_viscosity = [
        change(radius_um, hematocrit, viscosity)
        for change in (blood.ln_change_with_hematocrit, blood.ln_change_with_plasma)
    ]
    of_length = np.zeros(mean.ln_causes.shape)
    of_length[:, -3] = np.nan_to_num(measured.pixel_size_rel_se)
    of_radius = np.column_stack([mean.ln_causes[:, :-2], mean.ln_causes[:, -2:] - np.stack(of_viscosity, axis=1)])
    length_var = np.square(measured.length_random_se_um / length_um)
    flags = np.where(blood.outside_range(radius_um, hematocrit), int(Flag.LAW_RANGE), 0)
    flags |= np.where(_steep_wall(measured, radius_factor), int(Flag.STEEP_WALL), 0)
    unknown = np.where(mean.defined, 0.0, np.nan)
    return SegmentResistances(
        hematocrit=np.array(hematocrit, dtype=np.float64),
        resistance_pa_s_m3=_in_si(length_um * np.exp(mean.ln_mean)) + unknown,
        ln_random_se=np.sqrt(mean.ln_variance + length_var) + unknown,
        ln_shared=mean.ln_causes + of_length + unknown[:, None],
        radius_hydraulic_um=radius_um + unknown,
        radius_hydraulic_random_se_um=per_exponent * np.sqrt(mean.ln_variance) + unknown,
        radius_hydraulic_shared_se_um=per_exponent * quadrature(*of_radius.T) + unknown,
        viscosity_mpa_s=viscosity + unknown,
        flags=np.where(mean.defined, flags, int(Flag.LAW_RANGE)),
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Mean:
    """The mean of μ r⁻⁴ (mPa·s/µm⁴) over each segment, and how it moves."""

    defined: BoolArray  # (n_segments,)
    ln_mean: FloatArray
    ln_variance: FloatArray
    ln_causes: FloatArray  # (n_segments, n_causes + 3) its change for one standard uncertainty of each shared cause
    ln_radius_range: tuple[FloatArray, FloatArray, FloatArray]  # least, mean, most


def _integrate(measured: MeasuredGraph, blood: Blood, hematocrit: FloatArray, radius_factor: FloatArray) -> _Mean:
    segment, n = owner(measured.graph.offsets), measured.graph.n_segments
    share, cells = arc_shares(measured), hematocrit[segment]
    radius = measured.radius_um * radius_factor[segment]
    usable = np.isfinite(radius) & (radius > 0)
    radius = np.where(usable, radius, 1.0)
    viscosity = blood.viscosity(radius, cells)
    usable &= np.isfinite(viscosity)
    exponent = np.where(usable, local_exponent(blood, radius, cells, viscosity), 0.0)
    viscosity = np.where(usable, viscosity, 1.0)
    variance = np.nan_to_num(np.square(measured.ln_radius_random_se))
    correction = np.minimum(0.5 * exponent**2 * variance, LARGEST_LN_CORRECTION)
    part = share * viscosity * radius**-4 * np.exp(measured.noise_sign * correction)
    mean = sum_by(segment, part, n)
    defined = (sum_by(segment, ~usable * 1.0, n) == 0) & (mean > 0)
    mean = np.where(defined, mean, 1.0)
    gradient = part * exponent / mean[segment]
    ln_variance = np.maximum(measured.covariance.segment_variance(gradient), 0.0)
    median_shift = np.minimum(0.5 * np.nan_to_num(ln_variance), LARGEST_LN_CORRECTION)
    least, most = np.full(n, np.inf), np.full(n, -np.inf)
    ln_radius = np.log(radius)
    np.minimum.at(least, segment, ln_radius)
    np.maximum.at(most, segment, ln_radius)
    pixel_size = measured.column * np.nan_to_num(measured.pixel_size_rel_se)
    by_point = [gradient * cause for cause in (*measured.shared.T, pixel_size)]
    changes = (blood.ln_change_with_hematocrit, blood.ln_change_with_plasma)
    by_point += [part / mean[segment] * change(radius, cells, viscosity) for change in changes]
    return _Mean(
        defined=defined,
        ln_mean=np.log(mean) - measured.noise_sign * median_shift,
        ln_variance=ln_variance,
        ln_causes=np.stack([sum_by(segment, moved, n) for moved in by_point], axis=1),
        ln_radius_range=(least, mean_by(segment, ln_radius, share, n), most),
    )


def local_exponent(
    blood: Blood, radius_um: FloatArray, hematocrit: FloatArray, viscosity_mpa_s: FloatArray
) -> FloatArray:
    """Return d ln(μ r⁻⁴) / d ln r, at least `STEEPEST_EXPONENT`; `viscosity_mpa_s` is μ at the given radii."""
    wider = blood.viscosity(radius_um * (1.0 + LN_STEP), hematocrit)
    finite = np.isfinite(viscosity_mpa_s)
    ratio = np.divide(wider, viscosity_mpa_s, out=np.ones(wider.shape), where=finite)
    slope = np.log(ratio) / np.log1p(LN_STEP) - 4.0
    return np.maximum(np.where(finite, slope, STEEPEST_EXPONENT), STEEPEST_EXPONENT)


def _hydraulic_radius(blood: Blood, hematocrit: FloatArray, mean: _Mean) -> FloatArray:
    """Radius whose own μ r⁻⁴ is the segment's mean: a secant search kept inside a bracket, for all segments at once.

    The resistance of every law falls with the radius, so the radius lies between the segment's least and most; the
    correction for noise moves it by less than `LARGEST_LN_CORRECTION`.
    """
    least, start, most = mean.ln_radius_range
    low = np.where(mean.defined, least - LARGEST_LN_CORRECTION, 0.0)
    high = np.where(mean.defined, most + LARGEST_LN_CORRECTION, 0.0)
    ln_radius = np.where(mean.defined, start, 0.0)
    slope = np.full(ln_radius.shape, -4.0)
    previous, previous_excess = ln_radius, np.zeros(ln_radius.shape)
    for turn in range(SEARCH_TURNS):
        excess = np.log(blood.viscosity(np.exp(ln_radius), hematocrit)) - 4.0 * ln_radius - mean.ln_mean
        excess = np.where(mean.defined, excess, 0.0)
        if np.all(np.abs(excess) < LN_ROUNDING):
            break
        low, high = np.where(excess > 0, ln_radius, low), np.where(excess > 0, high, ln_radius)
        moved = (ln_radius != previous) & np.isfinite(excess) & np.isfinite(previous_excess) & (turn > 0)
        with np.errstate(invalid="ignore"):  # both infinite: not `moved`, then
            np.divide(excess - previous_excess, ln_radius - previous, out=slope, where=moved)
        step = ln_radius - excess / np.minimum(slope, -LN_STEP)
        inside = (step > low) & (step < high)
        previous, previous_excess = ln_radius, excess
        ln_radius = np.where(np.abs(excess) < LN_ROUNDING, ln_radius, np.where(inside, step, 0.5 * (low + high)))
    return np.exp(ln_radius)


def _steep_wall(measured: MeasuredGraph, radius_factor: FloatArray) -> BoolArray:
    """Whether the line through a segment's radii is steeper than local Poiseuille flow allows, beyond its own doubt."""
    segment, n = owner(measured.graph.offsets), measured.graph.n_segments
    share = arc_shares(measured)
    offset = measured.s_um - mean_by(segment, measured.s_um, share, n)[segment]
    spread = sum_by(segment, share * offset**2, n)
    lever = share * offset / np.where(spread > 0, spread, np.inf)[segment]
    radius = measured.radius_um * radius_factor[segment]
    slope = sum_by(segment, lever * radius, n)
    slope_se = np.sqrt(np.maximum(measured.covariance.segment_variance(lever * radius), 0.0))
    return np.asarray(np.abs(slope) - COVERAGE_FACTOR_95 * slope_se > STEEP_SLOPE)
