"""What a mask holds and the picture does not show: bridges over dark ground, and edges of bright or dark fields."""

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray
from vasohm.image.prepare import PreparedImage
from vasohm.network.groups import median_by
from vasohm.network.paths import owner, position, smooth, tangents
from vasohm.network.tracing import JUNCTION, Trace

LEAST_SHARE = 0.4  # of its path's typical strength: below, no vessel is seen; at a true end contrast falls to half
LEAST_SIDE = 0.3  # of the stronger side's contrast: a vessel has two sides, an edge has one
LEAST_GAP_PX, LEAST_EDGE_PX = 3, 6  # shorter runs cannot be told from noise, or lie at the foot of a branch
ALONG_SIGMA_PX = 1.5  # noise is averaged over about so many pixels of the path
PATH_SIGMA_PX = 2.0  # takes the pixel grid's steps out of the direction
BESIDE_RADII, BESIDE_PX = 2.0, 4.0  # the background of each side is looked for up to here
AXIS_RADII = 0.5  # the skeleton may lie so far off the axis
SAMPLES = 8  # of each side
TOUCHING_PX = 8.0  # bridges between vessels that touch are at most so much longer than both radii
VALLEY_SHARE = 0.3  # of the lower of both axes; on drawn beds true short vessels keep 0.45, false bridges 0.3 at most
VALLEY_SMOOTH_PX = 0.7
VALLEY_NOISE = 0.33  # of a pixel's noise is left after that smoothing and a mean over three pixels side by side
VALLEY_SIGMAS = 2.5  # a valley must be that sure not to be a vessel of half the strength
VALLEY_SAMPLES = 49


def unseen_pixels(traced: Trace, distance: Float32Array, prepared: PreparedImage) -> BoolArray:
    """Tell which pixels of the paths (n_points,) lie where the picture shows no vessel.

    Parameters
    ----------
    traced : paths of the mask's skeleton.
    distance : (h, w) distance to the mask's outline.
    prepared : the picture.

    Notes
    -----
    Dark ground: both the signal and its excess over the background of either side are low; over a bright disc alone a
    vessel has a low signal, beside another vessel a low excess. Edge: the excess over one side is far below that over
    the other, outside junctions and away from the border of the field, where there is no second side.
    """
    if not len(traced.row):
        return np.zeros(0, dtype=bool)
    axis, weaker, stronger = _strengths(traced, distance, prepared)
    path = owner(traced.offsets)
    own = _outside_junctions(traced, distance)
    is_dark = np.ones(len(path), dtype=bool)
    for strength in (axis, weaker):
        typical = median_by(path[own], strength[own], len(traced.offsets) - 1)[path]
        is_dark &= strength < LEAST_SHARE * typical
    is_edge = own & (weaker < LEAST_SIDE * stronger)
    valley = _valleys(traced, distance, prepared)[path]
    return _long_runs(is_dark, path, LEAST_GAP_PX) | _long_runs(is_edge, path, LEAST_EDGE_PX) | valley


