"""Bifurcations: calibres, angles, exponents, and how far they are from what would be cheapest."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.network.along import arc_shares
from vasohm.network.graph import NodeKind, VesselGraph
from vasohm.network.groups import mean_by, median_by, sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph

# A branching is read between these distances from its node, in radii of the widest vessel. Where the lumina of two
# children still touch, a centreline found in a picture is bent towards both: up to two radii in, angles come out 6° too
# small, from 2.5 on within 1° (a drawn fork of 31° and 28°).
RADIUS_RADII = (1.0, 4.0)
DIRECTION_RADII = (2.5, 6.0)
DIRECTION_SE_RAD = np.radians(1.0)  # what is left of that bend, in each direction
SMOOTH_PX = 6.0  # over so many pixels the smoothing of centrelines makes their errors alike
NO_FLOW_SHARE = 1e-9  # of the largest flow at a node: less is rounding, and tells no direction
VOLUME, SURFACE = 2.0, 1.0  # power of the radius that a length of vessel costs


@dataclass(frozen=True, slots=True, eq=False)
class Branchings:
    """One entry a bifurcation (a node where exactly three segments meet); indices count from 0, NaN where undefined.

    Arrays named `_se` are standard uncertainties, random and shared parts together.
    """

    node: IntArray
    parent: IntArray
    child_1: IntArray  # the wider child
    child_2: IntArray
    by_flow: BoolArray  # the parent is told by the direction of flow; else it is the widest
    radius_um: FloatArray  # (n, 3) of parent, child 1, child 2
    radius_se_um: FloatArray  # (n, 3)
    angle_deg: FloatArray  # (n, 3) between the parent's direction and child 1, child 2; their sum
    angle_se_deg: FloatArray  # (n, 3)
    area_ratio: FloatArray
    area_ratio_se: FloatArray
    asymmetry: FloatArray
    asymmetry_se: FloatArray
    junction_exponent: FloatArray
    junction_exponent_se: FloatArray
    murray_ratio: FloatArray
    murray_ratio_se: FloatArray
    volume_angle_deg: FloatArray  # (n, 2) of children 1 and 2 for the least volume or pumping power
    volume_angle_se_deg: FloatArray  # (n, 2)
    surface_angle_deg: FloatArray  # (n, 2) for the least surface or drag
    surface_angle_se_deg: FloatArray  # (n, 2)
    volume_imbalance: FloatArray
    surface_imbalance: FloatArray
    flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class _Ends:
    """The segment ends that meet at bifurcations; three columns a bifurcation."""

    segment: IntArray  # (n_bifurcations, 3)
    side: IntArray  # 0 where the segment begins at the node, 1 where it ends there
    node: IntArray  # (n_bifurcations,)


@dataclass(frozen=True, slots=True, eq=False)
class _Readings:
    """What stands beside each node, one column a vessel."""

    radius: FloatArray  # (n, 3)
    random_se: FloatArray  # (n, 3) of ln r
    causes: FloatArray  # (n, 3, k) change of ln r for one standard uncertainty of each shared cause
    direction: FloatArray  # (n, 3, 2) unit vectors away from the node
    direction_se: FloatArray  # (n, 3) in radians; NaN where the zone was not reached
    short: BoolArray  # (n, 3) the zone was not reached

    def sorted_by(self, order: IntArray) -> "_Readings":
        """Columns in another order."""
        vector = order[:, :, None]
        return _Readings(
            np.take_along_axis(self.radius, order, axis=1),
            np.take_along_axis(self.random_se, order, axis=1),
            np.take_along_axis(self.causes, vector, axis=1),
            np.take_along_axis(self.direction, vector, axis=1),
            np.take_along_axis(self.direction_se, order, axis=1),
            np.take_along_axis(self.short, order, axis=1),
        )

    def se_of(self, gradient: FloatArray) -> FloatArray:
        """Standard uncertainty (n,) of what changes by `gradient` (n, 3) with each vessel's ln r."""
        own = np.sum(np.square(gradient * self.random_se), axis=1)
        shared = np.square(np.einsum("ni,nik->nk", gradient, self.causes)).sum(axis=1)
        return np.asarray(np.sqrt(own + shared))


