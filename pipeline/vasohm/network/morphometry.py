"""Shape of segments, branchings, networks and the whole image."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.network.along import arc_shares
from vasohm.network.graph import NodeKind, VesselGraph, label_networks
from vasohm.network.groups import mean_by, median_by, sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph

# A branching is read between these distances from its node, in radii of the parent. Where the lumina of two children
# still touch, a centreline found in a picture is bent towards both: up to two radii in, angles come out 6° too small,
# from 2.5 on within 1° (a drawn fork of 31° and 28°).
RADIUS_RADII = (1.0, 4.0)
DIRECTION_RADII = (2.5, 6.0)
BOXES_ACROSS = 4  # larger boxes are all occupied


@dataclass(frozen=True, slots=True, eq=False)
class Branchings:
    """One entry a bifurcation (a node where exactly three segments meet); indices count from 0, NaN where undefined."""

    node: IntArray
    parent: IntArray
    child_1: IntArray  # the wider child
    child_2: IntArray
    radius_parent_um: FloatArray
    radius_child_1_um: FloatArray
    radius_child_2_um: FloatArray
    angle_1_deg: FloatArray  # between the parent's direction and child 1
    angle_2_deg: FloatArray
    area_ratio: FloatArray
    asymmetry: FloatArray
    junction_exponent: FloatArray
    flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Morphometry:
    """Geometry in numbers; lengths and areas in micrometres."""

    branchings: Branchings
    # segments
    radius_mean_um: FloatArray  # (n_segments,)
    radius_sd_um: FloatArray  # measurement noise taken out
    tortuosity: FloatArray
    # networks (index as in node_network)
    node_network: IntArray
    segment_network: IntArray
    network_length_um: FloatArray
    network_area_um2: FloatArray
    network_volume_um3: FloatArray
    network_loops: IntArray
    # the image
    fov_area_um2: float
    vessel_area_um2: float
    length_um: float
    radius_mean_um_image: float  # length-weighted
    tortuosity_mean: float  # length-weighted
    box_dimension: float

    def __post_init__(self) -> None:
        freeze(self)


def describe_shape(measured: MeasuredGraph, mask_pixels: BoolArray, fov: BoolArray) -> Morphometry:
    """Measure the shape of segments, branchings, networks and the image.

    Parameters
    ----------
    measured : MeasuredGraph
        Centrelines and radii.
    mask_pixels, fov : (h, w) bool arrays
        Vessel pixels, and pixels of the field of view; areas and the box dimension count inside it alone.

    Returns
    -------
    Morphometry

    Notes
    -----
    `radius_mean_um` weighs the points by arc length. `radius_sd_um` is r times the spread of ln r along the segment
    with the measurement's part taken out: independent estimates scatter more than the vessel does, by the mean variance
    of a point less that of the segment's mean; a posterior's mode scatters less, by the same amount.
    `tortuosity` is arc over chord, NaN for closed rings. A network's area is ∫ 2 r ds, its volume ∫ π r² ds, its loops
    segments - nodes + 1. Branchings: see `find_branchings`. Box dimension: see `box_dimension`.
    """
    graph, n = measured.graph, measured.graph.n_segments
    segment, share = owner(graph.offsets), arc_shares(measured)
    node_network, segment_network = label_networks(graph)
    n_networks = int(segment_network.max(initial=-1)) + 1
    length = measured.length_um
    radius_mean = mean_by(segment, measured.radius_um, share, n)
    mean_square = mean_by(segment, np.square(measured.radius_um), share, n)
    is_open = (graph.node_a != graph.node_b) & (measured.chord_um > 0)
    tortuosity = np.divide(length, measured.chord_um, out=np.full(n, np.nan), where=is_open)
    pixel_um2 = measured.pixel_size_um**2
    inside = mask_pixels & fov
    edges = np.bincount(segment_network, minlength=n_networks)
    return Morphometry(
        branchings=find_branchings(measured),
        radius_mean_um=radius_mean,
        radius_sd_um=radius_mean * _ln_radius_sd(measured),
        tortuosity=tortuosity,
        node_network=node_network,
        segment_network=segment_network,
        network_length_um=sum_by(segment_network, length, n_networks),
        network_area_um2=sum_by(segment_network, 2.0 * length * radius_mean, n_networks),
        network_volume_um3=sum_by(segment_network, np.pi * length * mean_square, n_networks),
        network_loops=edges - np.bincount(node_network, minlength=n_networks) + 1,
        fov_area_um2=float(np.count_nonzero(fov) * pixel_um2),
        vessel_area_um2=float(np.count_nonzero(inside) * pixel_um2),
        length_um=float(length.sum()),
        radius_mean_um_image=_mean(radius_mean, length),
        tortuosity_mean=_mean(tortuosity, length),
        box_dimension=box_dimension(inside, fov),
    )


def _mean(values: FloatArray, weights: FloatArray) -> float:
    known = np.isfinite(values) & (weights > 0)
    return float(np.average(values[known], weights=weights[known])) if known.any() else np.nan


def _ln_radius_sd(measured: MeasuredGraph) -> FloatArray:
    segment, n, share = owner(measured.graph.offsets), measured.graph.n_segments, arc_shares(measured)
    ln_radius = np.log(measured.radius_um)
    ln_mean = mean_by(segment, ln_radius, share, n)
    spread = mean_by(segment, np.square(ln_radius - ln_mean[segment]), share, n)
    point_variance = mean_by(segment, np.square(measured.ln_radius_random_se), share, n)
    noise = point_variance - measured.covariance.segment_variance(share)
    return np.sqrt(np.maximum(spread + measured.noise_sign * np.maximum(noise, 0.0), 0.0))


@dataclass(frozen=True, slots=True, eq=False)
class _Ends:
    """The segment ends that meet at bifurcations; three rows a bifurcation."""

    segment: IntArray  # (n_bifurcations, 3)
    side: IntArray  # 0 where the segment begins at the node, 1 where it ends there
    node: IntArray  # (n_bifurcations,)


def find_branchings(measured: MeasuredGraph) -> Branchings:
    """Measure calibres and angles of every bifurcation.

    Notes
    -----
    The parent is the widest of the three segments beside the node. Radii are medians over the points from one to four
    parent radii from the node; directions are those of the line through the centreline (total least squares) from 2.5
    to 6 parent radii. The angles lie between the parent's direction carried on and each child's. `area_ratio` is
    (r1² + r2²) / r0², `asymmetry` is (r2 / r1)² with r1 >= r2, and the junction exponent m solves r0^m = r1^m + r2^m;
    it exists only where the parent is wider than both children and is else NaN. A segment that ends before the zone is
    read over the half beside the node and the branching is flagged `short`.

    References
    ----------
    Murray CD (1926) The physiological principle of minimum work. Proc Natl Acad Sci USA 12:207-214,
    doi:10.1073/pnas.12.3.207.
    """
    ends = _bifurcations(measured.graph)
    rough = _rough_radius(measured, ends)
    readings = _read_zone(measured, ends, rough.max(axis=1, initial=0.0))
    radius, direction, short = readings
    order = np.argsort(-radius, axis=1, kind="stable")
    radius = np.take_along_axis(radius, order, axis=1)
    direction = np.take_along_axis(direction, order[:, :, None], axis=1)
    segment = np.take_along_axis(ends.segment, order, axis=1)
    parent, wide, narrow = radius.T
    on = -direction[:, 0]
    doubt = np.bitwise_or.reduce(measured.segment_flags[segment] & int(Flag.UNRESOLVED | Flag.INFERRED), axis=1)
    return Branchings(
        node=ends.node,
        parent=segment[:, 0],
        child_1=segment[:, 1],
        child_2=segment[:, 2],
        radius_parent_um=parent,
        radius_child_1_um=wide,
        radius_child_2_um=narrow,
        angle_1_deg=_angle_deg(on, direction[:, 1]),
        angle_2_deg=_angle_deg(on, direction[:, 2]),
        area_ratio=(wide**2 + narrow**2) / parent**2,
        asymmetry=np.square(narrow / wide),
        junction_exponent=junction_exponent(parent, wide, narrow),
        flags=doubt | np.where(short.any(axis=1), int(Flag.SHORT), 0),
    )


def _bifurcations(graph: VesselGraph) -> _Ends:
    n = graph.n_segments
    node = np.concatenate([graph.node_a, graph.node_b])
    degree = np.bincount(node, minlength=graph.n_nodes)
    has_ring = np.zeros(graph.n_nodes, dtype=bool)
    has_ring[graph.node_a[graph.node_a == graph.node_b]] = True
    chosen = (degree == 3) & (graph.node_kind == NodeKind.BRANCHING) & ~has_ring
    order = np.argsort(node, kind="stable")
    at = order[chosen[node[order]]].reshape(-1, 3)
    return _Ends(at % max(n, 1), at // max(n, 1), np.flatnonzero(chosen))


def _rough_radius(measured: MeasuredGraph, ends: _Ends) -> FloatArray:
    """Mean radius (n_bifurcations, 3) over the half of each segment beside the node."""
    segment, n, share = owner(measured.graph.offsets), measured.graph.n_segments, arc_shares(measured)
    near_a = measured.s_um <= 0.5 * measured.length_um[segment]
    halves = np.stack([mean_by(segment, measured.radius_um, share * near, n) for near in (near_a, ~near_a)])
    whole = mean_by(segment, measured.radius_um, share, n)
    return np.where(np.isfinite(halves), halves, whole)[ends.side, ends.segment]


def _read_zone(measured: MeasuredGraph, ends: _Ends, parent_um: FloatArray) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Median radius (n, 3), direction away from the node (n, 3, 2) and whether the zone was not reached (n, 3)."""
    graph, point_segment = measured.graph, owner(measured.graph.offsets)
    n_rows = ends.segment.size
    radius, short = np.zeros(n_rows), np.zeros(n_rows, dtype=bool)
    direction = np.zeros((n_rows, 2))
    for side in (0, 1):
        row_of = np.full(graph.n_segments, -1)
        rows = np.flatnonzero(ends.side.ravel() == side)
        row_of[ends.segment.ravel()[rows]] = rows
        point = np.flatnonzero(row_of[point_segment] >= 0)
        row = row_of[point_segment[point]]
        node = ends.node[row // 3]
        x = (graph.x_px[point] - graph.node_x_px[node]) * measured.pixel_size_um
        y = (graph.y_px[point] - graph.node_y_px[node]) * measured.pixel_size_um
        parent = parent_um[row // 3]
        away, length = np.hypot(x, y) / parent, measured.length_um[point_segment[point]]
        from_end = np.abs(side * length - measured.s_um[point])
        away = np.where(from_end <= 2.0 * DIRECTION_RADII[1] * parent, away, np.inf)  # not where the vessel comes back
        beside = from_end <= 0.5 * length
        wide, _ = _within(away, RADIUS_RADII, (row, n_rows), beside)
        ahead, few = _within(away, DIRECTION_RADII, (row, n_rows), beside)
        radius[rows] = median_by(row[wide], measured.radius_um[point[wide]], n_rows)[rows]
        direction[rows] = _directions(row[ahead], (x[ahead], y[ahead]), few)[rows]
        short[rows] = few[rows]
    return radius.reshape(-1, 3), direction.reshape(-1, 3, 2), short.reshape(-1, 3)


def _within(
    away: FloatArray, zone: tuple[float, float], group: tuple[IntArray, int], beside: BoolArray
) -> tuple[BoolArray, BoolArray]:
    """Points inside a zone, or beside the node where a row has fewer than three there; and which rows these are."""
    row, n_rows = group
    inside = (away >= zone[0]) & (away <= zone[1])
    few = np.bincount(row[inside], minlength=n_rows) < 3
    return np.where(few[row], beside, inside), few


def _directions(row: IntArray, place: tuple[FloatArray, FloatArray], few: BoolArray) -> FloatArray:
    """Unit vector (n_rows, 2) along the line through each row's points, away from the node at the origin.

    Where they are few, the vector from the node to their mean.
    """
    n, one = few.size, np.ones(row.size)
    x, y = place
    mean_x, mean_y = mean_by(row, x, one, n), mean_by(row, y, one, n)
    dx, dy = x - mean_x[row], y - mean_y[row]
    xx, xy, yy = (sum_by(row, product, n) for product in (dx * dx, dx * dy, dy * dy))
    angle = np.where(few, np.arctan2(mean_y, mean_x), 0.5 * np.arctan2(2.0 * xy, xx - yy))
    line = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    backwards = line[:, 0] * mean_x + line[:, 1] * mean_y < 0
    return np.where(backwards[:, None], -line, line)


def _angle_deg(first: FloatArray, second: FloatArray) -> FloatArray:
    cross = first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]
    return np.degrees(np.arctan2(np.abs(cross), np.sum(first * second, axis=1)))


def junction_exponent(parent: FloatArray, wide: FloatArray, narrow: FloatArray) -> FloatArray:
    """Solve r0^m = r1^m + r2^m for m; NaN where the parent is not wider than both children.

    Newton's method from ln 2 / ln(r0 / r2), where the convex, falling (r1/r0)^m + (r2/r0)^m is at least 1: it rises to
    the root without passing it.
    """
    solvable = (parent > np.maximum(wide, narrow)) & (np.minimum(wide, narrow) > 0)
    ln_wide = np.log(np.where(solvable, np.maximum(wide, narrow) / parent, 0.5))
    ln_narrow = np.log(np.where(solvable, np.minimum(wide, narrow) / parent, 0.5))
    exponent = np.log(2.0) / -ln_narrow
    for _ in range(100):
        first, second = np.exp(exponent * ln_wide), np.exp(exponent * ln_narrow)
        step = (first + second - 1.0) / -(first * ln_wide + second * ln_narrow)
        exponent = exponent + step
        if np.all(np.abs(step) <= 4.0 * np.finfo(float).eps * exponent):
            break
    return np.where(solvable, exponent, np.nan)


def box_dimension(pixels: BoolArray, fov: BoolArray) -> float:
    """Box-counting dimension of a set of pixels inside the field of view.

    Minus the slope of the least-squares line of ln(occupied boxes) on ln(edge), for edges of 2, 4, 8 … px up to a
    quarter of the shorter side of the field of view's bounding box, to whose corner the boxes are aligned. NaN where
    nothing is there or fewer than three edges fit.
    """
    rows, columns = np.flatnonzero(fov.any(axis=1)), np.flatnonzero(fov.any(axis=0))
    if not rows.size or not pixels.any():
        return np.nan
    boxes = pixels[rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1]
    largest = min(boxes.shape) / BOXES_ACROSS
    edge, edges, counts = 1, [], []
    while 2 * edge <= largest:
        boxes = np.pad(boxes, [(0, boxes.shape[0] % 2), (0, boxes.shape[1] % 2)])
        boxes = boxes[::2, ::2] | boxes[1::2, ::2] | boxes[::2, 1::2] | boxes[1::2, 1::2]
        edge *= 2
        edges.append(edge)
        counts.append(np.count_nonzero(boxes))
    if len(edges) < 3:
        return np.nan
    return float(-np.polyfit(np.log(edges), np.log(counts), 1)[0])
