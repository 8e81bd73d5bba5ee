"""From a skeleton to a graph of vessel segments: arrays of nodes and segments and one flat table of points."""

from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.paths import arc_length, offsets_of, owner, position, resample, tangents, twice
from vasohm.network.skeletonize import Skeleton
from vasohm.network.tracing import END, SEAM, trace


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
    over_told: BoolArray  # the picture shows which is over; else the lower index stands first

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


NO_CROSSINGS = Crossings(
    np.zeros(0), np.zeros(0), np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0), np.zeros(0, dtype=bool)
)
JUNCTION_RADII = (
    2.2  # inside this many radii of a junction lumens overlap and skeletons bend: no direction is read there
)
DIRECTION_RADII = 2.0  # the direction of a branch is taken over this many radii, at least DIRECTION_LEAST_PX
DIRECTION_LEAST_PX = 4.0
MERGE_RADII = 0.75  # branchings closer together than this share of the local radius are one
CENTRE_WEIGHT = 0.1  # holds the meeting point of nearly parallel branches near the skeleton's junction


def build_graph(skeleton: Skeleton) -> VesselGraph:
    """Turn a skeleton into nodes and smooth segments.

    Junctions closer together than the vessel is wide are merged. Each junction is moved to where the directions of
    its branches meet, taken outside the junction's own width, and the branches run straight into it.

    Returns
    -------
    A graph in its fixed order; no crossing resolved yet, kinds END, BRANCHING and LOOP only.
    """
    traced = trace(skeleton.pixels)
    kind = np.select(
        [traced.node_kind == END, traced.node_kind == SEAM], [NodeKind.END, NodeKind.LOOP], NodeKind.BRANCHING
    )
    counts = np.diff(traced.offsets)
    radius = skeleton.distance_px[traced.row, traced.column].astype(np.float64)
    offsets = offsets_of(counts + 2)
    x = _with_ends(traced.column, traced.node_column, traced.node_a, traced.node_b, offsets)
    y = _with_ends(traced.row, traced.node_row, traced.node_a, traced.node_b, offsets)
    first, last = traced.offsets[:-1], traced.offsets[1:] - 1
    seed = np.empty(offsets[-1])
    inner = _inner(offsets)
    seed[inner], seed[offsets[:-1]], seed[offsets[1:] - 1] = radius, radius[first], radius[last]
    x, y, offsets, (seed,) = resample(x, y, offsets, (seed,))
    graph = VesselGraph(
        shape=(skeleton.pixels.shape[0], skeleton.pixels.shape[1]),
        node_x_px=traced.node_column.astype(np.float64), node_y_px=traced.node_row.astype(np.float64),
        node_kind=kind.astype(np.int64), node_a=traced.node_a, node_b=traced.node_b, offsets=offsets,
        x_px=twice(x, offsets), y_px=twice(y, offsets), seed_radius_px=np.maximum(seed, 0.5),
        vessel_class=np.zeros(len(counts), np.int64), class_probability=np.full(len(counts), np.nan),
        segment_flags=np.zeros(len(counts), np.int64), crossings=NO_CROSSINGS,
    )  # fmt: skip
    return in_fixed_order(centre_junctions(_merge_close(graph)))


def _inner(offsets: IntArray) -> BoolArray:
    """Points that are neither the first nor the last of their path."""
    inner = np.ones(offsets[-1], dtype=bool)
    inner[offsets[:-1]] = inner[offsets[1:] - 1] = False
    return inner


def _with_ends(
    values: IntArray, nodes: FloatArray, node_a: IntArray, node_b: IntArray, offsets: IntArray
) -> FloatArray:
    """Put the node's coordinate before and behind each path."""
    result = np.empty(offsets[-1])
    result[_inner(offsets)] = values
    result[offsets[:-1]], result[offsets[1:] - 1] = nodes[node_a], nodes[node_b]
    return result