def find_branchings(measured: MeasuredGraph, flow_nl_min: FloatArray) -> Branchings:
    """Measure calibres and angles of every bifurcation.

    Parameters
    ----------
    measured : MeasuredGraph
        Centrelines and radii.
    flow_nl_min : (n_segments,) float
        Flow from `node_a` to `node_b`; NaN where it is not known.

    Returns
    -------
    Branchings
        None for nodes where two or more than three segments meet, or one meets itself.

    Notes
    -----
    The parent is the vessel whose flow alone goes to the node, or alone leaves it (a venule's parent is where both
    children drain); where flow is not known at all three, it is the widest. Radii are medians over the points from one
    to four radii of the widest vessel from the node; directions are those of the line through the centreline (total
    least squares) from 2.5 to 6 such radii. The angles lie between the parent's direction carried on and each child's.
    `area_ratio` is (r1² + r2²) / r0², `asymmetry` is (r2 / r1)² with r1 >= r2, `murray_ratio` is (r1³ + r2³) / r0³ and
    the junction exponent m solves r0^m = r1^m + r2^m; it exists only where the parent is wider than both children and
    is else NaN. A segment that ends before the zone is read over the half beside the node; then the branching is
    flagged `short` and has no uncertainty of its angles.

    The imbalance is the length of r0^p u0 + r1^p u1 + r2^p u2 over r0^p with the unit vectors u away from the node: the
    cost, volume (p = 2) or surface (p = 1), that moving the node would save for its way. It is 0 exactly where the
    angles are those of least cost, and exists where those angles do not.

    Uncertainties of radii are those of their mean over the zone; those of what is made of them hold to first order.
    What all vessels share, the pixel size too, largely cancels in ratios, exponents and optimal angles. That of a
    direction is the scatter of the centreline about its line, with 1 degree for lumina that still touch.

    References
    ----------
    Murray CD (1926) The physiological principle of minimum work. Proc Natl Acad Sci USA 12:207-214,
    doi:10.1073/pnas.12.3.207; Zamir M (1976) Optimality principles in arterial branching. J Theor Biol 62:227-251,
    doi:10.1016/0022-5193(76)90058-8.
    """
    ends = _bifurcations(measured.graph)
    read = _read_zones(measured, ends, _rough_radius(measured, ends).max(axis=1, initial=0.0))
    feeder, by_flow = _parent_by_flow(ends, flow_nl_min)
    leads = np.where(by_flow[:, None], np.arange(3) == feeder[:, None], False)
    order = np.lexsort((-read.radius, ~leads), axis=1)
    read = read.sorted_by(order)
    segment = np.take_along_axis(ends.segment, order, axis=1)
    angle, angle_se = _angles(read)
    doubt = np.bitwise_or.reduce(measured.segment_flags[segment] & int(Flag.UNRESOLVED | Flag.INFERRED), axis=1)
    parent, wide, narrow = read.radius.T
    share = np.square(read.radius[:, 1:] / parent[:, None])
    area_ratio, murray_ratio = share.sum(axis=1), (share**1.5).sum(axis=1)
    exponent = junction_exponent(parent, wide, narrow)
    asymmetry = np.square(narrow / wide)
    return Branchings(
        node=ends.node,
        parent=segment[:, 0],
        child_1=segment[:, 1],
        child_2=segment[:, 2],
        by_flow=by_flow,
        radius_um=read.radius,
        radius_se_um=read.radius * np.stack([read.se_of(np.broadcast_to(one, segment.shape)) for one in np.eye(3)], 1),
        angle_deg=angle,
        angle_se_deg=angle_se,
        area_ratio=area_ratio,
        area_ratio_se=read.se_of(_ratio_gradient(share, 2.0)),
        asymmetry=asymmetry,
        asymmetry_se=read.se_of(asymmetry[:, None] * np.array([0.0, -2.0, 2.0])),
        junction_exponent=exponent,
        junction_exponent_se=read.se_of(_exponent_gradient(share, exponent)),
        murray_ratio=murray_ratio,
        murray_ratio_se=read.se_of(_ratio_gradient(share**1.5, 3.0)),
        volume_angle_deg=optimal_angles_deg(read.radius, VOLUME),
        volume_angle_se_deg=_optimal_angles_se_deg(read, VOLUME),
        surface_angle_deg=optimal_angles_deg(read.radius, SURFACE),
        surface_angle_se_deg=_optimal_angles_se_deg(read, SURFACE),
        volume_imbalance=_imbalance(read, VOLUME),
        surface_imbalance=_imbalance(read, SURFACE),
        flags=doubt | np.where(read.short.any(axis=1), int(Flag.SHORT), 0),
    )


