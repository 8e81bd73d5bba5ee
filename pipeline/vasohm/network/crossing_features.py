"""What tells a crossing from a branching: how four arms go on through each other, and how dark their overlap is."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from vasohm.arrays import Float32Array, FloatArray, IntArray, freeze
from vasohm.image.blocks import filtered
from vasohm.image.prepare import PreparedImage
from vasohm.network.graph import JUNCTION_RADII, NodeKind, VesselGraph, end_radius
from vasohm.network.paths import arc_length, offsets_of

BRIDGE_RADII = 7.0  # two vessels of radius r that cross at 30 degrees share a skeleton of about so many r
BRIDGE_PX = 6.0
ARM_RADII, ARM_LEAST_PX = 4.0, 8.0  # an arm tells its direction and depth over so much of its length
ARM_SAMPLES = 9
SIDEWAYS_PX = (-0.7, 0.0, 0.7)  # a skeleton lies up to so far off the axis
CORE_RADII = 0.6  # of the thinner vessel: the disc in which the overlap is looked at
CORE_SHIFTS_PX = ((0.0, 0.0), (1.0, 0.0), (-1.0, 0.0), (0.0, 1.0), (0.0, -1.0))
SMOOTHING_PX = 0.7
SMOOTHING_REACH_PX = 4
LEAST_LIGHT = 0.02  # share of light below which a dark vessel's density is only noise
LEAST_EXCESS, LARGEST_EXCESS = -0.6, 1.2  # beyond these a place tells no more
LEAST_DEPTH = 1e-6
MISS_GAIN = 3.0  # of a logarithm: near 0 every pixel of a miss counts, far off none does
# In the skeleton of two bars of radius r that cross at 45 to 60 degrees the bridge is about 1.3 r / tan(angle / 2);
# in flatter crossings it is longer, and blur widens the bars.
BRIDGE_GAIN, FLAT_BRIDGE_GAIN = 1.3, 2.2
LEAST_HALF_TANGENT = 0.18  # flatter than 20 degrees nothing is told
EXCESS_OF_BRIDGE = (-2.0, 4.0)
OVERLAP_UPTO = 1.5  # a bridge too long for its angle by more than three radii is a vessel, and no overlap's darkness
ANGLES = np.arange(8) * np.pi / 4

FEATURES = (
    "turn_max", "turn_min", "miss_max", "unlike_max", "depth_unlike_max", "bridge", "bridge_excess", "two_nodes",
    "crossing_sine",
    "sideways_turn", "radius_ratio", "arm_shortest", "core_excess", "core_excess_weighted",
)  # fmt: skip
CORE_FEATURES = ("core_excess", "core_excess_weighted")  # mean nothing where overlapping light does not add


@dataclass(frozen=True, slots=True, eq=False)
class Meetings:
    """Places where four arms meet, directly or across a short bridge.

    Arms are segment ends (a segment's index for its first point, that plus the number of segments for its last), in
    their order around the place, so that 0 and 2, 1 and 3 lie opposite.
    """

    ends: IntArray  # (n, 4)
    nodes: IntArray  # (n, 2), equal where all four arms meet at one node
    bridge: IntArray  # (n,) the segment between the two nodes, -1 where there is one node
    bridge_px: FloatArray
    x_px: FloatArray
    y_px: FloatArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Arms:
    """Both ends of all segments: first those at `node_a`, then those at `node_b`."""

    x_px: FloatArray  # (2 n, samples) outside the junction, the nearest to it first
    y_px: FloatArray
    towards: FloatArray  # (2 n, 2) unit direction towards the node
    radius_px: FloatArray  # (2 n,)
    length_px: FloatArray  # (2 n,) of the whole segment
    inside: IntArray  # (2 n,) points at the end that lie inside the junction, where lumens overlap

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def start(self) -> FloatArray:
        """Where each arm enters the junction, (2 n, 2)."""
        return np.column_stack((self.x_px[:, 0], self.y_px[:, 0]))


@dataclass(frozen=True, slots=True, eq=False)
class Overlap:
    """How deep the picture is at each place where four arms meet."""

    arm_depth: FloatArray  # (n, 4) along each arm, on its axis
    core_depth: FloatArray  # (n,) where the ways through meet

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def vessel_depth(self) -> FloatArray:
        """Depth of the two ways through, (n, 2)."""
        return 0.5 * (self.arm_depth[:, :2] + self.arm_depth[:, 2:])


def look_along_arms(graph: VesselGraph) -> Arms:
    """Fit a straight line to each segment end outside its junction."""
    n, count = graph.n_segments, np.diff(graph.offsets)
    radius = end_radius(graph)
    nodes = np.column_stack((graph.node_a, graph.node_b))
    widest = np.zeros(graph.n_nodes)
    np.maximum.at(widest, nodes, radius)
    is_branching = graph.node_kind[nodes] == NodeKind.BRANCHING
    near = np.minimum(np.where(is_branching, JUNCTION_RADII * widest[nodes], 0.0), (count[:, None] - 1) // 3)
    far = np.minimum(near + np.maximum(ARM_LEAST_PX, ARM_RADII * radius), count[:, None] - 1 - near[:, ::-1])
    share = np.linspace(0.0, 1.0, ARM_SAMPLES)
    from_end = np.rint(near[:, :, None] + share * np.maximum(far - near, 1.0)[:, :, None]).astype(np.int64)
    from_end = np.minimum(from_end, (count - 1)[:, None, None])
    index = np.concatenate((graph.offsets[:-1, None] + from_end[:, 0], graph.offsets[1:, None] - 1 - from_end[:, 1]))
    x, y = graph.x_px[index], graph.y_px[index]
    length = arc_length(graph.x_px, graph.y_px, graph.offsets)[graph.offsets[1:] - 1] if n else np.zeros(0)
    return Arms(x, y, _directions(x, y), radius.T.ravel(), np.tile(length, 2), from_end[:, :, 0].T.ravel())


def _directions(x: FloatArray, y: FloatArray) -> FloatArray:
    """Unit direction of the principal axis of each row of points, from its last towards its first."""
    dx, dy = x - x.mean(axis=1, keepdims=True), y - y.mean(axis=1, keepdims=True)
    angle = 0.5 * np.arctan2(2 * (dx * dy).sum(axis=1), (dx * dx - dy * dy).sum(axis=1))
    along = np.column_stack((np.cos(angle), np.sin(angle)))
    forward = along[:, 0] * (x[:, 0] - x[:, -1]) + along[:, 1] * (y[:, 0] - y[:, -1])
    return np.where((forward < 0)[:, None], -along, along)


def find_meetings(graph: VesselGraph, arms: Arms) -> Meetings:
    """List the places where four arms meet, in the order of nodes and then of bridges."""
    n = graph.n_segments
    node = np.concatenate((graph.node_a, graph.node_b))
    degree = np.bincount(node, minlength=graph.n_nodes)
    order, first = np.argsort(node, kind="stable"), offsets_of(degree)
    four = np.nonzero(degree == 4)[0]
    three = (degree[graph.node_a] == 3) & (degree[graph.node_b] == 3) & (graph.node_a != graph.node_b)
    bridge = np.nonzero(three)[0]
    a, b = graph.node_a[bridge], graph.node_b[bridge]
    beside = [order[first[nodes][:, None] + np.arange(3)] for nodes in (a, b)]
    outer = [ends[ends % n != bridge[:, None]].reshape(-1, 2) for ends in beside]
    ends = np.concatenate((order[first[four][:, None] + np.arange(4)], np.concatenate(outer, axis=1)))
    nodes = np.concatenate((np.column_stack((four, four)), np.column_stack((a, b))))
    bridge = np.concatenate((np.full(len(four), -1), bridge))
    span = np.where(bridge >= 0, arms.length_px[bridge], 0.0)
    x, y = graph.node_x_px[nodes].mean(axis=1), graph.node_y_px[nodes].mean(axis=1)
    away = arms.start[ends] - np.stack((x, y), axis=1)[:, None, :]
    around = np.argsort(np.arctan2(away[:, :, 1], away[:, :, 0]), axis=1, kind="stable")
    side = np.take_along_axis(np.broadcast_to([0, 0, 1, 1], ends.shape), around, axis=1)
    apart = (side[:, 0] != side[:, 2]) & (side[:, 1] != side[:, 3])
    ends = np.take_along_axis(ends, around, axis=1)
    radius = arms.radius_px[ends].mean(axis=1)
    flat = span * _crossing_angle(arms.towards[ends])[1] <= FLAT_BRIDGE_GAIN * (radius + 1)
    within = flat | (span <= BRIDGE_RADII * radius + BRIDGE_PX)
    keep = (bridge < 0) | (apart & within)
    return Meetings(ends[keep], nodes[keep], bridge[keep], span[keep], x[keep], y[keep])


def describe(meetings: Meetings, arms: Arms, overlap: Overlap) -> FloatArray:
    """Return what speaks for and against a crossing at each place, (n, len(FEATURES)).

    Notes
    -----
    Turns are in units of 30 degrees. The core's excess is (depth of the overlap - that of the deeper vessel) over
    the depth of the fainter one: 1 where two vessels cross whose light adds, about 0 where they join.
    """
    ends = meetings.ends
    towards, start, radius = arms.towards[ends], arms.start[ends], arms.radius_px[ends]
    opposite = np.stack([_turn(towards[:, k], towards[:, k + 2]) for k in (0, 1)], axis=1)
    beside = np.stack([_turn(towards[:, k], towards[:, (k + 1) % 4]) for k in range(4)], axis=1)
    sideways = np.minimum(np.maximum(beside[:, 0], beside[:, 2]), np.maximum(beside[:, 1], beside[:, 3]))
    miss = np.stack([_miss(start, towards, k) for k in (0, 1)], axis=1)
    unlike = np.abs(np.log(radius[:, :2] / radius[:, 2:]))
    vessel_radius = np.sqrt(radius[:, :2] * radius[:, 2:])
    sine, half_tangent = _crossing_angle(towards)
    depth = overlap.arm_depth
    fainter, deeper = overlap.vessel_depth.min(axis=1), overlap.vessel_depth.max(axis=1)
    excess = np.clip((overlap.core_depth - deeper) / fainter, LEAST_EXCESS, LARGEST_EXCESS)
    mean_radius = radius.mean(axis=1)
    bridge = meetings.bridge_px / (mean_radius + 1)
    expected = BRIDGE_GAIN / np.maximum(half_tangent, BRIDGE_GAIN / BRIDGE_RADII) - BRIDGE_GAIN
    too_long = np.clip(bridge - expected, *EXCESS_OF_BRIDGE)
    excess = excess * np.clip(OVERLAP_UPTO - 0.5 * too_long, 0.0, 1.0)
    return np.column_stack((
        opposite.max(axis=1), opposite.min(axis=1),
        np.log1p(MISS_GAIN * (miss / (vessel_radius + 1)).max(axis=1)),
        unlike.max(axis=1), np.abs(np.log(depth[:, :2] / depth[:, 2:])).max(axis=1),
        bridge, too_long, meetings.bridge >= 0, sine, sideways,
        np.abs(np.log(vessel_radius[:, 0] / vessel_radius[:, 1])),
        np.minimum(np.log1p(arms.length_px[ends].min(axis=1) / (mean_radius + 1)), 3.0),
        excess, excess * fainter / deeper,
    ))  # fmt: skip


def _turn(one: FloatArray, other: FloatArray) -> FloatArray:
    """Turn between arriving along one arm and leaving along the other, in units of 30 degrees."""
    cosine = -(one * other).sum(axis=1)
    return np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0))) / 30.0


def _crossing_angle(towards: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Sine of the angle between the two ways through, and the tangent of half of it."""
    way = towards[:, :2] - towards[:, 2:]
    way = way / np.maximum(np.hypot(way[..., 0], way[..., 1]), 1e-9)[..., None]
    sine = np.abs(way[:, 0, 0] * way[:, 1, 1] - way[:, 0, 1] * way[:, 1, 0])
    cosine = np.abs((way[:, 0] * way[:, 1]).sum(axis=1))
    return sine, np.maximum(sine / (1 + cosine), LEAST_HALF_TANGENT)


def _miss(start: FloatArray, towards: FloatArray, k: int) -> FloatArray:
    """Sideways distance in px between the lines of two opposite arms, at right angles to their mean direction."""
    mean = towards[:, k] - towards[:, k + 2]
    mean = mean / np.maximum(np.hypot(mean[:, 0], mean[:, 1]), 1e-9)[:, None]
    across = start[:, k + 2] - start[:, k]
    return np.abs(across[:, 0] * mean[:, 1] - across[:, 1] * mean[:, 0])


def look_at_overlaps(meetings: Meetings, arms: Arms, prepared: PreparedImage) -> Overlap:
    """Read how deep the picture is along the arms and where the ways through them meet.

    Notes
    -----
    Depth is a bright vessel's light, or a dark one's optical density: in these, vessels that lie over each other add.
    """

    def smooth_depth(light: Float32Array) -> Float32Array:
        depth_of = -np.log(np.maximum(1 - light, LEAST_LIGHT)) if prepared.polarity == "dark" else light
        return np.asarray(ndimage.gaussian_filter(depth_of, SMOOTHING_PX, mode="nearest"))

    smooth = filtered(prepared.signal, smooth_depth, SMOOTHING_REACH_PX)
    ends = meetings.ends
    x, y, towards = arms.x_px[ends], arms.y_px[ends], arms.towards[ends][:, :, None, :]
    beside = [_sample(smooth, x - t * towards[..., 1], y + t * towards[..., 0]).mean(axis=2) for t in SIDEWAYS_PX]
    core_x, core_y = crossing_points(meetings, arms)
    reach = CORE_RADII * arms.radius_px[ends].min(axis=1)[:, None]
    disc_x = np.column_stack((core_x, core_x[:, None] + reach * np.cos(ANGLES)))
    disc_y = np.column_stack((core_y, core_y[:, None] + reach * np.sin(ANGLES)))
    core = [_sample(smooth, disc_x + dx, disc_y + dy).mean(axis=1) for dx, dy in CORE_SHIFTS_PX]
    return Overlap(np.maximum(np.max(beside, axis=0), LEAST_DEPTH), np.max(core, axis=0))


def crossing_points(meetings: Meetings, arms: Arms) -> tuple[FloatArray, FloatArray]:
    """Where the straight ways between opposite arms meet; the middle of the place where they hardly do."""
    start = arms.start[meetings.ends]
    u, v = start[:, 2] - start[:, 0], start[:, 3] - start[:, 1]
    w = start[:, 1] - start[:, 0]
    cross = u[:, 0] * v[:, 1] - u[:, 1] * v[:, 0]
    flat = np.abs(cross) < 0.1 * np.maximum(np.hypot(*u.T) * np.hypot(*v.T), 1e-9)
    t = np.where(flat, 0.0, (w[:, 0] * v[:, 1] - w[:, 1] * v[:, 0]) / np.where(flat, 1.0, cross))
    x, y = start[:, 0, 0] + t * u[:, 0], start[:, 0, 1] + t * u[:, 1]
    reach = 0.5 * meetings.bridge_px + arms.radius_px[meetings.ends].max(axis=1) + 1
    far = flat | (np.hypot(x - meetings.x_px, y - meetings.y_px) > reach)
    return np.where(far, meetings.x_px, x), np.where(far, meetings.y_px, y)


def _sample(smooth: Float32Array, x: FloatArray, y: FloatArray) -> FloatArray:
    return np.asarray(ndimage.map_coordinates(smooth, (y, x), order=1, mode="nearest", output=np.float64))
