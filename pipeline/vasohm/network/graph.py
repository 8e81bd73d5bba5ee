"""From a skeleton to a graph of vessel segments: arrays of nodes and segments and one flat table of points."""

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from vasohm.arrays import FloatArray, IntArray, freeze


class NodeKind(IntEnum):
    """What a node is; the lower-case name is the word in nodes.csv."""

    END = 0
    RIM = 1
    BRANCHING = 2
    LOOP = 3


class VesselClass(IntEnum):
    """Kind of vessel; 0 is not said (an empty cell)."""

    NONE = 0
    ARTERIOLE = 1
    VENULE = 2
    CAPILLARY = 3


@dataclass(frozen=True, slots=True, eq=False)
class Crossings:
    """Places where two vessels merely cross in the picture; segment indices count from 0."""

    x_px: FloatArray
    y_px: FloatArray
    segment_over: IntArray
    segment_under: IntArray
    probability: FloatArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class VesselGraph:
    """Nodes, segments and their ordered sub-pixel centrelines.

    Segment i runs from `node_a[i]` to `node_b[i]` through points `offsets[i]:offsets[i + 1]`, about 1 px apart.
    Indices count from 0 in a fixed order made from coordinates; the id in a table is the index plus 1.
    """

    shape: tuple[int, int]  # (h, w)
    node_x_px: FloatArray  # (n_nodes,)
    node_y_px: FloatArray
    node_kind: IntArray
    node_a: IntArray  # (n_segments,)
    node_b: IntArray
    offsets: IntArray  # (n_segments + 1,)
    x_px: FloatArray  # (n_points,)
    y_px: FloatArray
    seed_radius_px: FloatArray  # (n_points,) from the mask: for searching only, never for results
    vessel_class: IntArray  # (n_segments,) of VesselClass
    class_probability: FloatArray  # (n_segments,) NaN where the class is not said
    segment_flags: IntArray  # (n_segments,) of Flag
    crossings: Crossings

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def n_nodes(self) -> int:
        return len(self.node_x_px)

    @property
    def n_segments(self) -> int:
        return len(self.node_a)

    @property
    def n_points(self) -> int:
        return len(self.x_px)


def label_networks(graph: VesselGraph) -> tuple[IntArray, IntArray]:
    """Number the connected networks from 0 in the order of their first segment.

    Returns
    -------
    (n_nodes,) and (n_segments,) int: the network of each node and of each segment. Every node has a segment.
    """
    if graph.n_segments == 0:
        return np.zeros(graph.n_nodes, np.int64), np.zeros(0, np.int64)
    links = coo_array((np.ones(graph.n_segments), (graph.node_a, graph.node_b)), shape=(graph.n_nodes,) * 2)
    _, label = connected_components(links, directed=False)
    _, first = np.unique(label[graph.node_a], return_index=True)
    order = np.empty(len(first), np.int64)
    order[np.argsort(first)] = np.arange(len(first))
    node_network = order[label]
    return node_network, node_network[graph.node_a]
