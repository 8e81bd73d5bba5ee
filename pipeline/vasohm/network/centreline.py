"""Sub-pixel centrelines by the midpoint of both edges, and vessel ends walked to where the vessel truly ends."""

from dataclasses import replace

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray
from vasohm.image.blocks import filtered
from vasohm.image.prepare import PreparedImage
from vasohm.network.graph import NodeKind, VesselGraph, branch_directions, centre_junctions, end_radius, in_fixed_order
from vasohm.network.groups import median_by
from vasohm.network.passages import crossing_windows, draw_passages, in_windows
from vasohm.network.paths import offsets_of, owner, position, resample, running_median, smooth, tangents, twice

ROUNDS = 3
BESIDE_PX = 3  # profiles reach this much further than 2 radii
LARGEST_SHIFT_RADII = 0.5
MEDIAN_POINTS = 5
OFFSET_SIGMA_PX = 1.5
RIM_PX = 3.0  # a vessel seen to within this distance of the border of the field is cut by it
END_RADII = 2.0  # a skeleton stops about one radius before a round end
BORDER_RADII = 4.0  # and a wide vessel's line well before the border: there filters have but half of its flanks
TIP_PX = 4  # and this many pixels more of it are drawn anew
NEW_POINT_PX = 0.5
LEAST_POINTS = 4  # a segment keeps at least so many
SMOOTHING_REACH_PX = 8
CHUNK_POINTS = 8192  # profiles of so many points at once: memory stays small, and they fit a processor's cache
BORDER_STEP_PX = 0.25
BORDER_HALVINGS = 20  # to a millionth of a pixel
LINE_PX = 1.5  # a mask nowhere wider than twice this is drawn lines and tells no width to search in
SEARCH_RADII_PX = (1.0, 2.0, 4.0, 8.0, 16.0, 32.0)


def refine_centrelines(graph: VesselGraph, prepared: PreparedImage) -> VesselGraph:
    """Move each centreline to the midpoint of the vessel's two edges; then lead branches into their nodes anew.

    Notes
    -----
    Offsets are half the difference of the two half-height distances, on profiles averaged along the vessel, as the
    midpoint of both edges is not pulled inwards in a bend as a ridge's maximum is.
    """
    if graph.n_segments == 0:
        return graph
    signal = _smoothed(prepared, 0.7)
    if graph.seed_radius_px.max() <= LINE_PX:
        graph = _with_seen_radius(graph, signal)
    x, y, offsets, seed = graph.x_px, graph.y_px, graph.offsets, graph.seed_radius_px
    windows = crossing_windows(graph)
    unseen = _near_branching(graph) | in_windows(windows, graph.n_points)
    ends = np.concatenate((offsets[:-1], offsets[1:] - 1))
    for _ in range(ROUNDS):
        tx, ty = tangents(smooth(x, offsets, 2.0), smooth(y, offsets, 2.0), offsets)
        shift = edge_midpoints(signal, (x, y), (-ty, tx), smooth(seed, offsets, 2.0), offsets)
        shift[unseen] = 0
        shift = smooth(running_median(shift, offsets, MEDIAN_POINTS), offsets, OFFSET_SIGMA_PX)
        shift = np.clip(shift, -LARGEST_SHIFT_RADII * seed - 0.5, LARGEST_SHIFT_RADII * seed + 0.5)
        shift[ends[_node_of_ends(graph, NodeKind.BRANCHING)]] = 0
        x, y = twice(x - shift * ty, offsets), twice(y + shift * tx, offsets)
    x, y = draw_passages(x, y, offsets, windows)
    node_x, node_y = graph.node_x_px.copy(), graph.node_y_px.copy()
    free = ~_node_of_ends(graph, NodeKind.BRANCHING)
    nodes = np.concatenate((graph.node_a, graph.node_b))
    node_x[nodes[free]], node_y[nodes[free]] = x[ends[free]], y[ends[free]]
    x, y, offsets, (seed,) = resample(x, y, offsets, (seed,))
    return centre_junctions(
        replace(graph, x_px=x, y_px=y, offsets=offsets, seed_radius_px=seed, node_x_px=node_x, node_y_px=node_y)
    )


def _smoothed(prepared: PreparedImage, sigma_px: float) -> Float32Array:
    def smooth(signal: Float32Array) -> Float32Array:
        return np.asarray(ndimage.gaussian_filter(signal, sigma_px, mode="nearest"))

    return filtered(prepared.signal, smooth, SMOOTHING_REACH_PX)


