"""Bridges that a mask throws between vessels: there the picture itself shows background."""

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray
from vasohm.network.groups import median_by
from vasohm.network.paths import owner, position, smooth, tangents
from vasohm.network.tracing import JUNCTION, Trace

LEAST_SHARE = 0.4  # of its path's typical strength: below, no vessel is seen; contrast falls to half at a true end
ALONG_SIGMA_PX = 1.5  # noise is averaged over about so many pixels of the path
PATH_SIGMA_PX = 2.0  # takes the pixel grid's steps out of the direction
LEAST_GAP_PX = 3  # a gap narrower than the averaging cannot be told from noise
BESIDE_RADII, BESIDE_PX = 2.0, 4.0  # the background of each side is looked for up to here
AXIS_RADII = 0.5  # the skeleton may lie so far off the axis
SAMPLES = 8  # of each side
VALLEY_SHARE = 0.3
VALLEY_NOISE = 0.33
VALLEY_SIGMAS = 2.5
VALLEY_SAMPLES = 49
TOUCHING_PX = 8.0


def unlit_pixels(traced: Trace, distance: Float32Array, signal: Float32Array, noise_sd: Float32Array) -> BoolArray:
    """Tell which pixels of the paths (n_points,) lie where no vessel is seen, though one is on both of their sides.

    Parameters
    ----------
    traced : paths of the mask's skeleton.
    distance : (h, w) distance to the mask's outline.
    signal : (h, w) vessels positive.

    Notes
    -----
    Both the signal itself and its excess over the background of either side must be low: over a bright disc a vessel
    has a low signal, beside another vessel a low excess.
    """
    if not len(traced.row):
        return np.zeros(0, dtype=bool)
    radius = distance[traced.row, traced.column].astype(np.float64)
    axis, excess = _strengths(traced, radius, ndimage.gaussian_filter(signal, 1.0, mode="nearest"))
    path = owner(traced.offsets)
    dim = np.ones(len(path), dtype=bool)
    own = _outside_junctions(traced, distance)
    for strength in (axis, excess):
        typical = median_by(path[own], strength[own], len(traced.offsets) - 1)[path]
        dim &= smooth(strength, traced.offsets, ALONG_SIGMA_PX) < LEAST_SHARE * typical
    return (
        _long_runs(dim, path)
        | _valleys(traced, distance, ndimage.gaussian_filter(signal, 0.7, mode="nearest"), noise_sd)[path]
    )


def _outside_junctions(traced: Trace, distance: Float32Array) -> BoolArray:
    """Points of a path that are not inside the wider vessel at its junction; all points where none is left."""
    path, k = owner(traced.offsets), position(traced.offsets)
    count = np.diff(traced.offsets)
    row, column = np.rint(traced.node_row).astype(np.int64), np.rint(traced.node_column).astype(np.int64)
    reach = np.where(traced.node_kind == JUNCTION, distance[row, column] + 1, 0)
    outside = (k >= reach[traced.node_a][path]) & (count[path] - 1 - k >= reach[traced.node_b][path])
    none = np.bincount(path, outside, len(count)) == 0
    return np.asarray(outside | none[path])


def _valleys(traced: Trace, distance: Float32Array, signal: Float32Array, noise_sd: Float32Array) -> BoolArray:
    """Short paths between two junctions (n_paths,) over a valley: vessels that touch side by side.

    The signal on the straight way from axis to axis is held against the lower of both axes.
    """
    row, column = np.rint(traced.node_row).astype(np.int64), np.rint(traced.node_column).astype(np.int64)
    radius = distance[row, column].astype(np.float64)
    a, b = traced.node_a, traced.node_b
    down, right = traced.node_row[b] - traced.node_row[a], traced.node_column[b] - traced.node_column[a]
    gap = np.hypot(down, right)
    sd = VALLEY_NOISE * noise_sd[row[a], column[a]]
    both = (traced.node_kind[a] == JUNCTION) & (traced.node_kind[b] == JUNCTION) & (a != b)
    short = np.nonzero(both & (gap <= radius[a] + radius[b] + TOUCHING_PX))[0]
    if not len(short):
        return np.zeros(len(a), dtype=bool)
    a, b, gap = a[short], b[short], np.maximum(gap[short], 1e-9)
    uy, ux = (down[short] / gap)[:, None], (right[short] / gap)[:, None]
    before, behind = np.minimum(radius[a], gap), np.minimum(radius[b], gap)
    s = -before[:, None] + np.linspace(0, 1, VALLEY_SAMPLES) * (before + gap + behind)[:, None]
    profile = np.zeros(s.shape)
    for aside in (-1.0, 0.0, 1.0):
        y = traced.node_row[a][:, None] + s * uy + aside * ux
        x = traced.node_column[a][:, None] + s * ux - aside * uy
        profile += ndimage.map_coordinates(signal, [y, x], order=1, mode="nearest", output=np.float64) / 3
    rows = np.arange(len(short))
    lowest = np.where((s >= 0) & (s <= gap[:, None]), profile, np.inf).argmin(axis=1)
    left, right_ = np.maximum.accumulate(profile, axis=1), np.maximum.accumulate(profile[:, ::-1], axis=1)[:, ::-1]
    lower = np.minimum(left[rows, lowest], right_[rows, lowest])
    sure = np.minimum(VALLEY_SHARE * lower, 0.5 * lower - VALLEY_SIGMAS * sd[short])
    valley = np.zeros(len(traced.node_a), dtype=bool)
    valley[short] = profile[rows, lowest] < sure
    return valley


def _strengths(traced: Trace, radius: FloatArray, signal: Float32Array) -> tuple[FloatArray, FloatArray]:
    """Signal on the axis, and its excess over the higher of both backgrounds, at each pixel of the paths."""
    x, y = (smooth(v.astype(np.float64), traced.offsets, PATH_SIGMA_PX) for v in (traced.column, traced.row))
    tx, ty = tangents(x, y, traced.offsets)

    def across(distance: FloatArray) -> FloatArray:
        at = [y[:, None] + distance * tx[:, None], x[:, None] - distance * ty[:, None]]
        return np.asarray(ndimage.map_coordinates(signal, at, order=1, mode="nearest", output=np.float64))

    axis = across(radius[:, None] * AXIS_RADII * np.array([-1.0, 0.0, 1.0])).max(axis=1)
    reach = (BESIDE_RADII * radius + BESIDE_PX)[:, None] * np.arange(1, SAMPLES + 1) / SAMPLES
    return axis, axis - np.maximum(across(reach).min(axis=1), across(-reach).min(axis=1))


def _long_runs(dim: BoolArray, path: IntArray) -> BoolArray:
    """Keep runs of at least `LEAST_GAP_PX` pixels of one path."""
    starts = np.r_[True, (dim[1:] != dim[:-1]) | (path[1:] != path[:-1])]
    run = np.cumsum(starts) - 1
    return np.asarray(dim & (np.bincount(run)[run] >= LEAST_GAP_PX))
