"""How one tube dims or lights a small cell of the picture: exact means over the cell's width."""

import numpy as np

from vasohm_synthetic.arrays import FloatArray
from vasohm_synthetic.optics import Optics

# Six Gauss-Legendre nodes in the angle phi (x = r sin phi), where chord and its exponential are smooth: the mean of
# a unit chord is right to 1e-6 even when the cell holds the whole tube.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(6)


def density(chord_px: FloatArray, gain: float, optics: Optics) -> FloatArray:
    """Profile before blur, by the length of the light's way through the lumen."""
    strength = optics.contrast * gain
    if optics.profile == "slab":
        return np.full_like(chord_px, strength)
    if optics.profile == "cylinder":
        return strength * chord_px / (2.0 * optics.reference_radius_px)
    return -strength * np.expm1(-optics.absorption_per_px * chord_px)


def loses_light(optics: Optics) -> bool:
    """Whether cells are averaged as lost light 1 - exp(-P) and not as P itself."""
    return optics.polarity == "dark" and optics.blur_in == "light"


def smear_variance(optics: Optics) -> float:
    """Variance in square pixels that cells take over from the blur, so that the fine grid does not alias.

    Two points half a cell apart have no share at the grid's own frequency, and a variance of cell^2 / 16.
    """
    variance = (0.25 / optics.supersample) ** 2
    return variance if optics.blur_px**2 > variance else 0.0


def cell_mean(
    distance_px: FloatArray, radius_px: FloatArray, cosine: FloatArray, optics: Optics, gain: float
) -> FloatArray:
    """Mean over square cells of what a tube does to the light: P, or the lost light 1 - exp(-P).

    Seen along the axis a square of edge h is a box of width h max(|cos|, |sin|), averaged exactly, blurred by one of
    width h min(|cos|, |sin|), for which two points of the same variance stand. They also carry `smear_variance` of
    the blur.

    Parameters
    ----------
    distance_px : FloatArray
        (n,) distance of the cells' centres from the axis.
    radius_px : FloatArray
        (n,) lumen radius of the tube there.
    cosine : FloatArray
        (n,) cosine of the axis's angle with the rows of cells.
    """
    cell_px = 1.0 / optics.supersample
    sine = np.sqrt(np.maximum(1.0 - cosine**2, 0.0))
    width = cell_px * np.maximum(np.abs(cosine), sine)
    box_variance = (cell_px * np.minimum(np.abs(cosine), sine)) ** 2 / 12.0
    offset = np.sqrt(box_variance + smear_variance(optics))
    mean = 0.5 * (
        _strip_mean(distance_px - offset, radius_px, width, optics, gain)
        + _strip_mean(distance_px + offset, radius_px, width, optics, gain)
    )
    if optics.reflex > 0:
        stripe = np.exp(-0.5 * (distance_px / (optics.reflex_width * radius_px)) ** 2)
        mean *= 1.0 - optics.reflex * stripe * (radius_px >= optics.reflex_radius_px)
    return mean


def _strip_mean(
    distance_px: FloatArray, radius_px: FloatArray, width_px: FloatArray, optics: Optics, gain: float
) -> FloatArray:
    low = np.arcsin(np.clip((distance_px - 0.5 * width_px) / radius_px, -1.0, 1.0))
    high = np.arcsin(np.clip((distance_px + 0.5 * width_px) / radius_px, -1.0, 1.0))
    middle, half = 0.5 * (high + low), 0.5 * (high - low)
    total = np.zeros_like(distance_px)
    for node, weight in zip(_NODES, _WEIGHTS, strict=True):
        cosine = np.cos(middle + node * half)
        value = density(2.0 * radius_px * cosine, gain, optics)
        if loses_light(optics):
            value = -np.expm1(-value)
        total += weight * value * cosine
    mean: FloatArray = total * half * radius_px / width_px
    return mean


def central_density(radius_px: FloatArray, gain: float, optics: Optics) -> FloatArray:
    """Profile on the axis, before blur and without reflex, (n,)."""
    return density(2.0 * radius_px, gain, optics)
