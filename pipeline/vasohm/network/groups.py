"""Sums, means and medians of values by group."""

import numpy as np

from vasohm.arrays import FloatArray, IntArray


def sum_by(group: IntArray, values: FloatArray, n_groups: int) -> FloatArray:
    """Sum of `values` in each group (n_groups,); 0 for a group without members."""
    return np.bincount(group, weights=values, minlength=n_groups)


def mean_by(group: IntArray, values: FloatArray, weights: FloatArray, n_groups: int) -> FloatArray:
    """Weighted mean of `values` in each group (n_groups,); NaN for a group without weight."""
    total = sum_by(group, weights, n_groups)
    return np.divide(sum_by(group, weights * values, n_groups), total, out=np.full(n_groups, np.nan), where=total > 0)


def median_by(group: IntArray, values: FloatArray, n_groups: int) -> FloatArray:
    """Median of `values` in each group (n_groups,); NaN for a group without members."""
    ordered = values[np.lexsort((values, group))]
    count = np.bincount(group, minlength=n_groups)
    first = np.cumsum(count) - count
    median = np.full(n_groups, np.nan)
    some = count > 0
    lower, upper = first[some] + (count[some] - 1) // 2, first[some] + count[some] // 2
    median[some] = 0.5 * (ordered[lower] + ordered[upper])
    return median
