"""Checks of ridge lines on their own averaged cross-profile, and the ribbons that become the vessel mask."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage, sparse

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray, freeze
from vasohm.image.ridges import RidgePixels

AVERAGING_PASSES = 12  # of a three-point mean along the line: a window of about +-5 px
WEAKER_SIDE = 0.5  # of the stronger: below it is the edge of something, not a vessel
HOLLOW = 0.8  # of the contrast missing in the middle: two vessels side by side, not one
LEAST_FILL = 0.55  # mean height inside the edges over the peak: 1 for a slab, 0.79 for a cylinder, little for a bundle
HALF_WIDTH_RATIO = 1.2  # the wider half may not exceed this x the narrower: a neighbour stands in the way
# From a quarter to three quarters of its height a projected cylinder rises over 0.35 of its half-height half width, a
# Gaussian shadow over 0.77; blur adds a length of its own
SOFT_RISE, RISE_PX = 0.45, 1.5
LEAST_HALF_WIDTH_PX = 0.7
CLEAR_CONTRAST = 1.2  # in noise units: four times the noise of an averaged profile's height
GAP_SHARE = 0.3  # of the height on both sides along the line: less is a gap between two vessels
GAP_LEAST = 4.0  # noise units: a fainter line is not seen well enough to tell its gaps
GAP_PASSES, GAP_STEPS, GAP_CORE_PX = 3, 14, 1
TAIL_SHARE = (
    0.3  # of the strongest contrast nearby: less, and not clear, is a lobe of the filter beside or past a vessel
)
TAIL_SIGMAS = 4.0  # the elongated kernels, 3 sigma wide along, cast lobes this far
NEAR_BLOCK_PX = 4
PAINT_CELLS = 300_000  # looked at together
BRIDGE_STEPS = 8  # pixels of a line whose shape a crossing or branching spoils are kept between good ones
BORDER_PX = 12  # and so they are on the way to the border of the field, where one flank is only a mirror image
MOST_SHIFT = 0.5  # of the half width, from the ridge of the filter's answer to the middle between the edges


@dataclass(frozen=True, slots=True, eq=False)
class Ribbon:
    """Middle and half width at half height on the averaged profile of each ridge pixel, and what it looks like."""

    x_px: FloatArray  # half way between both edges
    y_px: FloatArray
    half_width_px: FloatArray
    contrast: FloatArray  # of the weaker side, in units of the picture
    balance: FloatArray  # weaker side over stronger
    is_shaped: BoolArray  # two-sided and not hollow
    is_clear: BoolArray  # above the noise, or not small beside what is near

    def __post_init__(self) -> None:
        freeze(self)


def measure_ribbons(image: Float32Array, lines: RidgePixels, pairs: IntArray, reach_px: FloatArray) -> Ribbon:
    """Measure each ridge pixel on cross-profiles averaged along its line.

    Parameters
    ----------
    image : (h, w) the picture in which the lines were found, on the same grid, in units of its noise.
    lines : ridge pixels.
    pairs : (n_pairs, 2) those that touch.
    reach_px : how far each profile looks to either side, in pixels of this grid.
    """
    n = len(lines.row)
    if n == 0:
        nothing, none = np.zeros(0), np.zeros(0, dtype=bool)
        return Ribbon(nothing, nothing, nothing, nothing, nothing, none, none)
    half = int(np.ceil(reach_px.max()))
    sides_here, sides = _averaged_sides(image, lines, pairs, half)
    offsets = np.arange(half + 1, dtype=np.float32)
    visible = offsets[None, :] <= np.maximum(np.tile(reach_px, 2), 3)[:, None]
    lowest_at = np.where(visible, sides, np.inf).argmin(axis=1)
    base = sides[np.arange(2 * n), lowest_at]
    core = np.maximum(1, np.tile(lines.sigma_px, 2) * 0.75)[:, None]
    inner = np.where(offsets[None, :] <= core, sides, -np.inf).max(axis=1)
    peak = np.tile(np.maximum(inner[:n], inner[n:]), 2)
    middle = np.minimum(sides[:n, 0], sides[n:, 0])
    left, right = _half_width(sides, lowest_at, (peak + base) / 2).reshape(2, n)
    rise = sum(
        sign * _half_width(sides, lowest_at, base + share * (peak - base)).reshape(2, n).sum(axis=0) / 2
        for sign, share in ((1, 0.25), (-1, 0.75))
    )
    half_width = np.minimum((left + right) / 2, HALF_WIDTH_RATIO * np.minimum(left, right) + 0.5)
    height = (peak - base).reshape(2, n)
    weaker, stronger = height.min(axis=0), height.max(axis=0)
    balance = weaker / np.maximum(stronger, 1e-12)
    hollow = (peak[:n] - middle) / np.maximum(stronger, 1e-12)
    inside = offsets[None, :] <= np.tile(half_width, 2)[:, None]
    fill = np.where(inside, sides - base[:, None], 0).sum(axis=1) / inside.sum(axis=1) / np.maximum(peak - base, 1e-12)
    shaped = fill.reshape(2, n).min(axis=0) >= LEAST_FILL
    shaped &= (balance >= WEAKER_SIDE) & (hollow <= HOLLOW) & (rise <= SOFT_RISE * half_width + RISE_PX)
    clear = (
        ~_in_gap(sides_here, base, pairs, n)
        & (weaker > 0)
        & ((weaker >= CLEAR_CONTRAST) | (weaker >= TAIL_SHARE * _strongest_near(image.shape, lines, weaker)))
    )
    shift = np.clip((left - right) / 2, -MOST_SHIFT * half_width, MOST_SHIFT * half_width)
    x, y = lines.x_px + shift * lines.normal_x, lines.y_px + shift * lines.normal_y
    return Ribbon(x, y, np.maximum(half_width, LEAST_HALF_WIDTH_PX), weaker, balance, shaped, clear)


def _strongest_near(shape: tuple[int, ...], lines: RidgePixels, contrast: FloatArray) -> FloatArray:
    """Largest contrast of any line within reach of each pixel's own filter, to a block's width."""
    row, column = lines.row // NEAR_BLOCK_PX, lines.column // NEAR_BLOCK_PX
    grid = np.zeros([n // NEAR_BLOCK_PX + 1 for n in shape], np.float32)
    np.maximum.at(grid, (row, column), contrast)
    strongest = np.zeros(len(contrast))
    for sigma in np.unique(lines.sigma_px):
        these = lines.sigma_px == sigma
        near = ndimage.maximum_filter(grid, size=2 * round(TAIL_SIGMAS * sigma / NEAR_BLOCK_PX) + 1, mode="constant")
        strongest[these] = near[row[these], column[these]]
    return strongest


def _in_gap(sides: Float32Array, base: FloatArray, pairs: IntArray, n: int) -> BoolArray:
    """Pixels where a line has next to no height of its own, but has it on both sides along the line.

    An elongated filter joins two vessels that end near each other. Height is held against its closing along the line
    (the smaller of what is reached on either side), so that a thin branch beside a thick vessel is no gap.
    """
    height = (sides[:, : GAP_CORE_PX + 1].mean(axis=1) - base).reshape(2, n).mean(axis=0)
    closed = height.copy()
    for reach in (np.maximum, np.minimum):
        for _ in range(GAP_STEPS):
            best = reach(closed[pairs[:, 0]], closed[pairs[:, 1]])
            reach.at(closed, pairs[:, 0], best)
            reach.at(closed, pairs[:, 1], best)
    return (height < GAP_SHARE * closed) & (closed > GAP_LEAST)


def bridge(
    pairs: IntArray, good: BoolArray, half_width_px: FloatArray, near_border: BoolArray, clear: BoolArray
) -> tuple[BoolArray, FloatArray]:
    """Keep clear pixels between good ones of the same line, and from a good one to the border of the field.

    Returns
    -------
    The larger choice, and half widths in which the added pixels take those of their good neighbours.
    """
    links = np.concatenate((pairs, pairs[:, ::-1]))
    reached, width = good.copy(), np.where(good, half_width_px, 0.0)
    for _ in range(max(BRIDGE_STEPS, BORDER_PX)):
        step = links[reached[links[:, 0]] & ~reached[links[:, 1]] & clear[links[:, 1]]]
        n = len(width)
        count = np.bincount(step[:, 1], minlength=n)
        taken = count > 0
        width[taken] = (np.bincount(step[:, 1], width[step[:, 0]], n)[taken]) / count[taken]
        reached |= taken
    lost = reached & ~near_border
    for _ in range(BRIDGE_STEPS):
        open_ends = np.bincount(links[:, 0], lost[links[:, 1]] | good[links[:, 1]], len(good)) >= 2
        lost &= good | open_ends
    return good | lost | (reached & near_border), width


def _averaged_sides(
    image: Float32Array, lines: RidgePixels, pairs: IntArray, half: int
) -> tuple[Float32Array, Float32Array]:
    """Profiles (2 n, half + 1) outwards from the ridge, averaged a little and much.

    First come all on the normal's side, then all on the other. Neighbours along a line are averaged side by side:
    where their normals point opposite ways, the left side of one belongs to the right side of the other.
    """
    n = len(lines.row)
    x, y = np.tile(lines.x_px, 2), np.tile(lines.y_px, 2)
    outward_x, outward_y = (np.concatenate((part, -part)) for part in (lines.normal_x, lines.normal_y))
    sides = np.empty((2 * n, half + 1), np.float32)
    for step in range(half + 1):  # one distance at a time: coordinates of all would be the largest arrays of the image
        at = [y + step * outward_y, x + step * outward_x]
        sides[:, step] = ndimage.map_coordinates(image, at, order=1, mode="mirror", output=np.float32)
    i, j = pairs[:, 0], pairs[:, 1]
    same = lines.normal_x[i] * lines.normal_x[j] + lines.normal_y[i] * lines.normal_y[j] >= 0
    first = np.concatenate((i, i + n))
    second = np.concatenate((np.where(same, j, j + n), np.where(same, j + n, j)))
    links = sparse.coo_array((np.ones(len(first), np.float32), (first, second)), shape=(2 * n, 2 * n)).tocsr()
    links = links + links.T + sparse.eye_array(2 * n, format="csr", dtype=np.float32)
    links = sparse.diags_array((1 / links.sum(axis=1)).astype(np.float32)) @ links
    for _ in range(GAP_PASSES):
        sides = links @ sides
    here = sides
    for _ in range(AVERAGING_PASSES - GAP_PASSES):
        sides = links @ sides
    return here, sides


def _half_width(sides: FloatArray, lowest_at: IntArray, level: FloatArray) -> FloatArray:
    """Distance at which a profile, walked inwards from its lowest place, first rises to the level."""
    offsets = np.arange(sides.shape[1])
    high = (sides >= level[:, None]) & (offsets[None, :] <= lowest_at[:, None])
    last = sides.shape[1] - 1 - high[:, ::-1].argmax(axis=1)
    found = high.any(axis=1) & (last < lowest_at)
    last = np.where(found, last, 0)
    rows = np.arange(len(sides))
    inner, outer = sides[rows, last], sides[rows, np.minimum(last + 1, sides.shape[1] - 1)]
    fall = np.maximum(inner - outer, 1e-12)
    return np.where(found, last + np.clip((inner - level) / fall, 0, 1), LEAST_HALF_WIDTH_PX)


def paint(shape: tuple[int, int], x_px: FloatArray, y_px: FloatArray, radius_px: FloatArray) -> BoolArray:
    """Union of discs with sub-pixel centres."""
    mask = np.zeros(shape, dtype=bool)
    size = np.ceil(radius_px).astype(np.int64)
    for reach in np.unique(size):
        span = np.arange(-reach - 1, reach + 2)
        every = np.nonzero(size == reach)[0]
        at_once = max(1, PAINT_CELLS // len(span) ** 2)
        for these in (every[start : start + at_once] for start in range(0, len(every), at_once)):
            row = np.rint(y_px[these]).astype(np.int64)[:, None, None] + span[None, :, None]
            column = np.rint(x_px[these]).astype(np.int64)[:, None, None] + span[None, None, :]
            distance2 = (row - y_px[these, None, None]) ** 2 + (column - x_px[these, None, None]) ** 2
            inside = distance2 <= radius_px[these, None, None] ** 2
            inside &= (row >= 0) & (row < shape[0]) & (column >= 0) & (column < shape[1])
            where = np.nonzero(inside)
            mask[row[where[0], where[1], 0], column[where[0], 0, where[2]]] = True
    return mask
