"""How much vessels bend: curvature along centrelines and where it changes its side."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.graph import NodeKind
from vasohm.network.groups import sum_by
from vasohm.network.paths import offsets_of, owner, position
from vasohm.network.radius import MeasuredGraph

SIGMA_PX = 4.0  # of the weights with which the direction of a centreline is followed
JUNCTION_RADII = 2.2  # a centreline runs straight into its node over so many radii of the widest vessel there
LEAST_STEPS = 12  # three sigma: shorter ones tell their ends, not their bends
LEAST_TURN_RAD = 0.2  # bends that turn by less are not told from noise


@dataclass(frozen=True, slots=True, eq=False)
class Curves:
    """Bends of every segment outside its branchings; NaN where too little of it is there."""

    length_um: FloatArray  # (n_segments,) over which the rest is taken
    curvature_rad: FloatArray  # integral of the absolute curvature
    squared_curvature_per_um: FloatArray  # integral of its square
    inflections: FloatArray  # changes between bends to one side and to the other

    def __post_init__(self) -> None:
        freeze(self)


def describe_curves(measured: MeasuredGraph) -> Curves:
    """Follow the direction of each centreline and add up its turns.

    Notes
    -----
    Curvature is the slope of the centreline's direction over its length, by local linear regression with Gaussian
    weights of 4 px: unbiased to the ends of an arc. Fast bends are flattened, a sinusoid of small amplitude by
    1 - exp(-2 (4 pi / w)²) at a wave of w px. Measured on five waves whose amplitude is a twelfth of their length, the
    curvature comes out 1 % too small at 120 px, 5 % at 60 px, 9 % at 44 px and 19 % at 30 px, its square 4 %, 14 %,
    23 % and 41 %. Noise of the centreline adds to a straight vessel what looks like bends:
    0.0015 rad a pixel on rendered tubes.

    The stretch beside a branching, where a centreline found in a picture runs straight into the node, is left out. An
    inflection lies between turns to either side of 0.2 rad (11°) or more each; what turns back by less does not part
    them.

    References
    ----------
    Hart WE, Goldbaum M, Cote B, Kube P, Nelson MR (1999) Measurement and classification of retinal vascular tortuosity.
    Int J Med Inform 53:239-252, doi:10.1016/S1386-5056(98)00163-4 (tau 1 to 7); Bullitt E et al. (2003) IEEE Trans Med
    Imaging 22:1163-1171, doi:10.1109/TMI.2003.816964 (counts of inflections).
    """
    graph = measured.graph
    n = graph.n_segments
    kept = _outside_branchings(measured)
    of = owner(graph.offsets)
    counts = np.bincount(of[kept], minlength=n)
    steps = np.maximum(counts - 1, 0)
    offsets = offsets_of(steps)
    path = owner(offsets)
    dx, dy = (_steps(values[kept], offsets_of(counts)) for values in (graph.x_px, graph.y_px))
    length = sum_by(path, np.hypot(dx, dy), n)
    step_px = np.divide(length, steps, out=np.ones(n), where=length > 0)
    turn = _slope(_unwrapped(np.arctan2(dy, dx), offsets), offsets)  # of the direction, a step
    enough = (steps >= LEAST_STEPS) & (length > 0)
    unknown = np.where(enough, 0.0, np.nan)
    return Curves(
        length_um=length * measured.pixel_size_um + unknown,
        curvature_rad=sum_by(path, np.abs(turn), n) + unknown,
        squared_curvature_per_um=sum_by(path, np.square(turn), n) / (step_px * measured.pixel_size_um) + unknown,
        inflections=_inflections(turn, path, n) + unknown,
    )


def _outside_branchings(measured: MeasuredGraph) -> BoolArray:
    """Points (n_points,) beyond the straight way into a branching, at least the middle third of each segment."""
    graph = measured.graph
    near = np.zeros((graph.n_segments, 2), dtype=np.int64)
    count = np.diff(graph.offsets)
    reach_px = JUNCTION_RADII * _widest_px(measured)
    for side, node, end in ((0, graph.node_a, graph.offsets[:-1]), (1, graph.node_b, graph.offsets[1:] - 1)):
        gone = np.hypot(graph.x_px[end] - graph.node_x_px[node], graph.y_px[end] - graph.node_y_px[node])
        left = np.ceil(np.maximum(reach_px[node] - gone, 0.0))
        at_branching = graph.node_kind[node] == NodeKind.BRANCHING
        near[:, side] = np.where(at_branching, np.minimum(left, (count - 1) // 3), 0)
    of, k = owner(graph.offsets), position(graph.offsets)
    return np.asarray((k >= near[of, 0]) & (count[of] - 1 - k >= near[of, 1]))


def _widest_px(measured: MeasuredGraph) -> FloatArray:
    """Mean radius of the widest segment at each node."""
    graph = measured.graph
    count = np.maximum(np.diff(graph.offsets), 1)
    mean_px = sum_by(owner(graph.offsets), measured.radius_um, graph.n_segments) / count / measured.pixel_size_um
    widest = np.zeros(graph.n_nodes)
    for node in (graph.node_a, graph.node_b):
        np.maximum.at(widest, node, mean_px)
    return widest


def _steps(values: FloatArray, offsets: IntArray) -> FloatArray:
    """Differences between neighbouring points of the same path."""
    inner = np.diff(owner(offsets)) == 0
    return np.asarray(np.diff(values)[inner])


def _unwrapped(angle: FloatArray, offsets: IntArray) -> FloatArray:
    """Directions without jumps of a whole turn, from any start in each path."""
    change = np.diff(angle, prepend=angle[:1])
    change -= 2 * np.pi * np.rint(change / (2 * np.pi))
    total = np.cumsum(change)
    counts = np.diff(offsets)
    start = np.zeros(len(counts))
    start[counts > 0] = total[offsets[:-1][counts > 0]]
    return np.asarray(total - np.repeat(start, counts))


def _slope(values: FloatArray, offsets: IntArray) -> FloatArray:
    """Slope at each point of the line that fits its neighbours of the same path best, with Gaussian weights."""
    if len(values) == 0:
        return values
    reach = int(np.ceil(4 * SIGMA_PX))
    counts = np.diff(offsets)
    inside = position(offsets_of(counts + reach)) < np.repeat(counts, counts + reach)  # paths parted by zeros
    at = np.arange(-reach, reach + 1)
    weight = np.exp(-0.5 * np.square(at / SIGMA_PX))
    one, y = np.zeros(len(inside)), np.zeros(len(inside))
    one[inside], y[inside] = 1.0, values
    s0, s1, s2, t0, t1 = (
        ndimage.correlate1d(line, weight * at**power, mode="constant")[inside]
        for line, power in ((one, 0), (one, 1), (one, 2), (y, 0), (y, 1))
    )
    spread = s0 * s2 - s1 * s1
    return np.divide(s0 * t1 - s1 * t0, spread, out=np.zeros(len(values)), where=spread > 1e-9)


def _inflections(turn: FloatArray, path: IntArray, n: int) -> FloatArray:
    """Count how often each path, having turned far enough to one side, turns as far to the other.

    What turns back by less, as noise does, neither counts nor parts a long gentle bend in two.
    """
    counts = np.zeros(n)
    if len(turn) == 0:
        return counts
    side = np.sign(turn)
    begins = np.concatenate(([True], (np.diff(side) != 0) | (np.diff(path) != 0)))
    first = np.flatnonzero(begins)
    bends, of = np.add.reduceat(turn, first), path[first]
    to_left, to_right = (sum_by(of, np.maximum(sign * bends, 0.0), n) for sign in (1.0, -1.0))
    may_change = np.minimum(to_left, to_right) >= LEAST_TURN_RAD
    offsets = offsets_of(np.bincount(of, minlength=n))
    for k in np.flatnonzero(may_change):
        counts[k] = _reversals(bends[offsets[k] : offsets[k + 1]].tolist())
    return counts


def _reversals(bends: list[float]) -> int:
    """Number of times that a direction made of these turns goes back from its furthest by `LEAST_TURN_RAD` or more."""
    count = side = 0
    at = low = high = 0.0
    for bend in bends:
        at += bend
        low, high = min(low, at), max(high, at)
        if side >= 0 and high - at >= LEAST_TURN_RAD:
            count, side, low = count + (side > 0), -1, at
        elif side <= 0 and at - low >= LEAST_TURN_RAD:
            count, side, high = count + (side < 0), 1, at
    return count
