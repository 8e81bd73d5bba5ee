"""Where vessels merely cross in the picture: two branchings a short bridge apart, or one node of four arms."""

from collections.abc import Mapping, Sequence
from collections.abc import Set as AbstractSet
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.graph import (
    NO_CROSSINGS,
    Crossings,
    NodeKind,
    VesselGraph,
    branch_directions,
    end_radius,
    in_fixed_order,
)
from vasohm.network.paths import arc_length, offsets_of, resample, twice

BRIDGE_RADII = 5.0  # two vessels of radius r that cross at 25 degrees share a skeleton of about 5 r
BRIDGE_PX = 6.0
# Logistic rule on the larger of the two turns. At 30 degrees a crossing and a branching are equally likely: that is
# the limit usually drawn between "goes on" and "turns" (common practice, no source).
TURN_LIMIT_DEG = 30.0
TURN_SPREAD_DEG = 6.0
FORCE_REACH_PX = 10.0  # as every point of an edits file
RADIUS_WEIGHT = 2.0  # per unit of ln(radius ratio) along one vessel: a vessel keeps its width across a crossing


@dataclass(frozen=True, slots=True)
class CrossingSettings:
    """Probability from which a place counts as a crossing."""

    threshold: float


@dataclass(frozen=True, slots=True)
class Candidate:
    """Four arms that meet, as indices of segment ends (segment, or segment + n for its far end), paired across."""

    nodes: tuple[int, ...]
    bridge: int  # segment between the two nodes, -1 where there is one node
    pairs: tuple[tuple[int, int], tuple[int, int]]
    x_px: float
    y_px: float
    probability: float


def resolve_crossings(
    graph: VesselGraph, settings: CrossingSettings, forced: Sequence[tuple[float, float, bool]] = ()
) -> tuple[VesselGraph, tuple[bool, ...]]:
    """Join the arms of vessels that cross and take the node away.

    Parameters
    ----------
    graph : nodes and segments as traced.
    settings : the probability asked for.
    forced : a person's word at (x_px, y_px): True for a crossing, False for a branching.

    Returns
    -------
    The graph in its fixed order, with `crossings` filled; and for each forced place whether four arms meet near it.
    """
    candidates = find_candidates(graph)
    met = []
    for x, y, is_crossing in forced:
        distance = [float(np.hypot(c.x_px - x, c.y_px - y)) for c in candidates]
        nearest = int(np.argmin(distance)) if distance else -1
        met.append(bool(distance) and distance[nearest] <= FORCE_REACH_PX)
        if met[-1]:
            candidates[nearest] = replace(candidates[nearest], probability=1.0 if is_crossing else 0.0)
    candidates.sort(key=lambda c: (-c.probability, c.y_px, c.x_px))
    taken: set[int] = set()
    accepted = []
    for candidate in candidates:
        if candidate.probability >= settings.threshold and taken.isdisjoint(candidate.nodes):
            taken.update(candidate.nodes)
            accepted.append(candidate)
    if not accepted:
        return graph, tuple(met)
    partner = dict(pair for c in accepted for a, b in c.pairs for pair in ((a, b), (b, a)))
    joined, new_of = join_ends(graph, partner, {c.bridge for c in accepted})
    return in_fixed_order(replace(joined, crossings=_table(accepted, new_of, graph.n_segments))), tuple(met)


def find_candidates(graph: VesselGraph) -> list[Candidate]:
    """List the places where four arms meet, directly or across a short bridge."""
    node, start, towards = branch_directions(graph)
    degree = np.bincount(node, minlength=graph.n_nodes)
    order = np.argsort(node, kind="stable")
    first = offsets_of(degree)
    radius = end_radius(graph).T.ravel()
    arms = (start, towards, radius)

    def ends_at(of_node: int) -> list[int]:
        return [int(end) for end in order[first[of_node] : first[of_node + 1]]]

    found = [_judge(graph, (centre,), -1, ends_at(centre), arms) for centre in np.nonzero(degree == 4)[0].tolist()]
    length = arc_length(graph.x_px, graph.y_px, graph.offsets)[graph.offsets[1:] - 1]
    three = (degree[graph.node_a] == 3) & (degree[graph.node_b] == 3) & (graph.node_a != graph.node_b)
    for bridge in np.nonzero(three & (length <= BRIDGE_RADII * radius[: graph.n_segments] + BRIDGE_PX))[0]:
        a, b = int(graph.node_a[bridge]), int(graph.node_b[bridge])
        ends = [end for end in (*ends_at(a), *ends_at(b)) if end % graph.n_segments != bridge]
        if len(ends) == 4 and length[bridge] <= BRIDGE_RADII * float(np.mean(radius[ends])) + BRIDGE_PX:
            found.append(_judge(graph, (a, b), int(bridge), ends, arms))
    return [candidate for candidate in found if candidate is not None]


def _judge(
    graph: VesselGraph, nodes: tuple[int, ...], bridge: int, ends: list[int],
    arms: tuple[FloatArray, FloatArray, FloatArray],
) -> Candidate | None:  # fmt: skip
    """Pair the arms across by their angle around the centre and tell how straight both pairs go on."""
    start, towards, radius = arms
    index = list(nodes)
    x, y = float(graph.node_x_px[index].mean()), float(graph.node_y_px[index].mean())
    around = sorted(ends, key=lambda end: float(np.arctan2(start[end, 1] - y, start[end, 0] - x)))
    pairs = ((around[0], around[2]), (around[1], around[3]))
    if bridge >= 0:
        side = {end: int(end in ends[:2]) for end in ends}
        if any(side[a] == side[b] for a, b in pairs):
            return None
    turns = [_turn_deg(towards[a], towards[b], start[b] - start[a]) for a, b in pairs]
    unlike = [abs(float(np.log(radius[a] / radius[b]))) for a, b in pairs]
    logit = (TURN_LIMIT_DEG - max(turns)) / TURN_SPREAD_DEG - RADIUS_WEIGHT * max(unlike)
    return Candidate(nodes, bridge, pairs, x, y, float(1 / (1 + np.exp(-logit))))


