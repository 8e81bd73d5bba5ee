"""Plane curves sampled finely, and radii along them."""

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.ndimage import gaussian_filter1d

from vasohm_synthetic.arrays import FloatArray
from vasohm_synthetic.scene import AXIS_STEP_PX

_PER_CORRELATION = 6
_REACH = 18  # four standard deviations of the smoothing

Curve = tuple[FloatArray, FloatArray]


def arc_length(x_px: FloatArray, y_px: FloatArray) -> FloatArray:
    """Arc length from the first point of a polyline, (n,)."""
    return np.concatenate(([0.0], np.cumsum(np.hypot(np.diff(x_px), np.diff(y_px)))))


def resample(x_px: FloatArray, y_px: FloatArray, step_px: float = AXIS_STEP_PX) -> Curve:
    """Place points at equal steps of at most `step_px` along a polyline; both ends are kept."""
    s = arc_length(x_px, y_px)
    n = max(2, int(np.ceil(s[-1] / step_px - 1e-9)) + 1)
    at = np.linspace(0.0, s[-1], n)
    return np.interp(at, s, x_px), np.interp(at, s, y_px)


def straight(x_px: float, y_px: float, angle_deg: float, length_px: float) -> Curve:
    """Straight line through its midpoint; the angle turns from right towards down."""
    half = 0.5 * length_px * np.array([-1.0, 1.0])
    angle = np.deg2rad(angle_deg)
    return resample(x_px + half * np.cos(angle), y_px + half * np.sin(angle))


def arc(x_px: float, y_px: float, bend_radius_px: float, angle_deg: tuple[float, float]) -> Curve:
    """Part of a circle about a centre, from the first angle to the second."""
    start, stop = np.deg2rad(angle_deg)
    n = max(3, int(np.ceil(abs(stop - start) * bend_radius_px / AXIS_STEP_PX)) + 1)
    angle = np.linspace(start, stop, n)
    return x_px + bend_radius_px * np.cos(angle), y_px + bend_radius_px * np.sin(angle)


def sinusoid(chord: Curve, amplitude_px: float, period_px: float) -> Curve:
    """Bend a straight line into a sine about itself."""
    x, y = resample(*chord, step_px=AXIS_STEP_PX / 8)  # the sine is longer than its chord
    s = arc_length(x, y)
    cos, sin = (x[-1] - x[0]) / s[-1], (y[-1] - y[0]) / s[-1]
    offset = amplitude_px * np.sin(2 * np.pi * s / period_px)
    return resample(x - offset * sin, y + offset * cos)


def wander(
    start: tuple[float, float, float], length_px: float, bend_radius_px: float, rng: np.random.Generator
) -> Curve:
    """Smoothly winding line from (x, y, heading in radians).

    Its curvature is a Gaussian process with standard deviation 1 / `bend_radius_px`, cut at 2.5 of them.
    """
    n = max(3, int(np.ceil(length_px / AXIS_STEP_PX)) + 1)
    step = length_px / (n - 1)
    curvature = np.clip(process(n, step, length_px / 4, rng), -2.5, 2.5) / bend_radius_px
    heading = start[2] + step * (np.cumsum(curvature) - 0.5 * curvature)
    x = start[0] + step * np.concatenate(([0.0], np.cumsum(np.cos(heading[:-1]))))
    y = start[1] + step * np.concatenate(([0.0], np.cumsum(np.sin(heading[:-1]))))
    return x, y


def process(n: int, step_px: float, correlation_px: float, rng: np.random.Generator) -> FloatArray:
    """Gaussian process of unit variance with covariance exp(-d^2 / (2 correlation_px^2)), n equidistant values.

    White noise through a Gaussian of standard deviation a has covariance exp(-d^2 / (4 a^2)). It is drawn at
    `_PER_CORRELATION` values a correlation length, where a cubic spline between them is right to 1e-3.
    """
    sigma = _PER_CORRELATION / np.sqrt(2.0)
    coarse_px = correlation_px / _PER_CORRELATION
    coarse_n = max(4, int(np.ceil((n - 1) * step_px / coarse_px)) + 1)
    smooth = gaussian_filter1d(rng.standard_normal(coarse_n + 2 * _REACH), sigma, mode="constant", truncate=4.0)
    kernel = gaussian_filter1d(np.eye(1, 2 * _REACH + 1, _REACH)[0], sigma, mode="constant", truncate=4.0)
    unit = smooth[_REACH : _REACH + coarse_n] / np.sqrt(np.sum(kernel**2))
    values: FloatArray = CubicSpline(np.arange(coarse_n) * coarse_px, unit)(np.arange(n) * step_px)
    return values