def _with_seen_radius(graph: VesselGraph, signal: Float32Array) -> VesselGraph:
    """Give each segment the first radius to search with that its half-height width fits into."""
    tx, ty = tangents(smooth(graph.x_px, graph.offsets, 2.0), smooth(graph.y_px, graph.offsets, 2.0), graph.offsets)
    segment = owner(graph.offsets)
    radius = np.full(graph.n_segments, SEARCH_RADII_PX[-1])
    for tried in reversed(SEARCH_RADII_PX):
        reach = np.full(graph.n_points, tried)
        left, right = half_widths(signal, (graph.x_px, graph.y_px), (-ty, tx), (reach, graph.offsets))
        width = median_by(segment, (left + right) / 2, graph.n_segments)
        radius = np.where(width <= tried, width, radius)
    return replace(graph, seed_radius_px=np.maximum(radius, 0.5)[segment])


def _node_of_ends(graph: VesselGraph, kind: NodeKind) -> BoolArray:
    return np.asarray(graph.node_kind[np.concatenate((graph.node_a, graph.node_b))] == kind)


def _near_branching(graph: VesselGraph) -> BoolArray:
    """Points within one and a half widths of a branching: their profiles hold the other branches too."""
    radius = end_radius(graph)
    nodes = np.column_stack((graph.node_a, graph.node_b))
    widest = np.zeros(graph.n_nodes)
    np.maximum.at(widest, nodes, radius)
    reach = np.where(graph.node_kind[nodes] == NodeKind.BRANCHING, 1.5 * widest[nodes] + 1, 0)
    segment, k = owner(graph.offsets), position(graph.offsets)
    from_end = np.diff(graph.offsets)[segment] - 1 - k
    return np.asarray((k < reach[segment, 0]) | (from_end < reach[segment, 1]))


def edge_midpoints(
    signal: Float32Array, at: tuple[FloatArray, FloatArray], normal: tuple[FloatArray, FloatArray],
    radius: FloatArray, offsets: IntArray,
) -> FloatArray:  # fmt: skip
    """Signed distance (n_points,) from each point to the midpoint of the two half-height edges along its normal."""
    left, right = half_widths(signal, at, normal, (radius, offsets))
    return (left - right) / 2


def half_widths(
    signal: Float32Array, at: tuple[FloatArray, FloatArray], normal: tuple[FloatArray, FloatArray],
    of: tuple[FloatArray, IntArray],
) -> tuple[FloatArray, FloatArray]:  # fmt: skip
    """Distances (n_points,) from each point to the half-height edge along its normal and against it.

    Points are handled in groups of like radius, so that thin vessels do not pay for wide profiles; profiles are
    averaged over three neighbouring points of the same segment.
    """
    radius, offsets = of
    size = np.ceil(np.log2(np.maximum(radius, 1.0))).astype(np.int64)
    left, right = np.zeros(len(radius)), np.zeros(len(radius))
    segment = owner(offsets)
    for group in np.unique(size):
        members = np.nonzero(size == group)[0]
        reach = int(2 * 2.0**group + BESIDE_PX)
        span = np.arange(-reach, reach + 1)
        for start in range(0, len(members), CHUNK_POINTS):
            before = min(start, 1)  # a neighbour on each side goes into the mean of the outermost
            these = members[start - before : start + CHUNK_POINTS + 1]
            px = at[0][these, None] + span * normal[0][these, None]
            py = at[1][these, None] + span * normal[1][these, None]
            profile = ndimage.map_coordinates(signal, [py, px], order=1, mode="nearest", output=np.float64)
            profile = _beside_mean(profile, these, segment)[before : before + CHUNK_POINTS]
            inner = these[before : before + CHUNK_POINTS]
            left[inner] = _to_half(profile[:, reach:], radius[inner])
            right[inner] = _to_half(profile[:, reach::-1], radius[inner])
    return left, right


def _beside_mean(profile: FloatArray, index: IntArray, segment: IntArray) -> FloatArray:
    """Mean with the rows of the neighbouring points, where these are in the group and on the same segment."""
    linked = (np.diff(index) == 1) & (segment[index[1:]] == segment[index[:-1]])
    total, count = profile.copy(), np.ones(len(index))
    total[1:][linked] += profile[:-1][linked]
    total[:-1][linked] += profile[1:][linked]
    count[1:] += linked
    count[:-1] += linked
    return total / count[:, None]


