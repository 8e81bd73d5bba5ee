"""The default segmenter: ridge lines in units of the picture's own noise, wide vessels first.

An oriented bank of elongated second differences (a matched filter in the sense of Chaudhuri et al., IEEE Trans Med
Imaging 1989;8:263, doi:10.1109/42.34715) on a pyramid; lines kept by summed excess; each line checked and its width
taken on its own averaged cross-profile.
"""

from collections.abc import Mapping

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array
from vasohm.image import bank
from vasohm.image.prepare import PreparedImage
from vasohm.image.ribbons import BORDER_PX, bridge, measure_ribbons, paint
from vasohm.image.ridges import RidgePixels, Strength, merge_scales, ridge_lines, summed_excess

CITATION = "Chaudhuri S et al., IEEE Trans Med Imaging 1989;8:263-269, doi:10.1109/42.34715 (oriented matched filters)"

WIDE_SIGMA_PX = 4.0  # scales from here on are searched first, on a coarser grid
# Summed excess that white noise reaches over a given length a megapixel, measured on noise pictures of 1 MP blurred by
# 0 to 2 px: excess = slope x ln(reference / length), within 30 % of the excess
EXCESS_SLOPE = 4.3
EXCESS_REFERENCE_PX = 5000.0
LEAST_EXCESS = 2.0
TEXTURE_SHARE = 0.04  # of the found length that the flipped picture may give before thresholds rise
TEXTURE_STEPS = (1.0, 1.25, 1.5, 1.75, 2.0, 2.5, 3.0)
SPARSE_SHARE = 0.5  # of the field must be away from vessels for the flipped picture to tell anything
AWAY_PX = 9
LEAST_PIECE_PX = 8  # ridge pixels left of a line after its checks
LEAST_ALONE_PX = 20  # extent of a piece that touches no other: shorter ones are specks of texture
HOLE_PX = 12  # smaller holes in the mask are artefacts of thick junctions
BUNDLE_SIGMAS = 0.8  # a wide filter whose line is much narrower than itself has answered to a bundle of thin vessels
BLOB_SIGMAS = (
    2.2  # side lines lie at 1.8 sigma: what is wider than that has no sides there, it is a dark or bright field
)
CAP_SIGMAS = 1.6
SURE_SIGMA_PX = 2.8  # below it neighbouring scales answer so alike that the stronger says little about width
WIDEST_RATIO = 1.25  # half widths beyond this multiple of the largest radius asked for are not vessels
NARROWEST_RATIO = (
    0.6  # and below this share of the smallest: half-height widths of projected tubes are 0.87 of the lumen's
)
LEAST_LENGTH_RADII = 4.0  # a vessel is longer than it is wide
REACH_SIGMAS = 3.0
REACH_EXTRA_PX = 3.0


def segment_ridges(prepared: PreparedImage, parameters: Mapping[str, float]) -> BoolArray:
    """Find vessels as ridges.

    Parameters
    ----------
    prepared : the prepared picture.
    parameters : `radius_lo_px`, `radius_hi_px` (vessel radii looked for) and `false_alarms_per_mpx` (length of false
        centreline, in pixels a megapixel, that noise alone may give).

    Returns
    -------
    (h, w) bool mask.
    """
    even = prepared.signal / np.maximum(prepared.noise_sd, np.float32(1e-30))
    levels = bank.levels_for(parameters["radius_hi_px"], even.shape)
    stack = bank.pyramid(even, levels)
    responses = list(bank.respond(stack))
    limit = LEAST_EXCESS
    if parameters["false_alarms_per_mpx"] > 0:
        limit = max(limit, EXCESS_SLOPE * np.log(EXCESS_REFERENCE_PX / parameters["false_alarms_per_mpx"]))
    fine = merge_scales([r for r in responses if r.sigma_px <= WIDE_SIGMA_PX])
    widths = (NARROWEST_RATIO * parameters["radius_lo_px"], WIDEST_RATIO * parameters["radius_hi_px"])
    border = ndimage.distance_transform_edt(np.pad(prepared.fov, 1))[1:-1, 1:-1].astype(np.float32)
    mask = np.zeros(even.shape, dtype=bool)
    wide = [r for r in responses if r.sigma_px >= WIDE_SIGMA_PX]
    if len(wide) > 1:
        mask |= _paint_group(merge_scales(wide), stack, border, (limit, *widths))
    mask |= _paint_group(fine, stack, border, (limit, *widths))
    mask &= prepared.fov
    mask = ndimage.binary_closing(mask, structure=np.ones((3, 3), dtype=bool)) & prepared.fov
    return _without_small(mask)


