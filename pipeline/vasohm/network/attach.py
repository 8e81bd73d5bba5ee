"""Vessel ends led on to the vessel that they spring from, where light shows the way and only the mask has a gap."""

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray
from vasohm.network.tracing import END, Trace

REACH_PX = 8.0  # a mask's edge lies up to this far inside a wide blurred vessel's own
REACH_RADII = 1.0
DIRECTION_PX = 8  # the way on is read over so many pixels before the end
TURNS_DEG = (0.0, -15.0, 15.0)  # straight ahead first: of equal ways that one is taken
ALONG_SIGMA_PX = 1.0  # noise along the way is averaged over about so many pixels
LEAST_SHARE = 0.7  # of the contrast before the end must be seen all along the gap


def attach_ends(
    mask: BoolArray, traced: Trace, distance: Float32Array, signal: Float32Array
) -> tuple[BoolArray, Float32Array]:
    """Fill the gaps between vessel ends and the mask's next vessel straight ahead of them.

    Parameters
    ----------
    mask : (h, w) bool, where vessels are.
    traced : its skeleton's paths.
    distance : (h, w) distance to the mask's outline.
    signal : (h, w) vessels positive.

    Returns
    -------
    (h, w) bool, the mask with the gaps filled, and (h, w) distance to the outline, in the gaps the radius of the vessel
    that ends there. Where nothing was filled both are the arrays that were given.
    """
    tip, half_way, behind = _tips(traced)
    if not len(tip):
        return mask, distance
    smooth = ndimage.gaussian_filter(signal, 1.0, mode="nearest")
    row, column = traced.row[tip].astype(np.float64), traced.column[tip].astype(np.float64)
    heading = np.arctan2(row - traced.row[behind], column - traced.column[behind])
    radius = distance[traced.row[tip], traced.column[tip]].astype(np.float64)
    steps = np.arange(1.0, np.ceil(REACH_PX + (1 + REACH_RADII) * radius.max()) + 1)
    contrast = (
        smooth[traced.row[behind], traced.column[behind]] + smooth[traced.row[half_way], traced.column[half_way]]
    ) / 2
    best = np.full(len(tip), -np.inf)
    first, y, x = np.zeros(len(tip), np.int64), np.zeros((len(tip), len(steps))), np.zeros((len(tip), len(steps)))
    for turn in np.radians(TURNS_DEG):
        down, right = np.sin(heading + turn)[:, None], np.cos(heading + turn)[:, None]
        ray_y, ray_x = row[:, None] + steps * down, column[:, None] + steps * right
        met, at = _first_met(mask, ray_y, ray_x)
        light = ndimage.gaussian_filter1d(smooth[at], ALONG_SIGMA_PX, axis=1, mode="nearest")
        dimmest = np.where(np.arange(len(steps)) <= met[:, None], light, np.inf).min(axis=1) / contrast
        reached = met < np.minimum(len(steps), REACH_PX + (1 + REACH_RADII) * radius)
        better = reached & (contrast > 0) & (dimmest >= LEAST_SHARE) & (dimmest > best)
        best, first = np.where(better, dimmest, best), np.where(better, met, first)
        y, x = np.where(better[:, None], ray_y, y), np.where(better[:, None], ray_x, x)
    joined = np.isfinite(best)
    if not joined.any():
        return mask, distance
    return _filled((mask, distance), (y[joined], x[joined]), first[joined], radius[joined])


def _first_met(mask: BoolArray, y: FloatArray, x: FloatArray) -> tuple[IntArray, tuple[IntArray, IntArray]]:
    """Index on each ray of the first place in the mask after leaving it, the number of steps where there is none."""
    height, width = mask.shape
    at = (np.rint(np.clip(y, 0, height - 1)).astype(np.int64), np.rint(np.clip(x, 0, width - 1)).astype(np.int64))
    inside = (y >= 0) & (x >= 0) & (y <= height - 1) & (x <= width - 1)
    met = inside & mask[at] & np.logical_or.accumulate(~mask[at], axis=1)
    return np.where(met.any(axis=1), met.argmax(axis=1), y.shape[1]), at


def _tips(traced: Trace) -> tuple[IntArray, IntArray, IntArray]:
    """Indices of the end pixels of paths, of a pixel some way before each, and of one half way to it."""
    count = np.diff(traced.offsets)
    back = np.minimum(DIRECTION_PX, count - 1)
    first, last = traced.offsets[:-1], traced.offsets[1:] - 1
    at_a = (traced.node_kind[traced.node_a] == END) & (back > 0)
    at_b = (traced.node_kind[traced.node_b] == END) & (back > 0)
    tips = np.concatenate((first[at_a], last[at_b]))
    half = back // 2
    return (
        tips,
        np.concatenate(((first + half)[at_a], (last - half)[at_b])),
        np.concatenate(((first + back)[at_a], (last - back)[at_b])),
    )


def _filled(
    drawn_on: tuple[BoolArray, Float32Array], rays: tuple[FloatArray, FloatArray], first: IntArray, radius: FloatArray
) -> tuple[BoolArray, Float32Array]:
    """Draw the ways ahead, about as wide as the vessels that end."""
    mask, distance = (values.copy() for values in drawn_on)
    for y, x, stop, width in zip(*rays, first.tolist(), radius.tolist(), strict=True):
        reach = int(np.ceil(width))
        for row, column in zip(np.rint(y[: stop + 1]).astype(int), np.rint(x[: stop + 1]).astype(int), strict=True):
            place = (
                slice(max(row - reach + 1, 0), row + reach),
                slice(max(column - reach + 1, 0), column + reach),
            )
            distance[place] = np.where(mask[place], distance[place], width)
            mask[place] = True
    return mask, distance
