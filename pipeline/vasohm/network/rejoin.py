"""A measured graph with other nodes: segments joined at their ends, the way across a gap drawn and interpolated."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.sparse import csr_array

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.network.graph import Crossings, VesselGraph, order_of
from vasohm.network.groups import mean_by, sum_by
from vasohm.network.joining import WAY_PX, follow_chains
from vasohm.network.lumenfit import RadiusCovariance
from vasohm.network.passages import DIRECTION_PX, bow
from vasohm.network.paths import arc_length, offsets_of
from vasohm.network.radius import MeasuredGraph, length_se_px, segment_flags
from vasohm.uncertainty import quadrature

SAME_PLACE_PX = 0.25  # ends no further apart are one point


@dataclass(frozen=True, slots=True, eq=False)
class NewNodes:
    """Nodes, and which of them each end of the old segments lies on.

    An end is a segment's index (its first point), or that plus the number of segments (its last).
    """

    x_px: FloatArray  # (n_nodes,)
    y_px: FloatArray
    kind: IntArray
    of_end: IntArray  # (2 n_segments,) not looked at for ends that are joined

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class JoinedCovariance:
    """The covariance of points that are weighted sums of the points of another graph, whose segments were joined."""

    whole: RadiusCovariance
    weights: csr_array  # (n_points, n_old_points)
    joined: IntArray  # (n_old_segments,) the segment that each became part of
    n_segments: int

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,)."""
        old = self.whole.segment_variance(self.weights.T @ gradient)
        return sum_by(self.joined, old, self.n_segments)


@dataclass(frozen=True, slots=True, eq=False)
class _Points:
    """Points between two old ones: (1 - share) of `left` and share of `right`."""

    left: IntArray
    right: IntArray
    share: FloatArray
    x_px: FloatArray
    y_px: FloatArray


def rejoin(
    measured: MeasuredGraph, nodes: NewNodes, partner: Mapping[int, int], found: Sequence[tuple[float, float, int, int]]
) -> MeasuredGraph:
    """Put a measured graph on new nodes and join segments end to end.

    Parameters
    ----------
    measured : MeasuredGraph
        The old graph.
    nodes : NewNodes
        Those that no end lies on are left out.
    partner : end -> end, both ways
        Joined ends; no chain of them may close on itself.
    found : rows of (x_px, y_px, segment, segment)
        Crossings that come to light, by old segments; their probability is the product of the two class probabilities.

    Returns
    -------
    MeasuredGraph
        In its fixed order. Between joined ends ln r is interpolated and flagged INFERRED. A joined segment has the
        class that most of its length says, with that part's mean probability.

    Notes
    -----
    Radii of different segments err apart from each other, but for what they share.
    """
    old = measured.graph
    chains = [chain for chain, _ in follow_chains(old.n_segments, partner, set())]
    drawn = [_chain_points(old, chain) for chain in chains]
    offsets = offsets_of(np.array([len(points.left) for points in drawn]))
    points = _Points(
        *(np.concatenate([getattr(one, name) for one in drawn]) for name in ("left", "right", "share", "x_px", "y_px"))
    )
    joined = np.empty(old.n_segments, np.int64)
    for index, chain in enumerate(chains):
        joined[[segment for segment, _ in chain]] = index
    kinds, probability = _classes(measured, joined, len(chains))
    outer = [(_end(old, chain[0], first=True), _end(old, chain[-1], first=False)) for chain in chains]
    used, ends = np.unique(nodes.of_end[np.array(outer).reshape(-1, 2)], return_inverse=True)
    flags = np.zeros(len(chains), np.int64)
    np.bitwise_or.at(flags, joined, old.segment_flags)
    graph = replace(
        old,
        node_x_px=nodes.x_px[used],
        node_y_px=nodes.y_px[used],
        node_kind=nodes.kind[used],
        node_a=ends.reshape(-1, 2)[:, 0].copy(),
        node_b=ends.reshape(-1, 2)[:, 1].copy(),
        offsets=offsets,
        x_px=points.x_px,
        y_px=points.y_px,
        seed_radius_px=_between(points, old.seed_radius_px),
        vessel_class=kinds,
        class_probability=probability,
        segment_flags=flags,
        crossings=_with_crossings(old, joined, found),
    )
    ordered, order, place = order_of(graph)
    new_index = np.empty(len(chains), np.int64)
    new_index[order] = np.arange(len(chains))
    moved = _Points(*(getattr(points, name)[place] for name in ("left", "right", "share", "x_px", "y_px")))
    return _measured(measured, ordered, moved, new_index[joined])