def _to_half(side: FloatArray, radius: FloatArray) -> FloatArray:
    """Walk inwards from the lowest place of a side to the first rise above half height."""
    steps = np.arange(side.shape[1])
    reach = np.minimum(2 * radius + BESIDE_PX, side.shape[1] - 1)
    visible = np.where(steps[None, :] <= reach[:, None], side, np.inf)
    lowest = visible.argmin(axis=1)
    rows = np.arange(len(side))
    inner = np.where(steps[None, :] <= np.maximum(0.6 * radius, 1)[:, None], side, -np.inf)
    half = (inner.max(axis=1) + visible[rows, lowest]) / 2
    high = (side >= half[:, None]) & (steps[None, :] < lowest[:, None])
    last = side.shape[1] - 1 - high[:, ::-1].argmax(axis=1)
    last = np.where(high.any(axis=1), last, 0)
    following = np.minimum(last + 1, side.shape[1] - 1)
    fall = np.maximum(side[rows, last] - side[rows, following], 1e-12)
    return np.asarray(last + np.clip((side[rows, last] - half) / fall, 0, 1))


def extend_ends(graph: VesselGraph, prepared: PreparedImage) -> VesselGraph:
    """Lead dead ends on to where the contrast falls to half, or to the border of the field, where they become rims.

    The last points before an end, where skeletons bend and filters reach past the vessel, are drawn anew.
    """
    if graph.n_segments == 0:
        return graph
    graph, cut_px = _without_tips(graph, prepared)
    node, _, towards = branch_directions(graph)
    loose = np.nonzero(graph.node_kind[node] == NodeKind.END)[0]
    if len(loose) == 0:
        return in_fixed_order(graph)
    n = graph.n_segments
    radius = end_radius(graph).T.ravel()[loose]
    tip = np.where(loose < n, graph.offsets[loose % n], graph.offsets[loose % n + 1] - 1)
    x, y = graph.x_px[tip], graph.y_px[tip]
    tx, ty = towards[loose, 0], towards[loose, 1]
    reach = cut_px[loose] + END_RADII * radius
    longest = cut_px[loose] + BORDER_RADII * radius
    to_border = _distance_to_border(prepared.fov, (x, y), (tx, ty), longest + RIM_PX)
    to_end = _distance_to_half(prepared.signal, (x, y), (tx, ty), (radius, longest))
    is_rim = np.isfinite(to_border) & (to_end >= to_border - RIM_PX)  # it ends before the border where contrast does
    further = np.where(is_rim, to_border, np.minimum(to_end, reach))
    kind = graph.node_kind.copy()
    kind[node[loose[is_rim]]] = NodeKind.RIM
    node_x, node_y = graph.node_x_px.copy(), graph.node_y_px.copy()
    node_x[node[loose]], node_y[node[loose]] = x + further * tx, y + further * ty
    return in_fixed_order(_with_tips(graph, (node_x, node_y, kind), loose, further > NEW_POINT_PX))


