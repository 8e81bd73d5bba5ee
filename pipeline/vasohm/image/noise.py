"""The noise of a picture as a function of its brightness, read from the picture itself."""

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray

# Immerkaer, Comput Vis Image Underst 1996;64:300: the difference of two Laplacians is blind to planes; its gain is 6
LAPLACIAN_DIFFERENCE = np.outer([1.0, -2.0, 1.0], [1.0, -2.0, 1.0])
GAIN = 6.0
MAD_TO_SD = 1 / 0.6744897501960817  # of a normal distribution
BRIGHTNESS_BINS = 12
LEAST_IN_BIN = 50
ENOUGH_PX = 200_000  # read the noise to a few parts in a thousand


def noise_against_brightness(
    brightness: Float32Array, smooth: Float32Array, valid: BoolArray, step: float
) -> tuple[float, float]:
    """Fit the variance of a pixel as a + b x brightness, both non-negative.

    Parameters
    ----------
    brightness, smooth : (h, w) the picture and a smoothed copy that tells the expected brightness.
    valid : (h, w) bool, where pixels count.
    step : grey step of the file (0 for floats): rounding alone gives a variance of step^2 / 12.

    Returns
    -------
    a (file units squared) and b (file units).
    """
    floor = max(step**2 / 12, least_variance(float(np.ptp(brightness))))
    inside = ndimage.binary_erosion(valid, iterations=2)
    every = 1 + int(inside.sum()) // ENOUGH_PX
    residual, level = noise_samples(brightness, smooth, inside, every)
    return fit_noise(residual, level, floor)


def noise_samples(
    brightness: Float32Array, smooth: Float32Array, inside: BoolArray, every: int
) -> tuple[Float32Array, Float32Array]:
    """Take what is not smooth about every so-manieth pixel inside, as a standard deviation, and its brightness."""
    residual = np.abs(ndimage.convolve(brightness, LAPLACIAN_DIFFERENCE.astype(np.float32), mode="nearest"))
    return residual[inside][::every] / GAIN, smooth[inside][::every]


def fit_noise(residual: Float32Array, level: Float32Array, floor: float) -> tuple[float, float]:
    """Fit variance = a + b x brightness to such samples, a being `floor` at least."""
    if len(residual) < LEAST_IN_BIN:
        return floor, 0.0
    order = np.argsort(level, kind="stable")
    groups = np.array_split(order, min(BRIGHTNESS_BINS, len(order) // LEAST_IN_BIN))
    variance = np.array([(np.median(residual[group]) * MAD_TO_SD) ** 2 for group in groups])
    mean = np.array([np.median(level[group]) for group in groups])
    base, slope = _line(mean, variance)
    return max(base, floor), slope


def least_variance(range_of_brightness: float) -> float:
    """Return a variance below which float rounding rules; keeps noise-free pictures divisible."""
    return float((1e-6 * max(range_of_brightness, 1e-30)) ** 2)


def _line(x: FloatArray, y: FloatArray) -> tuple[float, float]:
    """Median-of-slopes line (Theil 1950, Sen 1968) with slope and intercept kept non-negative."""
    if len(x) < 2 or np.ptp(x) == 0:
        return float(np.median(y)), 0.0
    i, j = np.triu_indices(len(x), 1)
    apart = x[j] != x[i]
    slope = max(0.0, float(np.median((y[j] - y[i])[apart] / (x[j] - x[i])[apart])))
    base = float(np.median(y - slope * x))
    if base < 0:
        return 0.0, max(0.0, float(np.median(y / np.maximum(x, 1e-30))))
    return base, slope