def _measured(measured: MeasuredGraph, graph: VesselGraph, points: _Points, joined: IntArray) -> MeasuredGraph:
    """Carry what was measured over to the new points, and derive anew what follows from them."""
    pixel = measured.pixel_size_um
    radius_um = np.exp(_between(points, np.log(measured.radius_um)))
    layer_um = _between(points, measured.radius_um * (1 - measured.column))
    random_se = _between(points, measured.ln_radius_random_se)
    shared = (
        np.stack([_between(points, cause) for cause in measured.shared.T], axis=1)
        if len(measured.shared_causes)
        else np.zeros((graph.n_points, 0))
    )
    inferred = np.where(points.left != points.right, int(Flag.INFERRED), 0)
    flags = measured.point_flags[points.left] | measured.point_flags[points.right] | inferred
    rows = np.arange(graph.n_points)
    weights = csr_array(
        (
            np.concatenate((1 - points.share, points.share)),
            (np.concatenate((rows, rows)), np.concatenate((points.left, points.right))),
        ),
        shape=(graph.n_points, measured.graph.n_points),
    )
    s_px = arc_length(graph.x_px, graph.y_px, graph.offsets)
    first, last = graph.offsets[:-1], graph.offsets[1:] - 1
    return replace(
        measured,
        graph=graph,
        s_um=s_px * pixel,
        radius_um=radius_um,
        column=1 - layer_um / radius_um,
        ln_radius_random_se=random_se,
        shared=shared,
        covariance=JoinedCovariance(measured.covariance, weights, joined, graph.n_segments),
        contrast=_between(points, measured.contrast),
        point_flags=flags,
        length_um=s_px[last] * pixel,
        length_random_se_um=length_se_px(graph, radius_um / pixel) * pixel,
        chord_um=np.hypot(graph.x_px[last] - graph.x_px[first], graph.y_px[last] - graph.y_px[first]) * pixel,
        segment_flags=segment_flags(graph, flags, s_px[last], radius_um / pixel, quadrature(random_se, *shared.T)),
    )


def _between(points: _Points, values: FloatArray) -> FloatArray:
    return (1 - points.share) * values[points.left] + points.share * values[points.right]


def _chain_points(graph: VesselGraph, chain: Sequence[tuple[int, bool]]) -> _Points:
    """Points along a chain of segments, with those of the ways across its gaps."""
    parts: list[_Points] = []
    for segment, forward in chain:
        index = np.arange(graph.offsets[segment], graph.offsets[segment + 1])[:: 1 if forward else -1]
        if parts:
            before = parts[-1].left
            gap = float(np.hypot(*(_xy(graph, index[:1]) - _xy(graph, before[-1:]))[0]))
            if gap <= SAME_PLACE_PX:
                index = index[1:]
            elif gap > WAY_PX:
                parts.append(_across(graph, before, index, gap))
        parts.append(_Points(index, index, np.zeros(len(index)), graph.x_px[index], graph.y_px[index]))
    return _Points(
        *(np.concatenate([getattr(one, name) for one in parts]) for name in ("left", "right", "share", "x_px", "y_px"))
    )


def _across(graph: VesselGraph, before: IntArray, behind: IntArray, gap_px: float) -> _Points:
    """Points about 1 px apart between the last of `before` and the first of `behind`, both left out."""
    count = int(np.rint(gap_px / WAY_PX))
    share = np.arange(1, count) / count
    near, far = _xy(graph, before[-DIRECTION_PX:]), _xy(graph, behind[:DIRECTION_PX])
    ways = (near[-1] - near[0], far[-1] - far[0])
    if min(float(np.hypot(*way)) for way in ways) < WAY_PX:
        ways = (far[0] - near[-1],) * 2
    path = bow((near[-1], far[0]), ways, share)
    ends = [np.full(len(share), index) for index in (before[-1], behind[0])]
    return _Points(ends[0], ends[1], share, path[:, 0], path[:, 1])


def _xy(graph: VesselGraph, index: IntArray) -> FloatArray:
    return np.column_stack((graph.x_px[index], graph.y_px[index]))


def _end(graph: VesselGraph, link: tuple[int, bool], *, first: bool) -> int:
    """The end at which a chain begins, or stops."""
    segment, forward = link
    return segment if forward == first else segment + graph.n_segments


def _classes(measured: MeasuredGraph, joined: IntArray, n: int) -> tuple[IntArray, FloatArray]:
    """Class and probability (n,) of joined segments."""
    graph = measured.graph
    held = np.zeros((n, int(graph.vessel_class.max(initial=0)) + 1))
    np.add.at(held, (joined, graph.vessel_class), measured.length_um)
    held[:, 0] *= np.count_nonzero(held[:, 1:], axis=1) == 0
    kind = held.argmax(axis=1)
    own = np.where(graph.vessel_class == kind[joined], measured.length_um, 0.0)
    probability = mean_by(joined, np.nan_to_num(graph.class_probability), own, n)
    unsaid = np.bincount(joined, np.isnan(graph.class_probability) & (own > 0), n) > 0
    return kind.astype(np.int64), np.where(unsaid, np.nan, probability)


def _with_crossings(graph: VesselGraph, joined: IntArray, found: Sequence[tuple[float, float, int, int]]) -> Crossings:
    """The crossings known before, and those that came to light."""
    known = graph.crossings
    x, y, one, other = np.array(found, dtype=float).reshape(-1, 4).T
    one, other = one.astype(np.int64), other.astype(np.int64)
    told = np.nan_to_num(graph.class_probability, nan=1.0)
    return Crossings(
        np.concatenate((known.x_px, x)),
        np.concatenate((known.y_px, y)),
        np.concatenate((joined[known.segment_over], joined[one])),
        np.concatenate((joined[known.segment_under], joined[other])),
        np.concatenate((known.probability, told[one] * told[other])),
        np.concatenate((known.over_told, np.zeros(len(x), dtype=bool))),
    )
