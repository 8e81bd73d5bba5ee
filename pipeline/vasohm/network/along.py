"""How much of a segment's length each of its points stands for."""

import numpy as np

from vasohm.arrays import FloatArray
from vasohm.network.groups import sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph


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