def _merge_close(graph: VesselGraph) -> VesselGraph:
    """Contract bridges between junctions that are shorter than the vessel is wide."""
    length = arc_length(graph.x_px, graph.y_px, graph.offsets)[graph.offsets[1:] - 1]
    radius = end_radius(graph)
    between = (graph.node_kind[graph.node_a] == NodeKind.BRANCHING) & (
        graph.node_kind[graph.node_b] == NodeKind.BRANCHING
    )
    short = between & (graph.node_a != graph.node_b) & (length < MERGE_RADII * radius.min(axis=1))
    if not short.any():
        return graph
    links = coo_array((np.ones(short.sum()), (graph.node_a[short], graph.node_b[short])), shape=(graph.n_nodes,) * 2)
    count, label = connected_components(links, directed=False)
    size = np.bincount(label, minlength=count)
    kind = np.full(count, NodeKind.END, np.int64)
    kind[label] = graph.node_kind
    return rebuild(
        graph, ~short, np.bincount(label, graph.node_x_px) / size, np.bincount(label, graph.node_y_px) / size,
        (kind, label[graph.node_a], label[graph.node_b]),
    )  # fmt: skip


def rebuild(
    graph: VesselGraph,
    keep: BoolArray,
    node_x: FloatArray,
    node_y: FloatArray,
    nodes: tuple[IntArray, IntArray, IntArray],
) -> VesselGraph:
    """Return the graph with some segments only and with new nodes (kind, node_a, node_b of all old segments).

    Segments are not redrawn: callers put their ends on the new nodes.
    """
    kind, node_a, node_b = nodes
    points = np.repeat(keep, np.diff(graph.offsets))
    used, index = np.unique(np.concatenate((node_a[keep], node_b[keep])), return_inverse=True)
    n = int(keep.sum())
    return replace(
        graph, node_x_px=node_x[used], node_y_px=node_y[used], node_kind=kind[used], node_a=index[:n], node_b=index[n:],
        offsets=offsets_of(np.diff(graph.offsets)[keep]), x_px=graph.x_px[points], y_px=graph.y_px[points],
        seed_radius_px=graph.seed_radius_px[points], vessel_class=graph.vessel_class[keep],
        class_probability=graph.class_probability[keep], segment_flags=graph.segment_flags[keep],
    )  # fmt: skip


def end_radius(graph: VesselGraph) -> FloatArray:
    """Return the seed radius of each segment for both of its ends, (n_segments, 2): the median over its middle.

    Near a junction the distance to the outline is that of the junction, not of the branch.
    """
    count = np.diff(graph.offsets)
    pick = np.array([1 / 3, 1 / 2, 2 / 3])[None, :]
    middle = graph.seed_radius_px[graph.offsets[:-1, None] + np.rint(pick * (count - 1)[:, None]).astype(np.int64)]
    radius = np.median(middle, axis=1)
    return np.column_stack((radius, radius))


def centre_junctions(graph: VesselGraph) -> VesselGraph:
    """Move each branching to where its branches meet and lead them straight into it."""
    x, y = meeting_points(graph)
    return _lead_in(replace(graph, node_x_px=x, node_y_px=y))


def meeting_points(graph: VesselGraph) -> tuple[FloatArray, FloatArray]:
    """Least-squares meeting point of the branches at each branching, wide ones first; other nodes where they are.

    A branching stays where it is if its branches are too nearly parallel to say better.
    """
    node, start, towards = branch_directions(graph)
    radius = end_radius(graph).T.ravel()
    at_branching = graph.node_kind[node] == NodeKind.BRANCHING
    n = graph.n_nodes
    weight = np.where(at_branching, radius**2, 0.0)
    spread = np.bincount(node, weight, n)
    hold = CENTRE_WEIGHT * np.maximum(spread, 1e-12)
    tx, ty = towards.T
    across = (weight * (1 - tx * tx), weight * (-tx * ty), weight * (1 - ty * ty))
    a = np.bincount(node, across[0], n) + hold
    b = np.bincount(node, across[1], n)
    d = np.bincount(node, across[2], n) + hold
    u = np.bincount(node, across[0] * start[:, 0] + across[1] * start[:, 1], n) + hold * graph.node_x_px
    v = np.bincount(node, across[1] * start[:, 0] + across[2] * start[:, 1], n) + hold * graph.node_y_px
    det = a * d - b * b
    x, y = (d * u - b * v) / det, (a * v - b * u) / det
    widest = np.zeros(n)
    np.maximum.at(widest, node, radius)
    moved = graph.node_kind == NodeKind.BRANCHING
    moved &= np.hypot(x - graph.node_x_px, y - graph.node_y_px) <= widest + 2
    return np.where(moved, x, graph.node_x_px), np.where(moved, y, graph.node_y_px)


