"""The default segmenter: ridge lines in units of the picture's own noise, wide vessels first.

An oriented bank of elongated second differences (a matched filter in the sense of Chaudhuri et al., IEEE Trans Med
Imaging 1989;8:263, doi:10.1109/42.34715) on a pyramid; lines kept by summed excess; each line checked and its width
taken on its own averaged cross-profile.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray, freeze
from vasohm.image import bank
from vasohm.image.bank import ScaleResponse
from vasohm.image.prepare import PreparedImage
from vasohm.image.ribbons import BORDER_PX, bridge, measure_ribbons, paint
from vasohm.image.ridges import RidgePixels, Strength, connected, merge_scales, neighbours, ridge_lines, summed_excess

CITATION = "Chaudhuri S et al., IEEE Trans Med Imaging 1989;8:263-269, doi:10.1109/42.34715 (oriented matched filters)"

WIDE_SIGMA_PX = 4.0  # scales from here on are searched first, on a coarser grid
# Summed excess that noise alone exceeds over `length` px of line a megapixel: slope x ln(reference / length), of
# the fine scales at full resolution and of the wide ones at half; read from noise pictures put through this bank
# (white, blurred by 0.6 to 2 px, JPEG, speckle, Poisson). The references are six to nine times those read, because both
# groups give and because the kinds of noise differ: the promised length is then an upper bound
FINE_EXCESS = (6.4, 100000.0)
WIDE_EXCESS = (11.4, 25000.0)
# Of the noise at the second scale over that at the first, where it is above 1: smooth noise forms longer lines
SMOOTH_POWER = 0.8
LEAST_EXCESS = 2.0
LEAST_FALSE_PX = 0.01  # a megapixel: no finite threshold promises less
TEXTURE_SHARE = 0.004  # of the found length that the flipped picture may give before thresholds rise
TEXTURE_STEPS = (1.0, 1.25, 1.5, 1.75, 2.0, 2.5, 3.0)
SPARSE_SHARE = 0.3  # of the field must be away from vessels for the flipped picture to tell anything
AWAY_PX, AWAY_SIGMAS, AWAY_BLOCK_PX = 6.0, 3.0, 4  # how far the flanks of a vessel reach, and how finely that is drawn
LEAST_PIECE_PX = 8  # ridge pixels left of a line after its checks
LEAST_ALONE_PX = 20  # extent of a piece that touches no other: shorter ones are specks; where there is texture, longer
# In a strip, the mirror images beyond its long borders draw chance lines across it out; vessels run along it
STRIP_SHAPE, STRIP_WIDTHS = 4, 1.5
HOLE_PX = 12  # smaller holes in the mask are artefacts of thick junctions
BUNDLE_SIGMAS = 0.8  # a wide filter whose line is much narrower than itself has answered to a bundle of thin vessels
BLOB_SIGMAS = (
    2.2  # side lines lie at 1.8 sigma: what is wider than that has no sides there, it is a dark or bright field
)
CAP_SIGMAS = 2.0
PAINT_ROUND = 1.08  # half way between a slab, 1, and a projected cylinder, 2 / sqrt(3) of its width at half height
PAINT_BLUR2 = 1.1  # level px squared: what usual optics and the smoothing of the profiles add to a half width
PAINT_LEAST = 0.7  # of the measured width: below the blur no difference of squares can be trusted
CLEAR_FINE = 6.0  # noise units: from here on a fine scale's answer is no noise
NEAR_SIGMAS = 1.0
FINER_RATIO = 1.0
BLUR_HALF_WIDTHS = 1.1  # level px: half width at half height of the blur in a level, its own and the one added
SURE_SIGMA_PX = 2.8  # below it neighbouring scales answer so alike that the stronger says little about width
WIDEST_RATIO = 1.25  # half widths beyond this multiple of the largest radius asked for are not vessels
NARROWEST_RATIO = (
    0.6  # and below this share of the smallest: half-height widths of projected tubes are 0.87 of the lumen's
)
RIM_SHARE, LEAST_AT_RIM_PX = 0.5, 50  # a piece that lies more than so much at the border of the field must be so long
LEAST_AWAY_PX = 12  # or look like a vessel for so long before it reaches the border
ROOMY_BORDERS = 10  # in smaller pictures everything is near the border
WIDE_BALANCE = 0.7  # weaker side over stronger of a wide vessel: beside it the background is the same on both sides
LEAST_SHAPED = 0.38  # of the length of a piece: where less looks like a vessel, the rest was filled in between specks
# Of the thin vessels' median, and how it grows with width (a projected tube's: 1)
WIDE_CONTRAST, WIDE_CONTRAST_POWER = 0.4, 0.5
LEAST_LENGTH_RADII = 4.0  # a vessel is longer than it is wide
# What blocks of a large picture share, among their parameters
NOISE_RATIO, FINE_TEXTURE, WIDE_TEXTURE = "noise_ratio", "fine_texture", "wide_texture"
THIN_RADIUS, THIN_CONTRAST = "thin_radius_px", "thin_contrast"
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
    return _find(prepared, parameters)[0]


def learn_ridges(prepared: PreparedImage, parameters: Mapping[str, float]) -> Mapping[str, float]:
    """Read from one block of a large picture what its other blocks should share: noise, texture, thin vessels."""
    return _find(prepared, parameters)[1]


def _find(prepared: PreparedImage, parameters: Mapping[str, float]) -> tuple[BoolArray, Mapping[str, float]]:
    """Find vessels; what `parameters` does not know of the whole picture yet is read from this one, and returned."""
    even = prepared.signal / np.maximum(prepared.noise_sd, np.float32(1e-30))
    stack = bank.pyramid(even, bank.levels_for(parameters["radius_hi_px"], even.shape))
    responses = list(bank.respond(stack))
    false_px = parameters["false_alarms_per_mpx"]
    noise_ratio = parameters.get(NOISE_RATIO, float(np.median(responses[1].unit) / np.median(responses[0].unit)))
    smooth = max(1.0, noise_ratio) ** SMOOTH_POWER
    widths = (NARROWEST_RATIO * parameters["radius_lo_px"], WIDEST_RATIO * parameters["radius_hi_px"])
    field = Field.of(prepared.fov)
    fine = [r for r in responses if r.sigma_px <= WIDE_SIGMA_PX]
    wide = [r for r in responses if r.sigma_px >= WIDE_SIGMA_PX]
    limits = Limits(smooth * _least_excess(FINE_EXCESS, false_px), *widths, parameters.get(FINE_TEXTURE))
    thin_vessels = _find_group(merge_scales(fine), stack, field, limits, None)
    mask = _painted(even.shape, thin_vessels)
    told = {NOISE_RATIO: noise_ratio, FINE_TEXTURE: thin_vessels.texture, **thin_vessels.typical()}
    if len(wide) > 1:
        found = merge_scales(wide)
        seen = Seen(_fine_contrast(fine, found), {**told, **parameters})
        limits = Limits(_least_excess(WIDE_EXCESS, false_px), *widths, parameters.get(WIDE_TEXTURE))
        wide_vessels = _find_group(found, stack, field, limits, seen)
        mask |= _painted(even.shape, wide_vessels)
        told[WIDE_TEXTURE] = wide_vessels.texture
    mask &= prepared.fov
    mask = ndimage.binary_closing(mask, structure=np.ones((3, 3), dtype=bool)) & prepared.fov
    narrow, wide_px = sorted(mask.shape)
    across = STRIP_WIDTHS * narrow if wide_px > STRIP_SHAPE * narrow else 0.0
    return _without_small(mask, max(LEAST_ALONE_PX * thin_vessels.texture, across)), told


@dataclass(frozen=True, slots=True)
class Limits:
    """What is asked of a line: summed excess, half width, and how much more excess where the picture has texture."""

    excess: float
    smallest_px: float
    largest_px: float
    texture: float | None  # None: this picture is asked


@dataclass(frozen=True, slots=True, eq=False)
class Field:
    """Where vessels may be, and what is near its border; all (h, w) bool."""

    inside: BoolArray
    near_border: BoolArray  # of the field or of the picture: one flank is only a mirror image
    short_is_shade: BoolArray  # near the border, where that is a small part of the picture

    def __post_init__(self) -> None:
        freeze(self)

    @classmethod
    def of(cls, fov: BoolArray) -> "Field":
        """Find what is within BORDER_PX of the border."""
        near = ~ndimage.minimum_filter(fov, size=2 * BORDER_PX + 1, mode="constant", cval=0)
        return cls(fov, near, near if min(fov.shape) > ROOMY_BORDERS * BORDER_PX else np.zeros_like(near))


@dataclass(frozen=True, slots=True, eq=False)
class Vessels:
    """What a group of scales has found: places along vessels, in pixels of the picture."""

    x_px: FloatArray
    y_px: FloatArray
    radius_px: FloatArray
    contrast: FloatArray  # of the weaker side, in noise units
    texture: float  # how many times more was asked of a line because of the texture between the vessels

    def __post_init__(self) -> None:
        freeze(self)

    def typical(self) -> dict[str, float]:
        """Medians of radius and contrast; NaN where there is no vessel."""
        n = len(self.radius_px)
        radius, contrast = (float(np.median(v)) if n else np.nan for v in (self.radius_px, self.contrast))
        return {THIN_RADIUS: radius, THIN_CONTRAST: contrast}


@dataclass(frozen=True, slots=True, eq=False)
class Seen:
    """What the fine scales know when the wide ones are searched."""

    contrast: Float32Array  # greatest of fine scales, on the wide group's grid
    told: Mapping[str, float]  # of the whole picture


def _least_excess(noise: tuple[float, float], false_px: float) -> float:
    slope, reference = noise
    return max(LEAST_EXCESS, slope * float(np.log(reference / max(false_px, LEAST_FALSE_PX))))


def _fine_contrast(fine: Sequence[ScaleResponse], wide: Strength) -> Float32Array:
    """Greatest clear contrast that fine scales see in each pixel of the wide group's grid."""
    greatest = np.zeros(wide.bright.shape, np.float32)
    for response in fine:
        if response.level < wide.level:
            row, column = np.nonzero(response.bright >= CLEAR_FINE)
            step = 2 ** (wide.level - response.level)
            np.maximum.at(greatest, (row // step, column // step), response.contrast_at(row, column))
    return greatest


def _seen_finer(lines: RidgePixels, found: Strength, fine: Float32Array) -> BoolArray:
    """Pixels of wide lines beside which a finer scale sees more contrast: thin vessels that a wide filter blurs."""
    finer = np.zeros(len(lines.row), dtype=bool)
    for response in found.scales:
        these = lines.sigma_px == response.sigma_px
        if not these.any():
            continue
        factor = 2 ** (response.level - found.level)
        row = np.minimum((lines.row[these] + factor // 2) // factor, response.bright.shape[0] - 1)
        column = np.minimum((lines.column[these] + factor // 2) // factor, response.bright.shape[1] - 1)
        contrast = response.contrast_at(row, column)
        near = ndimage.maximum_filter(fine, size=2 * round(NEAR_SIGMAS * response.sigma_px / 2**found.level) + 1)
        finer[these] = near[lines.row[these], lines.column[these]] > FINER_RATIO * contrast
    return finer


def _texture_factor(found: Strength, lines: RidgePixels, fov: BoolArray, limit: float) -> float:
    """Raise the limit until the flipped picture, away from vessels, gives next to nothing.

    The flipped picture holds the texture but not the vessels: what is found there is false. Between crowded vessels
    there are true valleys, so this is asked only where most of the field is free.
    """
    excess = summed_excess(lines)
    away = fov & ~_beside(lines, excess[lines.line] >= limit, found.level, fov.shape)
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


def _beside(lines: RidgePixels, strong: BoolArray, level: int, shape: tuple[int, ...]) -> BoolArray:
    """Where the flanks of strong lines may lie, on the grid of `level`, to a block's width."""
    block = AWAY_BLOCK_PX
    reach = AWAY_PX + AWAY_SIGMAS * lines.sigma_px[strong] / 2**level
    small = (shape[0] // block + 1, shape[1] // block + 1)
    beside = paint(small, lines.x_px[strong] / block, lines.y_px[strong] / block, reach / block)
    return np.repeat(np.repeat(beside, block, axis=0), block, axis=1)[: shape[0], : shape[1]]


def _find_group(
    found: Strength,
    stack: list[Float32Array],
    field: Field,
    limits: Limits,
    seen: Seen | None,
) -> Vessels:
    """Ridge lines of one group of scales, checked on their own profiles."""
    factor = 2**found.level
    image = ndimage.gaussian_filter(stack[found.level], 0.7)
    lines = ridge_lines(found.bright, found, field.inside[::factor, ::factor])
    texture = limits.texture
    if texture is None:
        texture = _texture_factor(found, lines, field.inside[::factor, ::factor], limits.excess)
    lines = lines.keep(summed_excess(lines)[lines.line] >= texture * limits.excess)
    reach = REACH_SIGMAS * lines.sigma_px / factor + REACH_EXTRA_PX
    pairs = neighbours(image.shape, lines.row, lines.column)
    ribbon = measure_ribbons(image, _on_grid(lines, factor), pairs, reach)
    width = ribbon.half_width_px * factor
    sigma = np.maximum(lines.sigma_px, SURE_SIGMA_PX)
    clear = ribbon.is_clear
    if seen is not None:
        own = np.sqrt(np.maximum(width**2 - (BLUR_HALF_WIDTHS * factor) ** 2, 0))
        thin = _seen_finer(lines, found, seen.contrast) | (own < BUNDLE_SIGMAS * lines.sigma_px)
        clear = clear & ~thin & (ribbon.contrast >= _least_contrast(width, seen.told))
    shaped = ribbon.is_shaped & clear & (ribbon.balance >= (WIDE_BALANCE if seen else 0))
    good = shaped & (width >= limits.smallest_px) & (width <= np.minimum(limits.largest_px, BLOB_SIGMAS * sigma))
    near_border = field.near_border[::factor, ::factor][lines.row, lines.column]
    good, width = bridge(pairs, good, width, near_border, clear)
    at_rim = field.short_is_shade[::factor, ::factor][lines.row, lines.column]
    good &= _holds_together(pairs, good, (shaped, at_rim), width / factor)
    radius = np.minimum(_lumen_half_width(width, found.level), CAP_SIGMAS * sigma)
    return Vessels(ribbon.x_px[good] * factor, ribbon.y_px[good] * factor, radius[good], ribbon.contrast[good], texture)


def _least_contrast(width_px: FloatArray, told: Mapping[str, float]) -> FloatArray:
    """Contrast below which a wide line is texture: a wide vessel is no fainter than the thin ones of its picture."""
    if np.isnan(told[THIN_RADIUS]):
        return np.zeros(len(width_px))
    ratio = np.maximum(width_px / told[THIN_RADIUS], 1)
    return np.asarray(WIDE_CONTRAST * told[THIN_CONTRAST] * ratio**WIDE_CONTRAST_POWER)


def _holds_together(
    pairs: IntArray, good: BoolArray, looks: tuple[BoolArray, BoolArray], width: FloatArray
) -> BoolArray:
    """Pixels of pieces that are longer than wide, and look like a vessel along enough of their length.

    `looks` says where a pixel looks like a vessel, and where it lies at the rim of the field, whose shade and mirror
    image make short pieces.
    """
    shaped, at_rim = looks
    n_pieces, piece = connected(pairs[good[pairs].all(axis=1)], len(good))
    length = np.maximum(np.bincount(piece, weights=good, minlength=n_pieces), 1)
    mean_width = np.bincount(piece, weights=good * width, minlength=n_pieces) / length
    share = np.bincount(piece, weights=good & shaped, minlength=n_pieces) / length
    long = length >= np.maximum(LEAST_PIECE_PX, LEAST_LENGTH_RADII * mean_width)
    rim_share = np.bincount(piece, weights=good & at_rim, minlength=n_pieces) / length
    away = np.bincount(piece, weights=good & shaped & ~at_rim, minlength=n_pieces)
    shade = (rim_share > RIM_SHARE) & (length < LEAST_AT_RIM_PX) & (away < LEAST_AWAY_PX)
    return np.asarray((long & ~shade & (share >= LEAST_SHAPED))[piece])


def _painted(shape: tuple[int, ...], vessels: Vessels) -> BoolArray:
    return paint((shape[0], shape[1]), vessels.x_px, vessels.y_px, vessels.radius_px)


def _lumen_half_width(width_px: FloatArray, level: int) -> FloatArray:
    """Half width of the lumen from that of its profile at half height: the blur taken off, roundness put on."""
    blur2 = PAINT_BLUR2 * 4**level
    return PAINT_ROUND * np.sqrt(np.maximum(width_px**2 - blur2, PAINT_LEAST**2 * width_px**2))


def _on_grid(lines: RidgePixels, factor: int) -> RidgePixels:
    return RidgePixels(
        lines.row, lines.column, lines.x_px, lines.y_px, lines.normal_x, lines.normal_y, lines.sigma_px / factor,
        lines.excess, lines.line, lines.n_lines,
    )  # fmt: skip


def _without_small(mask: BoolArray, least_px: float) -> BoolArray:
    holes, count = ndimage.label(~mask)
    if count:
        size = np.bincount(holes.ravel())
        size[0] = HOLE_PX + 1
        mask = mask | (size[holes] <= HOLE_PX)
    pieces, _ = ndimage.label(mask, structure=np.ones((3, 3), dtype=bool))
    extent = [np.hypot(*(part.stop - part.start for part in box)) for box in ndimage.find_objects(pieces)]
    return np.asarray(np.array([0.0, *extent])[pieces] >= least_px, dtype=bool)