def optimal_angles_deg(radius: FloatArray, power: float) -> FloatArray:
    """Angles of both children to the parent's direction that cost least where a length of vessel costs radius^power.

    Parameters
    ----------
    radius : (n, 3) float
        Of parent and children.
    power : float
        2 for the least volume or pumping power, 1 for the least surface or drag.

    Returns
    -------
    (n, 2) float
        Degrees; NaN where no angle is best: the node would slide along a vessel.

    References
    ----------
    Murray CD (1926) The physiological principle of minimum work applied to the angle of branching of arteries. J Gen
    Physiol 9:835-841, doi:10.1085/jgp.9.6.835; Zamir M (1976), as above: cos t1 = (r0^2p + r1^2p - r2^2p) /
    (2 r0^p r1^p).
    """
    cost = radius**power
    own, other = cost[:, 1:], cost[:, :0:-1]
    cosine = (cost[:, :1] ** 2 + own**2 - other**2) / (2.0 * cost[:, :1] * own)
    exists = np.all(np.abs(cosine) <= 1, axis=1, keepdims=True)
    return np.where(exists, np.degrees(np.arccos(np.clip(cosine, -1, 1))), np.nan)


def _optimal_angles_se_deg(read: _Readings, power: float) -> FloatArray:
    """Standard uncertainty (n, 2) of the angles of least cost, by the derivatives of their cosines with each ln r."""
    cost = read.radius**power
    told = []
    for own, other in ((1, 2), (2, 1)):
        angle = np.radians(optimal_angles_deg(read.radius, power)[:, own - 1])
        sine = np.where(np.sin(angle) > 0, np.sin(angle), np.nan)
        gradient = np.empty_like(cost)
        gradient[:, 0] = cost[:, 0] / cost[:, own] - np.cos(angle)
        gradient[:, own] = cost[:, own] / cost[:, 0] - np.cos(angle)
        gradient[:, other] = -(cost[:, other] ** 2) / (cost[:, 0] * cost[:, own])
        told.append(np.degrees(read.se_of(power * gradient / -sine[:, None])))
    return np.stack(told, axis=1)


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


def _ratio_gradient(share: FloatArray, power: float) -> FloatArray:
    """Change (n, 3) of the sum of the children's shares (r_i / r0)^power with each ln r."""
    return power * np.column_stack((-share.sum(axis=1), share))


def _exponent_gradient(share: FloatArray, exponent: FloatArray) -> FloatArray:
    """Change (n, 3) of the junction exponent with each ln r, from the equation that it solves."""
    known = np.isfinite(exponent)
    ln_ratio = 0.5 * np.log(np.where(known[:, None], share, 0.25))
    parts = np.exp(exponent[:, None] * ln_ratio)
    slope = np.sum(parts * ln_ratio, axis=1, keepdims=True)
    return exponent[:, None] * np.column_stack((parts.sum(axis=1), -parts)) / slope


