"""The field of view: where the picture holds tissue, and a fill outside that draws no edge."""

import numpy as np
from scipy import ndimage
from skimage.morphology import convex_hull_image

from vasohm.arrays import BoolArray, Float32Array

BLACK_SHARE = 0.12  # of the bright level: a mask or the camera's housing is darker than this, tissue is not
BLACK_RATIO = 0.25  # of the tissue's brightness: what is brighter lets light through and is no mask
LEAST_OUTSIDE = 0.005  # of the picture: less than this is dark tissue or dead pixels, no housing
SOLID_SHARE = 0.8  # of its convex hull: a round or straight-edged field, also one with a notch
MIRROR_INSET_PX = 4  # the border itself is shaded; mirrors stand this much further in


def find_field_of_view(brightness: Float32Array, *, vessels_are_dark: bool) -> BoolArray:
    """Find the part of the picture that is not masked off in black.

    Parameters
    ----------
    brightness : (h, w) float32, finite, bigger is brighter.
    vessels_are_dark : with dark vessels the tissue is bright, so a dark border region is outside; with bright
        vessels dark tissue is normal, and only a border region at exactly the lowest value is outside.

    Returns
    -------
    (h, w) bool, True inside; all True where no such region exists.
    """
    if np.ptp(brightness) == 0:
        return np.ones(brightness.shape, dtype=bool)
    lowest = float(brightness.min())
    if vessels_are_dark:
        smooth = _smooth(brightness)
        dark = smooth < black_limit(lowest, float(np.percentile(smooth, 90)))
    else:
        dark = dark_places(brightness, lowest, vessels_are_dark=False)
    labels, count = ndimage.label(dark)
    if count == 0:
        return np.ones(brightness.shape, dtype=bool)
    at_border = np.unique(np.concatenate((labels[0], labels[-1], labels[:, 0], labels[:, -1])))
    outside = np.isin(labels, at_border[at_border > 0])
    share = outside.mean()
    if share < LEAST_OUTSIDE or share > 1 - LEAST_OUTSIDE:
        return np.ones(brightness.shape, dtype=bool)
    if vessels_are_dark and np.median(brightness[outside]) > BLACK_RATIO * np.median(brightness[~outside]):
        return np.ones(brightness.shape, dtype=bool)  # a wide vessel that leaves the picture on both sides
    inside = _largest_filled(~outside)
    if not vessels_are_dark and not _is_solid(inside):
        return np.ones(brightness.shape, dtype=bool)  # background without noise: what is left are the vessels
    return inside


def black_limit(lowest: float, bright: float) -> float:
    """Brightness below which there is no tissue around dark vessels; `bright` is that of the brightest tenth."""
    return lowest + BLACK_SHARE * (bright - lowest)


def dark_places(brightness: Float32Array, limit: float, *, vessels_are_dark: bool) -> BoolArray:
    """Tell where a picture is so dark (below `limit`, or at it where vessels are bright) that it may be masked off."""
    if vessels_are_dark:
        return np.asarray(_smooth(brightness) < limit)
    return np.asarray(ndimage.binary_opening(brightness <= limit, iterations=3))


def _smooth(brightness: Float32Array) -> Float32Array:
    return np.asarray(ndimage.uniform_filter(brightness, 5, mode="nearest"))


def _is_solid(inside: BoolArray) -> bool:
    """Whether the region nearly fills its convex hull, as the opening of a camera or a scanner does."""
    step = max(1, min(inside.shape) // 128)
    small = inside[::step, ::step]
    return bool(small.any() and small.sum() > SOLID_SHARE * convex_hull_image(small).sum())


def _largest_filled(inside: BoolArray) -> BoolArray:
    labels, count = ndimage.label(inside)
    if count > 1:
        inside = labels == 1 + np.argmax(np.bincount(labels.ravel())[1:])
    return np.asarray(ndimage.binary_fill_holes(inside), dtype=bool)


def mirror_outside(values: Float32Array, fov: BoolArray) -> Float32Array:
    """Fill what is outside the field of view with its mirror image, so that filters see no edge there."""
    if fov.all():
        return values
    core = ndimage.minimum_filter(fov, size=2 * MIRROR_INSET_PX + 1, mode="nearest")
    if not core.any():
        core = fov
    y, x = np.nonzero(~core)
    near = ndimage.distance_transform_edt(~core, return_distances=False, return_indices=True)
    near_y, near_x = near[0][y, x].astype(np.int64), near[1][y, x].astype(np.int64)
    height, width = fov.shape
    mirror_y, mirror_x = np.clip(2 * near_y - y, 0, height - 1), np.clip(2 * near_x - x, 0, width - 1)
    lands = core[mirror_y, mirror_x]
    filled = values.copy()
    filled[y, x] = values[np.where(lands, mirror_y, near_y), np.where(lands, mirror_x, near_x)]
    return filled
