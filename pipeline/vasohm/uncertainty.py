"""Arithmetic of doubt. Relative parts add in ln; random and shared parts are kept apart by their callers."""

import numpy as np

from vasohm.arrays import FloatArray

COVERAGE_FACTOR_95 = 1.959963984540054  # normal quantile of 0.975 (JCGM 100:2008, table G.1)


def ln_interval(value: FloatArray, ln_se: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Bounds of the 95 % interval of a positive quantity whose logarithm has the standard uncertainty `ln_se`."""
    factor = np.exp(COVERAGE_FACTOR_95 * ln_se)
    return value / factor, value * factor


def quadrature(*parts: FloatArray) -> FloatArray:
    """Root sum of squares of independent standard uncertainties (JCGM 100:2008, eq. 10)."""
    return np.sqrt(np.sum([np.square(part) for part in parts], axis=0))
