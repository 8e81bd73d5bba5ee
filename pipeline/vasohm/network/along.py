"""Sums, means and medians along segments, for all segments at once."""

import numpy as np

from vasohm.arrays import FloatArray, IntArray
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph


def sum_by(group: IntArray, values: FloatArray, n_groups: int) -> FloatArray:
    """Sum of `values` in each group (n_groups,); 0 for a group without members."""
    return np.bincount(group, weights=values, minlength=n_groups)


def arc_shares(measured: MeasuredGraph) -> FloatArray:
    """Part of its segment's length (n_points,) that each point stands for, by the trapezium rule; they sum to 1.

    A segment whose points all lie at one place gives them equal parts.
    """
    graph = measured.graph
    segment = owner(graph.offsets)
    half_step = 0.5 * np.where(segment[1:] == segment[:-1], np.diff(measured.s_um), 0.0)
    weight = np.zeros(graph.n_points)
    weight[:-1] += half_step
    weight[1:] += half_step
    flat = sum_by(segment, weight, graph.n_segments) <= 0
    weight = np.where(flat[segment], 1.0, weight)
    arc = sum_by(segment, weight, graph.n_segments)
    share: FloatArray = weight / np.where(arc > 0, arc, 1.0)[segment]
    return share


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