def _without_tips(graph: VesselGraph, prepared: PreparedImage) -> tuple[VesselGraph, FloatArray]:
    """Cut what lies past each dead end, and the last points before it.

    A filter's lobes can lead a line past the end of a strong vessel: first all points go from which on the signal
    stays below half of the segment's own. The second value is how many pixels each end (2 n_segments,) lost.
    """
    nodes = np.column_stack((graph.node_a, graph.node_b))
    count = np.diff(graph.offsets)[:, None]
    segment, k = owner(graph.offsets), position(graph.offsets)
    signal = _smoothed(prepared, 1.0)
    row = np.clip(np.rint(graph.y_px), 0, graph.shape[0] - 1).astype(np.int64)
    column = np.clip(np.rint(graph.x_px), 0, graph.shape[1] - 1).astype(np.int64)
    on_axis = signal[row, column].astype(np.float64)
    seen = on_axis >= 0.5 * median_by(segment, on_axis, graph.n_segments)[segment]
    from_end = np.column_stack((k, count[segment, 0] - 1 - k))
    past = np.column_stack(
        [np.minimum.reduceat(np.where(seen, side, count[segment, 0]), graph.offsets[:-1]) for side in from_end.T]
    )
    cut = np.minimum(past + np.ceil(end_radius(graph)) + TIP_PX, past + (count - 1 - past.sum(axis=1)[:, None]) // 3)
    cut = np.where((graph.node_kind[nodes] == NodeKind.END) & (past < count // 2), cut, 0)
    cut = np.where(count - cut.sum(axis=1)[:, None] >= LEAST_POINTS, cut, 0).astype(np.int64)
    keep = (from_end >= cut[segment]).all(axis=1)
    x, y, seed = graph.x_px[keep], graph.y_px[keep], graph.seed_radius_px[keep]
    offsets = offsets_of(np.bincount(segment[keep], minlength=graph.n_segments))
    lost = np.maximum(cut - past, 0).T.ravel().astype(np.float64)
    return replace(graph, x_px=x, y_px=y, seed_radius_px=seed, offsets=offsets), lost


def _with_tips(
    graph: VesselGraph, nodes: tuple[FloatArray, FloatArray, IntArray], loose: IntArray, longer: BoolArray
) -> VesselGraph:
    """Put the moved end nodes on their paths: as a new point where that is worth one, else in place of the last."""
    n = graph.n_segments
    node_x, node_y, kind = nodes
    before, behind = np.zeros(n, dtype=bool), np.zeros(n, dtype=bool)
    before[loose[longer & (loose < n)]] = True
    behind[loose[longer & (loose >= n)] - n] = True
    counts = np.diff(graph.offsets)
    offsets = offsets_of(counts + before + behind)
    inner = np.ones(offsets[-1], dtype=bool)
    inner[offsets[:-1][before]] = False
    inner[offsets[1:][behind] - 1] = False
    x, y, seed = (np.empty(offsets[-1]) for _ in range(3))
    x[inner], y[inner], seed[inner] = graph.x_px, graph.y_px, graph.seed_radius_px
    seed[offsets[:-1][before]] = graph.seed_radius_px[graph.offsets[:-1][before]]
    seed[offsets[1:][behind] - 1] = graph.seed_radius_px[graph.offsets[1:][behind] - 1]
    for ends, end_nodes in ((offsets[:-1], graph.node_a), (offsets[1:] - 1, graph.node_b)):
        x[ends], y[ends] = node_x[end_nodes], node_y[end_nodes]
    x, y, offsets, (seed,) = resample(x, y, offsets, (seed,))
    return replace(
        graph, x_px=x, y_px=y, offsets=offsets, seed_radius_px=seed, node_x_px=node_x, node_y_px=node_y, node_kind=kind
    )


def _distance_to_border(
    fov: BoolArray, at: tuple[FloatArray, FloatArray], along: tuple[FloatArray, FloatArray], reach: FloatArray
) -> FloatArray:
    """Distance to the first place outside the field of view on each ray; infinite where there is none in reach."""
    height, width = fov.shape

    def is_outside(distance: FloatArray) -> BoolArray:
        x, y = at[0][:, None] + distance * along[0][:, None], at[1][:, None] + distance * along[1][:, None]
        row, column = np.floor(y + 0.5).astype(np.int64), np.floor(x + 0.5).astype(np.int64)
        off = (row < 0) | (column < 0) | (row >= height) | (column >= width)
        return np.asarray(off | ~fov[np.clip(row, 0, height - 1), np.clip(column, 0, width - 1)])

    steps = np.arange(0, float(reach.max()) + BORDER_STEP_PX, BORDER_STEP_PX)[None, :]
    outside = is_outside(steps) & (steps <= reach[:, None])
    high = steps[0, outside.argmax(axis=1)][:, None]
    low = np.maximum(high - BORDER_STEP_PX, 0)
    for _ in range(BORDER_HALVINGS):
        middle = (low + high) / 2
        beyond = is_outside(middle)
        low, high = np.where(beyond, low, middle), np.where(beyond, middle, high)
    return np.where(outside.any(axis=1), high[:, 0], np.inf)


def _distance_to_half(
    signal: Float32Array,
    at: tuple[FloatArray, FloatArray],
    along: tuple[FloatArray, FloatArray],
    of: tuple[FloatArray, FloatArray],
) -> FloatArray:
    """Distance at which the signal on each ray first falls below half of what it is behind the tip, at most `reach`."""
    radius, reach = of
    steps = np.arange(-np.ceil(3 * radius.max()) - 3, np.ceil(reach.max()) + 1, 0.5)
    profile = np.zeros((len(radius), len(steps)))
    for beside in (-0.4, 0.0, 0.4):
        x = at[0][:, None] + steps * along[0][:, None] - beside * radius[:, None] * along[1][:, None]
        y = at[1][:, None] + steps * along[1][:, None] + beside * radius[:, None] * along[0][:, None]
        profile += ndimage.map_coordinates(signal, [y, x], order=1, mode="nearest", output=np.float64) / 3
    profile = ndimage.gaussian_filter1d(profile, 1.5, axis=1)
    behind = (steps[None, :] <= 0) & (steps[None, :] >= -3 * radius[:, None] - 3)
    full = np.where(behind, profile, 0).sum(axis=1) / np.maximum(behind.sum(axis=1), 1)
    low = (profile < 0.5 * full[:, None]) & (steps[None, :] >= 0)
    return np.where(low.any(axis=1), np.minimum(steps[low.argmax(axis=1)], reach), reach)
