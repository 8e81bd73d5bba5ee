"""Where a branch leaves the lumen of the vessel it comes from: there its own segment begins."""

from dataclasses import replace

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.graph import NodeKind, VesselGraph, branch_directions
from vasohm.network.paths import offsets_of, owner, position

NEAR_RADII = 4.0  # the parent's radius at a branching is read over this many seed radii beside its junction


def leave_parents(graph: VesselGraph, radius_px: FloatArray) -> tuple[VesselGraph, BoolArray]:
    """Cut from each child the stub inside its parent's lumen; nodes stay on the parent's axis.

    At each branching the widest segment is the parent. Its lumen is the tube around its axis, closed by a ball at the
    node; a child's first point is put where its centreline crosses that surface.

    Parameters
    ----------
    graph : segments that run into their nodes.
    radius_px : (n_points,) measured lumen radius.

    Returns
    -------
    The shortened graph, and (n_points,) bool: which of the old points it keeps, in the same order. A segment that lies
    wholly inside its parents keeps its two middle points.
    """
    node, _, towards = branch_directions(graph)
    calibre = _calibre(graph, radius_px)
    parent = _widest_end(graph, node, calibre)
    n = graph.n_segments
    segment, k = owner(graph.offsets), position(graph.offsets)
    count = np.diff(graph.offsets)
    depth = np.full((2, graph.n_points), -np.inf)
    for side, from_end in ((0, k), (1, count[segment] - 1 - k)):
        end = segment + side * n
        at = node[end]
        child = (graph.node_kind[at] == NodeKind.BRANCHING) & (parent[at] != end) & (parent[at] >= 0)
        px, py = graph.x_px - graph.node_x_px[at], graph.y_px - graph.node_y_px[at]
        ux, uy = -towards[parent[at], 0], -towards[parent[at], 1]
        along = px * ux + py * uy
        distance = np.where(along > 0, np.abs(px * uy - py * ux), np.hypot(px, py))
        reach = calibre[parent[at]]
        depth[side] = np.where(child & (from_end <= 6 * reach + 2), reach - distance, -np.inf)
    return _cut(graph, depth, (segment, k, count))


def _calibre(graph: VesselGraph, radius_px: FloatArray) -> FloatArray:
    """Median radius (2 n_segments,) over the stretch beside each end, leaving out the junction itself."""
    count = np.diff(graph.offsets)
    steps = np.arange(1, 9) / 8
    seed = np.median(radius_px[graph.offsets[:-1, None] + ((count - 1)[:, None] * steps).astype(np.int64)], axis=1)
    reach = np.minimum((1 + steps) * 0.5 * NEAR_RADII * seed[:, None] + 1, (count - 1)[:, None])
    near = np.rint(reach).astype(np.int64)
    first = np.median(radius_px[graph.offsets[:-1, None] + near], axis=1)
    last = np.median(radius_px[graph.offsets[1:, None] - 1 - near], axis=1)
    return np.concatenate((first, last))


def _widest_end(graph: VesselGraph, node: IntArray, calibre: FloatArray) -> IntArray:
    """Index of the widest segment end at each node; -1 where none meets."""
    widest = np.full(graph.n_nodes, -1, np.int64)
    order = np.lexsort((-np.arange(len(node)), calibre))
    widest[node[order]] = order
    return widest


def _cut(
    graph: VesselGraph, depth: FloatArray, at: tuple[IntArray, IntArray, IntArray]
) -> tuple[VesselGraph, BoolArray]:
    """Drop each end's leading points inside the parent and put the last of them on its surface."""
    segment, k, count = at
    from_end = count[segment] - 1 - k
    out_a = np.minimum.reduceat(np.where(depth[0] <= 0, k, count[segment]), graph.offsets[:-1])
    out_b = np.minimum.reduceat(np.where(depth[1] <= 0, from_end, count[segment]), graph.offsets[:-1])
    start, stop = np.maximum(out_a - 1, 0), count - 1 - np.maximum(out_b - 1, 0)
    lost = stop - start < 1
    middle = np.minimum(count // 2, count - 1)
    start, stop = np.where(lost, np.maximum(middle - 1, 0), start), np.where(lost, np.maximum(middle, 1), stop)
    x, y = graph.x_px.copy(), graph.y_px.copy()
    for side, index, inward, out in (
        (0, graph.offsets[:-1] + start, 1, out_a), (1, graph.offsets[:-1] + stop, -1, out_b)
    ):  # fmt: skip
        moved = (out > 0) & ~lost
        here, following = index[moved], index[moved] + inward
        inside, outside = depth[side][here], depth[side][following]
        share = np.where(np.isfinite(outside), inside / np.maximum(inside - outside, 1e-12), 0.0)
        x[here] += share * (graph.x_px[following] - graph.x_px[here])
        y[here] += share * (graph.y_px[following] - graph.y_px[here])
    keep = (k >= start[segment]) & (k <= stop[segment])
    return (
        replace(
            graph, offsets=offsets_of(np.bincount(segment[keep], minlength=graph.n_segments)),
            x_px=x[keep], y_px=y[keep], seed_radius_px=graph.seed_radius_px[keep],
        ),
        keep,
    )  # fmt: skip
