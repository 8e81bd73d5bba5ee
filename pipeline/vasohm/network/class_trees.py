"""Arteriolar and venular trees that touch in the picture come apart: no blood passes from one into the other there."""

from collections import defaultdict
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.graph import NodeKind, VesselClass, VesselGraph, branch_directions
from vasohm.network.radius import MeasuredGraph
from vasohm.network.rejoin import NewNodes, rejoin

CLASSES = (VesselClass.ARTERIOLE, VesselClass.VENULE)
BRIDGE_RADII = 4.0  # two vessels share a bridge no longer than this many times both radii where they cross
STRAIGHT_COSINE = 0.5  # and the one that passes over it turns by less than 60 degrees


@dataclass(frozen=True, slots=True)
class TreeSettings:
    """Whether networks are trees of one class each, as those that a picture of a retina shows."""

    by_class: bool


@dataclass(frozen=True, slots=True, eq=False)
class _Ends:
    """Both ends of all segments: first those at `node_a`, then those at `node_b`."""

    node: IntArray  # (2 n,)
    towards: FloatArray  # (2 n, 2) unit direction to the node
    kin: IntArray  # (2 n,) class of the tree that each belongs to
    at: dict[int, list[int]]  # ends at each node where trees come apart

    def of(self, node: int, kin: int) -> list[int]:
        return [end for end in self.at[node] if self.kin[end] == kin]


def part_trees(measured: MeasuredGraph, settings: TreeSettings) -> MeasuredGraph:
    """Part networks at the nodes where arteriole and venule meet.

    Parameters
    ----------
    measured : MeasuredGraph
        Segments with their classes.
    settings : TreeSettings
        Otherwise the graph is returned as it is.

    Returns
    -------
    MeasuredGraph
        In its fixed order. A node of both classes becomes one for each. Of a class with two arms there the node is
        taken away and the two are one segment; one arm ends where its centreline does; more meet at the old place.

    Notes
    -----
    A segment of no class goes with the tree it hangs on; between both, with that of which arms go on through it the
    straightest and most probably: the larger sum over its nodes of (class probability) (1 - cos of the angle between
    the arms) / 2 of the best arm. Its own class stays unsaid, unless it becomes part of a segment whose class is said.

    Blood does pass from arteriole to venule where capillaries join them: a node with a segment of class capillary stays
    whole.

    Two passages whose arms alternate around a node cross, and so do two that share a short bridge: the vessel whose
    arms it leaves without a way is led on across. Both are added to `crossings`. Arms that the lumen of the other
    vessel had shortened stay so by its radius where three or more meet.
    """
    graph = measured.graph
    if not settings.by_class or any(not (graph.vessel_class == kind).any() for kind in CLASSES):
        return measured
    node, _, towards = branch_directions(graph)
    kin = np.tile(trees_of_segments(graph), 2)
    has = [np.bincount(node, kin == kind, graph.n_nodes) > 0 for kind in (*CLASSES, VesselClass.CAPILLARY)]
    mixed = has[0] & has[1] & ~has[2]
    if not mixed.any():
        return measured
    at = defaultdict(list)
    for end in np.flatnonzero(mixed[node]).tolist():
        at[int(node[end])].append(end)
    ends = _Ends(node, towards, kin, dict(at))
    partner: dict[int, int] = {}
    found = []
    chains = _Chains(graph.n_segments)
    for one, other, bridge in _across_bridges(measured, ends):
        if chains.join(one, other):
            partner[one], partner[other] = other, one
            places = [(graph.node_x_px[node[end]], graph.node_y_px[node[end]]) for end in (one, other)]
            x, y = np.mean(places, axis=0)
            found.append((float(x), float(y), one % graph.n_segments, bridge))
    for place in ends.at:
        passing = [pair for kind in CLASSES if len(pair := [e for e in ends.of(place, kind) if e not in partner]) == 2]
        joined = [pair for pair in passing if chains.join(*pair)]
        for one, other in joined:
            partner[one], partner[other] = other, one
        if len(joined) == len(CLASSES) == len(ends.at[place]) / 2 and _alternate(ends, joined):
            x, y = float(graph.node_x_px[place]), float(graph.node_y_px[place])
            found.append((x, y, joined[0][0] % graph.n_segments, joined[1][0] % graph.n_segments))
    return rejoin(measured, _new_nodes(graph, ends, partner), partner, found)