def shift_sideways(graph: VesselGraph, offset_px: FloatArray) -> VesselGraph:
    """Move every point along its normal (-dy, dx), and branchings to where the moved branches meet.

    The points inside a junction are spread evenly on the straight way to its node, as nothing is seen of a single
    branch's axis there. No point is added or lost.
    """
    tx, ty = tangents(graph.x_px, graph.y_px, graph.offsets)
    x, y = graph.x_px - offset_px * ty, graph.y_px + offset_px * tx
    shifted = replace(graph, x_px=x.copy(), y_px=y.copy())  # a noun freezes its arrays
    node_x, node_y = meeting_points(shifted)
    near, _ = _junction_window(shifted)
    segment, k = owner(graph.offsets), position(graph.offsets)
    first, last = graph.offsets[:-1], graph.offsets[1:] - 1
    for side, nodes, end, inward, from_end in (
        (0, graph.node_a, first, 1, k),
        (1, graph.node_b, last, -1, last[segment] - first[segment] - k),
    ):
        at_branching = graph.node_kind[nodes] == NodeKind.BRANCHING
        node_x[nodes[~at_branching]], node_y[nodes[~at_branching]] = x[end[~at_branching]], y[end[~at_branching]]
        inside = at_branching[segment] & (from_end < near[segment, side])
        outer = (end + inward * near[:, side])[segment[inside]]
        share = from_end[inside] / near[segment[inside], side]
        node = nodes[segment[inside]]
        x[inside] = node_x[node] + share * (shifted.x_px[outer] - node_x[node])
        y[inside] = node_y[node] + share * (shifted.y_px[outer] - node_y[node])
    return replace(graph, x_px=x, y_px=y, node_x_px=node_x, node_y_px=node_y)


def branch_directions(graph: VesselGraph) -> tuple[IntArray, FloatArray, FloatArray]:
    """Look at both ends of all segments: (2 n,) node, (2 n, 2) point outside the junction, (2 n, 2) unit direction.

    First all ends at `node_a`, then all at `node_b`; directions point towards the node.
    """
    near, far = _junction_window(graph)
    count = np.diff(graph.offsets)
    index = np.concatenate((
        graph.offsets[:-1] + near[:, 0], graph.offsets[1:] - 1 - near[:, 1],
        graph.offsets[:-1] + far[:, 0], graph.offsets[1:] - 1 - far[:, 1],
    )).reshape(2, -1)  # fmt: skip
    start = np.column_stack((graph.x_px[index[0]], graph.y_px[index[0]]))
    behind = np.column_stack((graph.x_px[index[1]], graph.y_px[index[1]]))
    node = np.concatenate((graph.node_a, graph.node_b))
    short = np.tile(count, 2) < 3
    start[short] = behind[short]
    towards = start - behind
    size = np.hypot(towards[:, 0], towards[:, 1])
    at_node = np.column_stack((graph.node_x_px[node], graph.node_y_px[node]))
    towards = np.where((size < 0.5)[:, None], at_node - start, towards)
    size = np.maximum(np.hypot(towards[:, 0], towards[:, 1]), 1e-9)
    return node, start, towards / size[:, None]