def _turn_deg(into: FloatArray, other_into: FloatArray, across: FloatArray) -> float:
    """Return the larger turn between arriving, crossing the gap, and leaving along the other arm."""
    gap = float(np.hypot(*across))
    directions = [into, -other_into] if gap < 1 else [into, across / gap, -other_into]
    turns = [np.degrees(np.arccos(np.clip(u @ v, -1, 1))) for u, v in pairwise(directions)]
    whole = np.degrees(np.arccos(np.clip(into @ -other_into, -1, 1)))
    return float(max(*turns, whole) if len(turns) > 1 else whole)


def join_ends(
    graph: VesselGraph, partner: Mapping[int, int], bridges: AbstractSet[int]
) -> tuple[VesselGraph, IntArray]:
    """Put segments together at their ends, and leave the bridges out.

    Parameters
    ----------
    graph : the graph; nodes at which segments are joined vanish, the way across is drawn straight.
    partner : end -> end, both ways; an end is a segment's index (its first point), or that plus n (its last).
    bridges : segments that vanish.

    Returns
    -------
    The graph, its crossings emptied and its order not fixed; and the new index of each old segment, -1 for a bridge.
    """
    n = graph.n_segments
    chains = _chains(n, partner, bridges)
    ends, node_x, node_y, kind = [], [*graph.node_x_px], [*graph.node_y_px], [*graph.node_kind]
    new_of = np.full(n, -1, np.int64)
    drawn: list[IntArray] = []
    for index, (chain, closed) in enumerate(chains):
        points = np.concatenate(
            [_points(graph, partner, segment)[:: 1 if forward else -1] for segment, forward in chain]
        )
        if closed:
            points = np.append(points, points[0])
            ends.append((len(node_x), len(node_x)))
            node_x.append(graph.x_px[points[0]])
            node_y.append(graph.y_px[points[0]])
            kind.append(NodeKind.LOOP)
        else:
            ends.append((_outer_node(graph, chain[0], first=True), _outer_node(graph, chain[-1], first=False)))
        drawn.append(points)
        new_of[[segment for segment, _ in chain]] = index
    every, offsets = np.concatenate(drawn), offsets_of(np.array([len(points) for points in drawn]))
    x, y, offsets, (seed,) = resample(graph.x_px[every], graph.y_px[every], offsets, (graph.seed_radius_px[every],))
    used, compact = np.unique(np.array(ends), return_inverse=True)
    compact = compact.reshape(-1, 2)
    lead = np.array([chain[0][0] for chain, _ in chains])
    flags = np.zeros(len(chains), np.int64)
    np.bitwise_or.at(flags, new_of[new_of >= 0], graph.segment_flags[new_of >= 0])
    joined = VesselGraph(
        shape=graph.shape,
        node_x_px=np.array(node_x)[used],
        node_y_px=np.array(node_y)[used],
        node_kind=np.array(kind, dtype=np.int64)[used],
        node_a=compact[:, 0],
        node_b=compact[:, 1],
        offsets=offsets,
        x_px=twice(x, offsets),
        y_px=twice(y, offsets),
        seed_radius_px=seed,
        vessel_class=graph.vessel_class[lead],
        class_probability=graph.class_probability[lead],
        segment_flags=flags,
        crossings=NO_CROSSINGS,
    )
    return joined, new_of


def _points(graph: VesselGraph, partner: Mapping[int, int], segment: int) -> IntArray:
    """Indices of a segment's points, without the node at a joined end."""
    first, stop = int(graph.offsets[segment]), int(graph.offsets[segment + 1])
    if stop - first > 2:
        first, stop = first + (segment in partner), stop - (segment + graph.n_segments in partner)
    return np.arange(first, stop)


def _chains(n: int, partner: Mapping[int, int], bridges: AbstractSet[int]) -> list[tuple[list[tuple[int, bool]], bool]]:
    """Follow partners from end to end: lists of (segment, forward), and whether the chain closes on itself."""
    seen: BoolArray = np.zeros(n, dtype=bool)
    chains = []
    ends_without = [end for end in range(2 * n) if end not in partner and end % n not in bridges]
    for entry in (*ends_without, *sorted(partner)):
        if seen[entry % n] or entry % n in bridges:
            continue
        chain: list[tuple[int, bool]] = []
        here = entry
        while not seen[here % n]:
            forward = here < n
            seen[here % n] = True
            chain.append((here % n, forward))
            leaving = here + n if forward else here - n
            if leaving not in partner:
                break
            here = partner[leaving]
        chains.append((chain, entry in partner))
    return chains


def _outer_node(graph: VesselGraph, link: tuple[int, bool], *, first: bool) -> int:
    segment, forward = link
    return int(graph.node_a[segment] if forward == first else graph.node_b[segment])


def _table(accepted: list[Candidate], new_of: IntArray, n: int) -> Crossings:
    """Which is over cannot be told from geometry: the lower index stands first."""
    pairs = np.array([[new_of[c.pairs[0][0] % n], new_of[c.pairs[1][0] % n]] for c in accepted], dtype=np.int64)
    return Crossings(
        np.array([c.x_px for c in accepted]), np.array([c.y_px for c in accepted]), pairs.min(axis=1),
        pairs.max(axis=1), np.array([c.probability for c in accepted]),
    )  # fmt: skip