def _imbalance(read: _Readings, power: float) -> FloatArray:
    pull = np.einsum("ni,nid->nd", (read.radius / read.radius[:, :1]) ** power, read.direction)
    return np.hypot(pull[:, 0], pull[:, 1])


def _angles(read: _Readings) -> tuple[FloatArray, FloatArray]:
    """Angles of child 1 and child 2 to the parent's direction and their sum, (n, 3) degrees, and their uncertainty."""
    on, children = -read.direction[:, 0], read.direction[:, 1:]
    cross = on[:, None, 0] * children[..., 1] - on[:, None, 1] * children[..., 0]
    angle = np.degrees(np.arctan2(np.abs(cross), np.einsum("nd,nid->ni", on, children)))
    own = np.square(read.direction_se)
    one_side = cross[:, 0] * cross[:, 1] > 0
    parent_twice = np.where(one_side, 4.0 * own[:, 0], 0.0)  # on either side it cancels
    variance = np.column_stack((own[:, 0] + own[:, 1], own[:, 0] + own[:, 2], parent_twice + own[:, 1] + own[:, 2]))
    return np.column_stack((angle, angle.sum(axis=1))), np.degrees(np.sqrt(variance))


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


def _parent_by_flow(ends: _Ends, flow_nl_min: FloatArray) -> tuple[IntArray, BoolArray]:
    """Column of the vessel whose flow goes against that of the two others, and whether there is one."""
    flow = flow_nl_min[ends.segment]
    leaving = np.where(ends.side == 0, flow, -flow)
    least = NO_FLOW_SHARE * np.abs(leaving).max(axis=1, initial=0.0)[:, None]
    sign = np.where(np.abs(leaving) > least, np.sign(leaving), 0.0)
    known = np.isfinite(leaving).all(axis=1) & (sign != 0).all(axis=1) & (np.abs(sign.sum(axis=1)) == 1)
    return np.argmax(sign == -sign.sum(axis=1)[:, None], axis=1), known


def _rough_radius(measured: MeasuredGraph, ends: _Ends) -> FloatArray:
    """Mean radius (n_bifurcations, 3) over the half of each segment beside the node."""
    segment, n, share = owner(measured.graph.offsets), measured.graph.n_segments, arc_shares(measured)
    near_a = measured.s_um <= 0.5 * measured.length_um[segment]
    halves = np.stack([mean_by(segment, measured.radius_um, share * near, n) for near in (near_a, ~near_a)])
    whole = mean_by(segment, measured.radius_um, share, n)
    return np.where(np.isfinite(halves), halves, whole)[ends.side, ends.segment]