def _junction_window(graph: VesselGraph) -> tuple[IntArray, IntArray]:
    """Return how many points from each end (n, 2) the window starts and stops in which a branch tells its direction."""
    count = np.diff(graph.offsets)[:, None]
    radius = end_radius(graph)
    widest = np.zeros(graph.n_nodes)
    nodes = np.column_stack((graph.node_a, graph.node_b))
    np.maximum.at(widest, nodes, radius)
    branching = graph.node_kind[nodes] == NodeKind.BRANCHING
    near = np.where(branching, np.ceil(JUNCTION_RADII * widest[nodes]), 0)
    near = np.minimum(near, (count - 1) // 3).astype(np.int64)
    reach = np.maximum(DIRECTION_LEAST_PX, DIRECTION_RADII * radius)
    far = np.minimum(near + np.ceil(reach), count - 1).astype(np.int64)
    return near, far


def _lead_in(graph: VesselGraph) -> VesselGraph:
    """Replace the points inside each junction by a straight line to its node."""
    near, _ = _junction_window(graph)
    count = np.diff(graph.offsets)
    k = position(graph.offsets)
    segment = owner(graph.offsets)
    from_end = count[segment] - 1 - k
    keep = (k >= near[segment, 0]) & (from_end >= near[segment, 1])
    keep |= (k == 0) | (from_end == 0)
    x, y = graph.x_px.copy(), graph.y_px.copy()
    x[graph.offsets[:-1]], y[graph.offsets[:-1]] = graph.node_x_px[graph.node_a], graph.node_y_px[graph.node_a]
    x[graph.offsets[1:] - 1], y[graph.offsets[1:] - 1] = graph.node_x_px[graph.node_b], graph.node_y_px[graph.node_b]
    offsets = offsets_of(np.bincount(segment[keep], minlength=graph.n_segments))
    x, y, offsets, (seed,) = resample(x[keep], y[keep], offsets, (graph.seed_radius_px[keep],))
    return replace(graph, x_px=x, y_px=y, offsets=offsets, seed_radius_px=seed)


def in_fixed_order(graph: VesselGraph) -> VesselGraph:
    """Number nodes by (y, x), turn each segment from its lower node to its higher, and sort segments likewise.

    Equal pictures give equal numbers whatever the order in which they were traced.
    """
    return order_of(graph)[0]


def order_of(graph: VesselGraph) -> tuple[VesselGraph, IntArray, IntArray]:
    """Return the graph in its fixed order, and the old index of each of its segments and of each of its points."""
    by_place = np.lexsort((graph.node_x_px, graph.node_y_px))
    rank = np.empty(graph.n_nodes, np.int64)
    rank[by_place] = np.arange(graph.n_nodes)
    a, b = rank[graph.node_a], rank[graph.node_b]
    count = np.diff(graph.offsets)
    second, second_last = graph.offsets[:-1] + 1, graph.offsets[1:] - 2
    turned_ring = (a == b) & (
        (graph.y_px[second] > graph.y_px[second_last])
        | ((graph.y_px[second] == graph.y_px[second_last]) & (graph.x_px[second] > graph.x_px[second_last]))
    )
    turn = (a > b) | turned_ring
    a, b = np.where(turn, b, a), np.where(turn, a, b)
    middle = graph.offsets[:-1] + count // 2
    order = np.lexsort((graph.x_px[middle], graph.y_px[middle], b, a))
    new_offsets = offsets_of(count[order])
    k = position(new_offsets)
    start, size, turned = (np.repeat(values[order], count[order]) for values in (graph.offsets[:-1], count, turn))
    points = start + np.where(turned, size - 1 - k, k)
    new_index = np.empty(graph.n_segments, np.int64)
    new_index[order] = np.arange(graph.n_segments)
    mapped = new_index[np.column_stack((graph.crossings.segment_over, graph.crossings.segment_under))]
    mapped = np.where(graph.crossings.over_told[:, None], mapped, np.sort(mapped, axis=1))
    by_row = np.lexsort((graph.crossings.x_px, graph.crossings.y_px))
    ordered = replace(
        graph, node_x_px=graph.node_x_px[by_place], node_y_px=graph.node_y_px[by_place],
        node_kind=graph.node_kind[by_place], node_a=a[order], node_b=b[order], offsets=new_offsets,
        x_px=graph.x_px[points], y_px=graph.y_px[points], seed_radius_px=graph.seed_radius_px[points],
        vessel_class=graph.vessel_class[order], class_probability=graph.class_probability[order],
        segment_flags=graph.segment_flags[order],
        crossings=Crossings(
            graph.crossings.x_px[by_row],
            graph.crossings.y_px[by_row],
            mapped[by_row, 0],
            mapped[by_row, 1],
            graph.crossings.probability[by_row],
            graph.crossings.over_told[by_row],
        ),
    )  # fmt: skip
    return ordered, order, points


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