def _strengths(
    traced: Trace, distance: Float32Array, prepared: PreparedImage
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Signal on the axis, and its excess over the background of the weaker and of the stronger side, at each pixel."""
    radius = distance[traced.row, traced.column].astype(np.float64)
    signal = ndimage.gaussian_filter(prepared.signal, 1.0, mode="nearest")
    x, y = (smooth(v.astype(np.float64), traced.offsets, PATH_SIGMA_PX) for v in (traced.column, traced.row))
    tx, ty = tangents(x, y, traced.offsets)

    def across(off_axis: FloatArray) -> list[FloatArray]:
        return [y[:, None] + off_axis * tx[:, None], x[:, None] - off_axis * ty[:, None]]

    def seen(at: list[FloatArray]) -> FloatArray:
        return np.asarray(ndimage.map_coordinates(signal, at, order=1, mode="nearest", output=np.float64))

    axis = seen(across(radius[:, None] * AXIS_RADII * np.array([-1.0, 0.0, 1.0]))).max(axis=1)
    reach = (BESIDE_RADII * radius + BESIDE_PX)[:, None] * np.arange(1, SAMPLES + 1) / SAMPLES
    excess = []
    for side in (reach, -reach):
        at = across(side)
        inside = ndimage.map_coordinates(prepared.fov, at, order=0, mode="constant", cval=False).all(axis=1)
        excess.append(np.where(inside, axis - seen(at).min(axis=1), np.nan))
    weaker, stronger = np.fmin(*excess), np.fmax(*excess)
    axis, weaker, stronger = (
        smooth(np.where(np.isfinite(v), v, axis), traced.offsets, ALONG_SIGMA_PX) for v in (axis, weaker, stronger)
    )
    return axis, weaker, stronger


def _outside_junctions(traced: Trace, distance: Float32Array) -> BoolArray:
    """Points of a path that are not inside the wider vessel at its junction; all points where none is left."""
    path, k = owner(traced.offsets), position(traced.offsets)
    count = np.diff(traced.offsets)
    row, column = np.rint(traced.node_row).astype(np.int64), np.rint(traced.node_column).astype(np.int64)
    reach = np.where(traced.node_kind == JUNCTION, distance[row, column] + 1, 0)
    outside = (k >= reach[traced.node_a][path]) & (count[path] - 1 - k >= reach[traced.node_b][path])
    none = np.bincount(path, outside, len(count)) == 0
    return np.asarray(outside | none[path])


def _long_runs(chosen: BoolArray, path: IntArray, least: int) -> BoolArray:
    """Keep runs of at least so many pixels of one path."""
    starts = np.r_[True, (chosen[1:] != chosen[:-1]) | (path[1:] != path[:-1])]
    run = np.cumsum(starts) - 1
    return np.asarray(chosen & (np.bincount(run)[run] >= least))


def _valleys(traced: Trace, distance: Float32Array, prepared: PreparedImage) -> BoolArray:
    """Short paths between two junctions (n_paths,) over a valley: vessels that touch side by side.

    The signal on the straight way from axis to axis is held against the lower of both axes.
    """
    row, column = np.rint(traced.node_row).astype(np.int64), np.rint(traced.node_column).astype(np.int64)
    radius = distance[row, column].astype(np.float64)
    a, b = traced.node_a, traced.node_b
    down, right = traced.node_row[b] - traced.node_row[a], traced.node_column[b] - traced.node_column[a]
    gap = np.hypot(down, right)
    both = (traced.node_kind[a] == JUNCTION) & (traced.node_kind[b] == JUNCTION) & (a != b)
    short = np.nonzero(both & (gap <= radius[a] + radius[b] + TOUCHING_PX))[0]
    valley = np.zeros(len(a), dtype=bool)
    a, b, gap = a[short], b[short], np.maximum(gap[short], 1e-9)[:, None]
    down, right = down[short][:, None] / gap, right[short][:, None] / gap
    before, behind = np.minimum(radius[a][:, None], gap), np.minimum(radius[b][:, None], gap)
    s = -before + np.linspace(0, 1, VALLEY_SAMPLES) * (before + gap + behind)
    signal = ndimage.gaussian_filter(prepared.signal, VALLEY_SMOOTH_PX, mode="nearest")
    profile = np.zeros(s.shape)
    for aside in (-1.0, 0.0, 1.0):
        y = traced.node_row[a][:, None] + s * down + aside * right
        x = traced.node_column[a][:, None] + s * right - aside * down
        profile += ndimage.map_coordinates(signal, [y, x], order=1, mode="nearest", output=np.float64) / 3
    rows, lowest = np.arange(len(short)), np.where((s >= 0) & (s <= gap), profile, np.inf).argmin(axis=1)
    summit_a = np.maximum.accumulate(profile, axis=1)[rows, lowest]
    summit_b = np.maximum.accumulate(profile[:, ::-1], axis=1)[:, ::-1][rows, lowest]
    lower = np.minimum(summit_a, summit_b)
    doubt = VALLEY_SIGMAS * VALLEY_NOISE * prepared.noise_sd[row[a], column[a]]
    valley[short] = profile[rows, lowest] < np.minimum(VALLEY_SHARE * lower, 0.5 * lower - doubt)
    return valley
