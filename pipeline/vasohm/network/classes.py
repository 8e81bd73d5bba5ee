"""Arteriole, venule or capillary, from a label image made elsewhere."""

from dataclasses import replace

import numpy as np

from vasohm.arrays import IntArray
from vasohm.network.graph import VesselClass, VesselGraph
from vasohm.network.paths import owner

LEAST_SHARE = 0.5  # of a segment's points must say one class


def classes_from_labels(graph: VesselGraph, labels: IntArray) -> VesselGraph:
    """Give each segment the class that most of its points lie on; the share of points is its probability.

    Parameters
    ----------
    graph : the graph, in pixels of the label image.
    labels : (h, w) int, 0 not said, 1 arteriole, 2 venule, 3 capillary.
    """
    if graph.n_segments == 0:
        return graph
    height, width = labels.shape
    row = np.clip(np.rint(graph.y_px), 0, height - 1).astype(np.int64)
    column = np.clip(np.rint(graph.x_px), 0, width - 1).astype(np.int64)
    votes = np.zeros((graph.n_segments, len(VesselClass)))
    np.add.at(votes, (owner(graph.offsets), labels[row, column]), 1)
    share = votes[:, 1:] / np.diff(graph.offsets)[:, None]
    best = share.argmax(axis=1)
    said = share[np.arange(len(best)), best] > LEAST_SHARE
    return replace(
        graph,
        vessel_class=np.where(said, best + 1, VesselClass.NONE),
        class_probability=np.where(said, share[np.arange(len(best)), best], np.nan),
    )
