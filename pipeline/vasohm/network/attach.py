"""Vessel ends led on to the vessel that they spring from, where light shows the way and only the mask has a gap."""

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray
from vasohm.network.tracing import END, Trace

REACH_PX = 8.0  # a mask's edge lies up to this far inside a wide blurred vessel's own
REACH_RADII = 1.0
DIRECTION_PX = 8  # the way on is read over so many pixels before the end
LEAST_SHARE = 0.5  # of the contrast before the end must be seen all along the gap


def attach_ends(mask: BoolArray, traced: Trace, distance: Float32Array, signal: Float32Array) -> BoolArray:
    """Fill the gaps between vessel ends and the mask's next vessel straight ahead of them.

    Parameters
    ----------
    mask : (h, w) bool, where vessels are.
    traced : its skeleton's paths.
    distance : (h, w) distance to the mask's outline.
    signal : (h, w) vessels positive.

    Returns
    -------
    (h, w) bool, the mask with the gaps filled.
    """
    tip, behind = _tips(traced)
    if not len(tip):
        return mask
    smooth = ndimage.gaussian_filter(signal, 1.0, mode="nearest")
    row, column = traced.row[tip].astype(np.float64), traced.column[tip].astype(np.float64)
    down, right = row - traced.row[behind], column - traced.column[behind]
    size = np.maximum(np.hypot(down, right), 1e-9)
    radius = distance[traced.row[tip], traced.column[tip]].astype(np.float64)
    steps = np.arange(1.0, np.ceil(REACH_PX + (1 + REACH_RADII) * radius.max()) + 1)
    y = row[:, None] + steps * (down / size)[:, None]
    x = column[:, None] + steps * (right / size)[:, None]
    inside = (y >= 0) & (x >= 0) & (y <= mask.shape[0] - 1) & (x <= mask.shape[1] - 1)
    at = (np.rint(np.clip(y, 0, mask.shape[0] - 1)).astype(int), np.rint(np.clip(x, 0, mask.shape[1] - 1)).astype(int))
    met = inside & mask[at] & np.logical_or.accumulate(~mask[at], axis=1)
    first = np.where(met.any(axis=1), met.argmax(axis=1), len(steps))
    ahead = np.arange(len(steps))[None, :] <= first[:, None]
    contrast = smooth[traced.row[behind], traced.column[behind]]
    dimmest = np.where(ahead, smooth[at], np.inf).min(axis=1)
    joined = (first < len(steps)) & (dimmest >= LEAST_SHARE * contrast)
    joined &= steps[np.minimum(first, len(steps) - 1)] <= REACH_PX + (1 + REACH_RADII) * radius
    return _filled(mask, (y[joined], x[joined]), first[joined], radius[joined])


def _tips(traced: Trace) -> tuple[IntArray, IntArray]:
    """Indices of the end pixels of paths, and of a pixel some way before each."""
    count = np.diff(traced.offsets)
    back = np.minimum(DIRECTION_PX, count - 1)
    first, last = traced.offsets[:-1], traced.offsets[1:] - 1
    at_a = (traced.node_kind[traced.node_a] == END) & (back > 0)
    at_b = (traced.node_kind[traced.node_b] == END) & (back > 0)
    tips = np.concatenate((first[at_a], last[at_b]))
    return tips, np.concatenate(((first + back)[at_a], (last - back)[at_b]))


def _filled(mask: BoolArray, rays: tuple[FloatArray, FloatArray], first: IntArray, radius: FloatArray) -> BoolArray:
    """Draw the ways ahead, about as wide as the vessels that end."""
    drawn = mask.copy()
    for y, x, stop, width in zip(*rays, first.tolist(), radius.tolist(), strict=True):
        reach = int(np.ceil(width))
        for row, column in zip(np.rint(y[: stop + 1]).astype(int), np.rint(x[: stop + 1]).astype(int), strict=True):
            rows = slice(max(row - reach + 1, 0), row + reach)
            columns = slice(max(column - reach + 1, 0), column + reach)
            drawn[rows, columns] = True
    return drawn
