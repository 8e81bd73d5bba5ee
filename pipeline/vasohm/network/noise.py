"""Noise of neighbouring pixels is not independent: its covariance from pixels on which no vessel lies."""

import numpy as np
from scipy.fft import irfft2, next_fast_len, rfft2
from scipy.ndimage import binary_dilation, uniform_filter

from vasohm.arrays import BoolArray, Float32Array, FloatArray

LAGS_PX = 20  # beyond these nothing is looked for
BACKGROUND_PX = 81  # slower changes are background: level and slope of each strip take them up
LARGEST_TILE_PX = 1024
FEWEST_PIXELS = 2000
LEAST_VARIANCE = 0.05  # of the stated one, so that a picture without any noise does not stop the fit
OUTLIER, ODD_PX = 4.5, 3  # standard deviations of a pixel from which it and so many px around it are left out
MEDIAN_OF_NORMAL = 0.6745  # median absolute value of a standard normal number


def noise_correlation(signal: Float32Array, noise_sd: Float32Array, free: BoolArray) -> FloatArray:
    """Return the covariance of pixels a distance apart, in units of their stated variance.

    Parameters
    ----------
    signal, noise_sd : (h, w).
    free : (h, w) pixels inside the field of view on which no vessel lies.

    Returns
    -------
    (LAGS_PX ** 2 + 1,) by squared distance; pairs of pixels further apart than the first distance at which nothing
    significant is left are given 0. Independent noise of the stated size gives 1, 0, 0 ...
    """
    tile = _best_tile(free)
    inside = free[tile] & (noise_sd[tile] > 0)
    white = np.zeros(LAGS_PX**2 + 1)
    white[0] = 1.0
    if inside.sum() < FEWEST_PIXELS:
        return white
    value = np.where(inside, signal[tile], 0.0).astype(np.float64)
    share = uniform_filter(inside.astype(np.float64), BACKGROUND_PX, mode="constant")
    level = uniform_filter(value, BACKGROUND_PX, mode="constant") / np.maximum(share, 1e-9)
    # what a pixel itself gives to its own background is put back
    own = 1.0 / (1.0 - 1.0 / np.maximum(share * BACKGROUND_PX**2, 2.0))
    z = np.where(inside, (value - level) * np.sqrt(own) / np.where(inside, noise_sd[tile], 1.0), 0.0)
    typical = float(np.median(np.abs(z[inside]))) / MEDIAN_OF_NORMAL
    inside &= ~binary_dilation(np.abs(z) > OUTLIER * typical, iterations=ODD_PX)
    if inside.sum() < FEWEST_PIXELS:
        return white
    return _radial_covariance(np.where(inside, z, 0.0), inside)


def _best_tile(free: BoolArray) -> tuple[slice, slice]:
    """Choose the piece of a large picture that holds the most vessel-free pixels."""
    size = LARGEST_TILE_PX
    if max(free.shape) <= size:
        return slice(None), slice(None)
    corners = [
        (top, left)
        for top in range(0, max(free.shape[0] - size, 0) + 1, size // 2)
        for left in range(0, max(free.shape[1] - size, 0) + 1, size // 2)
    ]
    top, left = max(corners, key=lambda at: int(free[at[0] : at[0] + size, at[1] : at[1] + size].sum()))
    return slice(top, top + size), slice(left, left + size)


def _radial_covariance(z: FloatArray, inside: BoolArray) -> FloatArray:
    shape = tuple(next_fast_len(n + LAGS_PX, real=True) for n in z.shape)
    power = irfft2(np.abs(rfft2(z, shape)) ** 2, shape)
    pairs = irfft2(np.abs(rfft2(inside.astype(np.float64), shape)) ** 2, shape)
    lag = np.arange(-LAGS_PX, LAGS_PX + 1)
    power, pairs = power[np.ix_(lag, lag)], pairs[np.ix_(lag, lag)]
    squared = (lag[:, None] ** 2 + lag**2).ravel()
    n_lags = LAGS_PX**2 + 1
    keep = squared < n_lags
    total = np.bincount(squared[keep], power.ravel()[keep], n_lags)
    count = np.bincount(squared[keep], pairs.ravel()[keep], n_lags)
    covariance = np.divide(total, count, out=np.zeros(n_lags), where=count > 0.5)
    # each pair counts twice among the lags; a mean of n independent products has sd 1 / sqrt(n)
    doubtful = covariance * np.sqrt(np.maximum(count / 2, 1.0)) < 3.0 * covariance[0]
    seen = np.flatnonzero(count > 0.5)
    empty = seen[doubtful[seen] & (seen > 0)]
    if len(empty):
        covariance[empty[0] :] = 0.0
    covariance[0] = max(covariance[0], LEAST_VARIANCE)
    return covariance
