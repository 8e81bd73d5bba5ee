"""Segments put together at their ends: across a crossing, or where a branching has lost its branch."""

from collections.abc import Mapping
from collections.abc import Set as AbstractSet

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.graph import NO_CROSSINGS, NodeKind, VesselGraph
from vasohm.network.passages import DIRECTION_PX, bow
from vasohm.network.paths import offsets_of, resample, twice

WAY_PX = 1.0  # between the points drawn across a gap


def join_ends(
    graph: VesselGraph, partner: Mapping[int, int], bridges: AbstractSet[int], inside: IntArray | None = None
) -> tuple[VesselGraph, IntArray]:
    """Put segments together at their ends, and leave the bridges out.

    Parameters
    ----------
    graph : the graph; nodes at which segments are joined vanish, the way across is drawn smooth.
    partner : end -> end, both ways; an end is a segment's index (its first point), or that plus n (its last).
    bridges : segments that vanish.
    inside : points (2 n,) at each end that are drawn anew with the way across; None: the node only.

    Returns
    -------
    The graph, its crossings emptied and its order not fixed; and the new index of each old segment, -1 for a bridge.
    """
    n = graph.n_segments
    chains = follow_chains(n, partner, bridges)
    ends, node_x, node_y, kind = [], [*graph.node_x_px], [*graph.node_y_px], [*graph.node_kind]
    new_of = np.full(n, -1, np.int64)
    drawn: list[FloatArray] = []
    for index, (chain, closed) in enumerate(chains):
        points = _drawn(graph, partner, chain, inside)
        if closed:
            points = np.concatenate((points, _way_across(points, points), points[:1]))
            ends.append((len(node_x), len(node_x)))
            node_x.append(points[0, 0])
            node_y.append(points[0, 1])
            kind.append(NodeKind.LOOP)
        else:
            ends.append((_outer_node(graph, chain[0], first=True), _outer_node(graph, chain[-1], first=False)))
        drawn.append(points)
        new_of[[segment for segment, _ in chain]] = index
    every, offsets = np.concatenate(drawn), offsets_of(np.array([len(points) for points in drawn]))
    x, y, offsets, (seed,) = resample(every[:, 0], every[:, 1], offsets, (every[:, 2],))
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


def _drawn(
    graph: VesselGraph, partner: Mapping[int, int], chain: list[tuple[int, bool]], inside: IntArray | None
) -> FloatArray:
    """Points (x, y, seed radius) along a chain of segments, with the ways across its gaps."""
    parts: list[FloatArray] = []
    for segment, forward in chain:
        index = _points(graph, partner, segment, inside)[:: 1 if forward else -1]
        points = np.column_stack((graph.x_px[index], graph.y_px[index], graph.seed_radius_px[index]))
        parts += [_way_across(parts[-1], points), points] if parts else [points]
    return np.concatenate(parts)


def _points(graph: VesselGraph, partner: Mapping[int, int], segment: int, inside: IntArray | None) -> IntArray:
    """Indices of a segment's points, without those inside the junction at a joined end: at least the node."""
    first, stop = int(graph.offsets[segment]), int(graph.offsets[segment + 1])
    if stop - first > 2:
        ends = (segment, segment + graph.n_segments)
        leave = [max(1, 0 if inside is None else int(inside[end])) if end in partner else 0 for end in ends]
        first, stop = first + leave[0], stop - leave[1]
    return np.arange(first, stop)


def _way_across(before: FloatArray, behind: FloatArray) -> FloatArray:
    """Points (x, y, seed radius) between the last of `before` and the first of `behind`, both left out."""
    start, stop = before[-1], behind[0]
    gap = float(np.hypot(*(stop - start)[:2]))
    t = np.arange(1, int(gap / WAY_PX)) * WAY_PX / max(gap, WAY_PX)
    ways = (
        start[:2] - before[-min(len(before), DIRECTION_PX), :2],
        behind[min(len(behind), DIRECTION_PX) - 1, :2] - stop[:2],
    )
    if min(float(np.hypot(*way)) for way in ways) < WAY_PX:
        ways = (stop[:2] - start[:2],) * 2
    return np.column_stack((bow((start[:2], stop[:2]), ways, t), start[2] + t * (stop[2] - start[2])))


def follow_chains(
    n: int, partner: Mapping[int, int], bridges: AbstractSet[int]
) -> list[tuple[list[tuple[int, bool]], bool]]:
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