def _texture_factor(found: Strength, fov: BoolArray, limit: float) -> float:
    """Raise the limit until the flipped picture, away from vessels, gives next to nothing.

    The flipped picture holds the texture but not the vessels: what is found there is false. Between crowded vessels
    there are true valleys, so this is asked only where most of the field is free.
    """
    lines = ridge_lines(found.bright, found, fov)
    excess = summed_excess(lines)
    vessels = np.zeros(fov.shape, dtype=bool)
    strong = excess[lines.line] >= limit
    vessels[lines.row[strong], lines.column[strong]] = True
    away = fov & (ndimage.distance_transform_edt(~vessels) > AWAY_PX) if vessels.any() else fov
    free_share = away.sum() / fov.sum()
    if free_share < SPARSE_SHARE:
        return 1.0
    flipped = ridge_lines(found.dark, found, away)
    false_excess = summed_excess(flipped)
    for factor in TEXTURE_STEPS:
        length = np.sum(excess[lines.line] >= factor * limit)
        false_length = np.sum(false_excess[flipped.line] >= factor * limit) / free_share
        if false_length <= TEXTURE_SHARE * length:
            return factor
    return TEXTURE_STEPS[-1]


def _paint_group(
    found: Strength, stack: list[Float32Array], border: Float32Array, limits: tuple[float, float, float]
) -> BoolArray:
    """Ridge lines of one group of scales, checked and painted at full resolution.

    `border` (h, w) is the distance to the border of the field, 0 outside; `limits` are the least summed excess of a
    line and the smallest and largest half width of a vessel.
    """
    limit, smallest_px, largest_px = limits
    factor = 2**found.level
    image = ndimage.gaussian_filter(stack[found.level], 0.7)
    lines = ridge_lines(found.bright, found, (border > 0)[::factor, ::factor])
    limit *= _texture_factor(found, border[::factor, ::factor] > 0, limit / factor**0.5) / factor**0.5
    lines = lines.keep(summed_excess(lines)[lines.line] >= limit)
    reach = REACH_SIGMAS * lines.sigma_px / factor + REACH_EXTRA_PX
    ribbon = measure_ribbons(image, _on_grid(lines, factor), reach)
    width = ribbon.half_width_px * factor
    sigma = np.maximum(lines.sigma_px, SURE_SIGMA_PX)
    good = (
        ribbon.is_shaped
        & ribbon.is_clear
        & (width >= smallest_px)
        & (width <= largest_px)
        & (width <= BLOB_SIGMAS * sigma)
    )
    if found.level:
        good &= width >= BUNDLE_SIGMAS * lines.sigma_px
    near_border = (border <= BORDER_PX)[::factor, ::factor][lines.row, lines.column]
    good, width = bridge(lines, good, width, near_border, ribbon.is_clear)
    length = factor * np.bincount(lines.line, weights=good, minlength=lines.n_lines)
    mean_width = np.bincount(lines.line, weights=good * width, minlength=lines.n_lines) * factor / np.maximum(length, 1)
    good &= (length >= np.maximum(LEAST_PIECE_PX, LEAST_LENGTH_RADII * mean_width))[lines.line]
    radius = np.minimum(width, CAP_SIGMAS * sigma)[good]
    kept = lines.keep(good)
    return paint(border.shape, kept.x_px * factor, kept.y_px * factor, radius)


def _on_grid(lines: RidgePixels, factor: int) -> RidgePixels:
    return RidgePixels(
        lines.row, lines.column, lines.x_px, lines.y_px, lines.normal_x, lines.normal_y, lines.sigma_px / factor,
        lines.excess, lines.line, lines.n_lines,
    )  # fmt: skip


def _without_small(mask: BoolArray) -> BoolArray:
    holes, count = ndimage.label(~mask)
    if count:
        size = np.bincount(holes.ravel())
        size[0] = HOLE_PX + 1
        mask = mask | (size[holes] <= HOLE_PX)
    pieces, _ = ndimage.label(mask, structure=np.ones((3, 3), dtype=bool))
    extent = [np.hypot(*(part.stop - part.start for part in box)) for box in ndimage.find_objects(pieces)]
    return np.asarray(np.array([0.0, *extent])[pieces] >= LEAST_ALONE_PX, dtype=bool)
