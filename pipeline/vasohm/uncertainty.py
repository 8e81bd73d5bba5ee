"""Arithmetic of doubt. Relative parts add in ln; random and shared parts are kept apart by their callers."""

import numpy as np

from vasohm.arrays import BoolArray, FloatArray

COVERAGE_FACTOR_95 = 1.959963984540054  # normal quantile of 0.975 (JCGM 100:2008, table G.1)


def ln_interval(value: FloatArray, ln_se: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Bounds of the 95 % interval of a positive quantity whose logarithm has the standard uncertainty `ln_se`.

    Both are NaN where one of them is beyond what a number can hold: then the quantity is as good as unknown.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        factor = np.exp(COVERAGE_FACTOR_95 * ln_se)
        low, high = value / factor, value * factor
    bounded = np.isfinite(ln_se) & np.isfinite(high)
    return np.where(bounded, low, np.nan), np.where(bounded, high, np.nan)


def no_interval(value: FloatArray, low: FloatArray) -> BoolArray:
    """Whether a quantity has a value and yet no bounds."""
    return np.isfinite(value) & ~np.isfinite(low)


def quadrature(*parts: FloatArray) -> FloatArray:
    """Root sum of squares of independent standard uncertainties (JCGM 100:2008, eq. 10)."""
    return np.sqrt(np.sum([np.square(part) for part in parts], axis=0))