def trees_of_segments(graph: VesselGraph) -> IntArray:
    """Class (n_segments,) of the tree that each segment belongs to: its own, or that of the vessels it hangs on."""
    n = graph.n_segments
    node, _, towards = branch_directions(graph)
    own = np.tile(graph.vessel_class, 2)
    told = np.isin(own, CLASSES)
    says = np.bincount(node, told, graph.n_nodes) > 0
    unsaid = own == VesselClass.NONE
    through = np.flatnonzero(unsaid & ~says[node])
    links = coo_array((np.ones(len(through)), (through % n, n + node[through])), shape=(n + graph.n_nodes,) * 2)
    _, group = connected_components(links, directed=False)
    support = np.zeros((n + graph.n_nodes, len(CLASSES)))
    probability = np.nan_to_num(np.tile(graph.class_probability, 2), nan=1.0)
    arms = defaultdict(list)
    for end in np.flatnonzero(told).tolist():
        arms[int(node[end])].append(end)
    for end in np.flatnonzero(unsaid & says[node]).tolist():
        others = np.array(arms[int(node[end])])
        straight = probability[others] * (1 - towards[others] @ towards[end]) / 2
        for k, kind in enumerate(CLASSES):
            support[group[end % n], k] += straight[own[others] == kind].max(initial=0.0)
    best = support[group[:n]]
    hung = np.where(best.max(axis=1) > 0, np.array(CLASSES)[best.argmax(axis=1)], VesselClass.NONE)
    return np.where(graph.vessel_class == VesselClass.NONE, hung, graph.vessel_class).astype(np.int64)


class _Chains:
    """Which segments are joined already, so that none is joined into a closed ring."""

    def __init__(self, n_segments: int) -> None:
        self._root = list(range(n_segments))

    def _find(self, segment: int) -> int:
        while self._root[segment] != segment:
            segment = self._root[segment]
        return segment

    def join(self, one: int, other: int) -> bool:
        n = len(self._root)
        a, b = self._find(one % n), self._find(other % n)
        self._root[max(a, b)] = min(a, b)
        return a != b


def _across_bridges(measured: MeasuredGraph, ends: _Ends) -> Iterator[tuple[int, int, int]]:
    """Pairs of ends, each alone of its class at its node, that a short bridge of the other class lies between."""
    graph, n = measured.graph, measured.graph.n_segments
    radius_um = np.array(
        [np.median(measured.radius_um[a:b]) for a, b in zip(graph.offsets, graph.offsets[1:], strict=False)]
    )
    for bridge in range(n):
        a, b = int(graph.node_a[bridge]), int(graph.node_b[bridge])
        if a == b or a not in ends.at or b not in ends.at:
            continue
        other = VesselClass.VENULE if ends.kin[bridge] == VesselClass.ARTERIOLE else VesselClass.ARTERIOLE
        single = [ends.of(place, other) for place in (a, b)]
        if [len(few) for few in single] != [1, 1]:
            continue
        one, two = single[0][0], single[1][0]
        reach_um = BRIDGE_RADII * (radius_um[bridge] + max(radius_um[one % n], radius_um[two % n]))
        if one % n != two % n and measured.length_um[bridge] <= reach_um and _goes_on(ends, one, two):
            yield one, two, bridge


def _goes_on(ends: _Ends, one: int, other: int) -> bool:
    return float(ends.towards[one] @ ends.towards[other]) < -STRAIGHT_COSINE


def _alternate(ends: _Ends, pairs: list[list[int]]) -> bool:
    """Whether the arms of two passages lie by turns around their node."""
    turn = np.arctan2(ends.towards[:, 1], ends.towards[:, 0])
    first, second = (np.mod(turn[pairs[k]] - turn[pairs[0][0]], 2 * np.pi) for k in (0, 1))
    return bool((second < first[1]).sum() == 1)


def _new_nodes(graph: VesselGraph, ends: _Ends, partner: dict[int, int]) -> NewNodes:
    """The old nodes, and for each class at a node that comes apart one of its own."""
    x, y, kind = graph.node_x_px.tolist(), graph.node_y_px.tolist(), graph.node_kind.tolist()
    of_end = ends.node.copy()
    last_points: IntArray = np.concatenate((graph.offsets[:-1], graph.offsets[1:] - 1))
    left: BoolArray = np.ones(2 * graph.n_segments, dtype=bool)
    left[list(partner)] = False
    for place in ends.at:
        for kin in CLASSES:
            own = [end for end in ends.of(place, kin) if left[end]]
            if not own:
                continue
            of_end[own] = len(x)
            alone = len(own) == 1
            x.append(float(graph.x_px[last_points[own[0]]]) if alone else graph.node_x_px[place])
            y.append(float(graph.y_px[last_points[own[0]]]) if alone else graph.node_y_px[place])
            kind.append({1: NodeKind.END, 2: NodeKind.LOOP}.get(len(own), NodeKind.BRANCHING))
    return NewNodes(np.array(x), np.array(y), np.array(kind, dtype=np.int64), of_end)
