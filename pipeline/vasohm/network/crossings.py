"""Where vessels merely cross in the picture: two branchings a short bridge apart, or one node of four arms."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.graph import (
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
) -> VesselGraph:
    """Join the arms of vessels that cross and take the node away.

    Parameters
    ----------
    graph : nodes and segments as traced.
    settings : the probability asked for.
    forced : a person's word at (x_px, y_px): True for a crossing, False for a branching.

    Returns
    -------
    The graph in its fixed order, with `crossings` filled.
    """
    candidates = [_force(candidate, forced) for candidate in find_candidates(graph)]
    candidates.sort(key=lambda c: (-c.probability, c.y_px, c.x_px))
    taken: set[int] = set()
    accepted = []
    for candidate in candidates:
        if candidate.probability >= settings.threshold and taken.isdisjoint(candidate.nodes):
            taken.update(candidate.nodes)
            accepted.append(candidate)
    return in_fixed_order(_join(graph, accepted)) if accepted else graph


def _force(candidate: Candidate, forced: Sequence[tuple[float, float, bool]]) -> Candidate:
    for x, y, is_crossing in forced:
        if np.hypot(candidate.x_px - x, candidate.y_px - y) <= FORCE_REACH_PX:
            return replace(candidate, probability=1.0 if is_crossing else 0.0)
    return candidate


FORCE_REACH_PX = 10.0  # as every point of an edits file


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


def _join(graph: VesselGraph, accepted: list[Candidate]) -> VesselGraph:
    """Put the segments of each vessel together across its crossings."""
    n = graph.n_segments
    partner: dict[int, int] = {}
    for candidate in accepted:
        for a, b in candidate.pairs:
            partner[a], partner[b] = b, a
    bridges = {candidate.bridge for candidate in accepted}
    chains = _chains(n, partner, bridges)
    near, x, y, seed = _trimmed(graph, partner)
    pieces_x, pieces_y, pieces_seed, node_a, node_b, kind, members = [], [], [], [], [], graph.node_kind.copy(), []
    node_x, node_y = graph.node_x_px.tolist(), graph.node_y_px.tolist()
    kinds = kind.tolist()
    for chain, closed in chains:
        indices = [near[segment] if forward else near[segment][::-1] for segment, forward in chain]
        points = np.concatenate(indices)
        px, py = x[points], y[points]
        if closed:
            px, py, points = np.append(px, px[0]), np.append(py, py[0]), np.append(points, points[0])
            node_x.append(float(px[0]))
            node_y.append(float(py[0]))
            kinds.append(int(NodeKind.LOOP))
            node_a.append(len(node_x) - 1)
            node_b.append(len(node_x) - 1)
        else:
            node_a.append(_outer_node(graph, chain[0], first=True))
            node_b.append(_outer_node(graph, chain[-1], first=False))
        pieces_x.append(px)
        pieces_y.append(py)
        pieces_seed.append(seed[points])
        members.append([segment for segment, _ in chain])
    offsets = offsets_of(np.array([len(piece) for piece in pieces_x]))
    new_x, new_y, offsets, (new_seed,) = resample(
        np.concatenate(pieces_x), np.concatenate(pieces_y), offsets, (np.concatenate(pieces_seed),)
    )
    new_of = np.full(n, -1, np.int64)
    for index, chain_members in enumerate(members):
        new_of[chain_members] = index
    lead = np.array([chain_members[0] for chain_members in members])
    used, compact = np.unique(np.array([node_a, node_b]), return_inverse=True)
    compact = compact.reshape(2, -1)
    return VesselGraph(
        graph.shape, np.array(node_x)[used], np.array(node_y)[used], np.array(kinds)[used], compact[0], compact[1],
        offsets, twice(new_x, offsets), twice(new_y, offsets), new_seed, graph.vessel_class[lead],
        graph.class_probability[lead],
        np.array([np.bitwise_or.reduce(graph.segment_flags[m]) for m in members], dtype=np.int64),
        _table(accepted, new_of, n),
    )  # fmt: skip


def _trimmed(graph: VesselGraph, partner: dict[int, int]) -> tuple[list[IntArray], FloatArray, FloatArray, FloatArray]:
    """Return each segment's point indices without the node at a crossing: the way across is drawn straight."""
    n = graph.n_segments
    return (
        [
            np.arange(graph.offsets[i] + (i in partner), graph.offsets[i + 1] - (i + n in partner))
            if graph.offsets[i + 1] - graph.offsets[i] > 2
            else np.arange(graph.offsets[i], graph.offsets[i + 1])
            for i in range(n)
        ],
        graph.x_px,
        graph.y_px,
        graph.seed_radius_px,
    )


def _chains(n: int, partner: dict[int, int], bridges: set[int]) -> list[tuple[list[tuple[int, bool]], bool]]:
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