def _read_zones(measured: MeasuredGraph, ends: _Ends, widest_um: FloatArray) -> _Readings:
    graph, point_segment = measured.graph, owner(measured.graph.offsets)
    n_rows = ends.segment.size
    pixel_se = np.nan_to_num(measured.pixel_size_rel_se) * measured.column
    causes_of = np.column_stack((measured.shared, pixel_se))
    radius, random_se, direction_se = np.zeros(n_rows), np.zeros(n_rows), np.zeros(n_rows)
    short, direction = np.zeros(n_rows, dtype=bool), np.zeros((n_rows, 2))
    causes = np.zeros((n_rows, causes_of.shape[1]))
    for side in (0, 1):
        row_of = np.full(graph.n_segments, -1)
        rows = np.flatnonzero(ends.side.ravel() == side)
        row_of[ends.segment.ravel()[rows]] = rows
        point = np.flatnonzero(row_of[point_segment] >= 0)
        row = row_of[point_segment[point]]
        node = ends.node[row // 3]
        x = (graph.x_px[point] - graph.node_x_px[node]) * measured.pixel_size_um
        y = (graph.y_px[point] - graph.node_y_px[node]) * measured.pixel_size_um
        widest = widest_um[row // 3]
        away, length = np.hypot(x, y) / widest, measured.length_um[point_segment[point]]
        from_end = np.abs(side * length - measured.s_um[point])
        away = np.where(from_end <= 2.0 * DIRECTION_RADII[1] * widest, away, np.inf)  # not where the vessel comes back
        beside = from_end <= 0.5 * length
        wide, _ = _within(away, RADIUS_RADII, (row, n_rows), beside)
        ahead, few = _within(away, DIRECTION_RADII, (row, n_rows), beside)
        radius[rows] = median_by(row[wide], measured.radius_um[point[wide]], n_rows)[rows]
        weight = 1.0 / np.bincount(row[wide], minlength=n_rows)[row[wide]]
        gradient = np.bincount(point[wide], weight, graph.n_points)
        random_se[rows] = np.sqrt(measured.covariance.segment_variance(gradient)[ends.segment.ravel()[rows]])
        for k, column in enumerate(causes_of.T):
            causes[rows, k] = sum_by(row[wide], weight * column[point[wide]], n_rows)[rows]
        line, line_se = _directions(row[ahead], (x[ahead], y[ahead]), few, SMOOTH_PX * measured.pixel_size_um)
        direction[rows], direction_se[rows], short[rows] = line[rows], line_se[rows], few[rows]
    return _Readings(
        radius.reshape(-1, 3),
        random_se.reshape(-1, 3),
        causes.reshape(-1, 3, causes_of.shape[1]),
        direction.reshape(-1, 3, 2),
        direction_se.reshape(-1, 3),
        short.reshape(-1, 3),
    )


def _within(
    away: FloatArray, zone: tuple[float, float], group: tuple[IntArray, int], beside: BoolArray
) -> tuple[BoolArray, BoolArray]:
    """Points inside a zone, or beside the node where a row has fewer than three there; and which rows these are."""
    row, n_rows = group
    inside = (away >= zone[0]) & (away <= zone[1])
    few = np.bincount(row[inside], minlength=n_rows) < 3
    return np.where(few[row], beside, inside), few


def _directions(
    row: IntArray, place: tuple[FloatArray, FloatArray], few: BoolArray, alike_um: float
) -> tuple[FloatArray, FloatArray]:
    """Unit vector (n_rows, 2) along the line through each row's points, away from the node at the origin; its doubt.

    Where they are few, the vector from the node to their mean, of unknown doubt. Points nearer together than
    `alike_um` err alike.
    """
    n, one = few.size, np.ones(row.size)
    x, y = place
    mean_x, mean_y = mean_by(row, x, one, n), mean_by(row, y, one, n)
    dx, dy = x - mean_x[row], y - mean_y[row]
    xx, xy, yy = (sum_by(row, product, n) for product in (dx * dx, dx * dy, dy * dy))
    angle = np.where(few, np.arctan2(mean_y, mean_x), 0.5 * np.arctan2(2.0 * xy, xx - yy))
    line = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    backwards = line[:, 0] * mean_x + line[:, 1] * mean_y < 0
    spread, split = xx + yy, np.hypot(xx - yy, 2.0 * xy)
    along, across = (spread + split) / 2, np.maximum(spread - split, 0.0) / 2
    count = np.bincount(row, minlength=n)
    extent = np.sqrt(12.0 * along / np.maximum(count, 1))  # of evenly spaced points
    effective = np.maximum(count * np.minimum(alike_um / np.maximum(extent, 1e-12), 1.0), 1.0)  # points that err as one
    scatter = across / np.maximum(count - 2, 1)
    variance = scatter * effective / np.where(along > 0, along, np.inf)
    se = np.where(few, np.nan, np.hypot(np.sqrt(variance), DIRECTION_SE_RAD))
    return np.where(backwards[:, None], -line, line), se
