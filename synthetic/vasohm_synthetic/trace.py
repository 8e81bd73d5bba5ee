"""From a scene to its true graph: vessels cut at the field of view, children begun where they leave the parent."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from vasohm_synthetic.arrays import FloatArray, IntArray, freeze
from vasohm_synthetic.scene import Scene, Vessel


@dataclass(frozen=True, slots=True, eq=False)
class Segment:
    """A visible vessel segment: finely sampled axis from node_a to node_b (without the stub inside the parent)."""

    vessel: Vessel
    s_px: FloatArray  # arc length from the segment's first point
    x_px: FloatArray
    y_px: FloatArray
    radius_px: FloatArray
    node_a: int  # index into the graph's nodes
    node_b: int
    cut_by_rim: bool

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Graph:
    """True nodes and segments of what can be seen; indices count from 0."""

    node_x_px: FloatArray
    node_y_px: FloatArray
    node_kind: tuple[str, ...]  # end | rim | branching | loop
    node_degree: IntArray
    role: IntArray  # 1 inlet, -1 outlet, 0 neither
    segments: tuple[Segment, ...]

    def __post_init__(self) -> None:
        freeze(self)


def trace(scene: Scene) -> Graph:
    """Find the true graph of a scene.

    A child starts where its axis leaves the lumen of its parent, the widest vessel there, that is the points within
    the parent's radius of the parent's axis; the node stays on the parent's axis. An end node is an inlet where its
    vessel's axis begins and an outlet where it ends, because axes run with the flow.
    """
    degree = scene.degree
    node_at: dict[int, int] = {}
    nodes: list[tuple[float, float, str]] = []

    def node(index: int, kind: str) -> int:
        if index not in node_at:
            node_at[index] = len(nodes)
            nodes.append((float(scene.node_x_px[index]), float(scene.node_y_px[index]), kind))
        return node_at[index]

    segments = []
    for vessel in scene.vessels:
        low, high = (_start(scene, vessel, degree, end=end) for end in (0, 1))
        s = vessel.s_px
        for first, last, rim in _visible_runs(scene, vessel, low, s[-1] - high):
            at = np.concatenate(([first], s[(s > first) & (s < last)], [last]))
            x, y = np.interp(at, s, vessel.x_px), np.interp(at, s, vessel.y_px)
            ends = []
            for which, (index, point) in enumerate(((vessel.node_a, 0), (vessel.node_b, -1))):
                if rim[which]:
                    ends.append(len(nodes))
                    nodes.append((float(x[point]), float(y[point]), "rim"))
                else:
                    ends.append(node(index, _kind(scene, index, degree)))
            radius = np.interp(at, s, vessel.radius_px)
            segments.append(Segment(vessel, at - at[0], x, y, radius, ends[0], ends[1], any(rim)))
    return _graph(nodes, segments)


def _graph(nodes: list[tuple[float, float, str]], segments: list[Segment]) -> Graph:
    ends = np.array([n for segment in segments for n in (segment.node_a, segment.node_b)], np.int64)
    degree = np.bincount(ends, minlength=len(nodes)).astype(np.int64)
    role = np.zeros(len(nodes), np.int64)
    for segment in segments:
        for index, sign in ((segment.node_a, 1), (segment.node_b, -1)):
            if degree[index] == 1:
                role[index] = sign
    xy = np.array([entry[:2] for entry in nodes], float).reshape(-1, 2)
    return Graph(xy[:, 0].copy(), xy[:, 1].copy(), tuple(entry[2] for entry in nodes), degree, role, tuple(segments))


def _kind(scene: Scene, index: int, degree: IntArray) -> str:
    if degree[index] == 1:
        return "end"
    if degree[index] == 2 and any(v.node_a == v.node_b == index for v in scene.vessels):
        return "loop"
    return "branching"


def parent_of(scene: Scene, node: int) -> Vessel:
    """The vessel whose lumen the others at a branching spring from: the widest where they meet."""
    here = [v for v in scene.vessels if node in (v.node_a, v.node_b)]
    return max(here, key=lambda v: float(v.radius_px[0 if v.node_a == node else -1]))


def _start(scene: Scene, vessel: Vessel, degree: IntArray, *, end: int) -> float:
    """Arc length from the vessel's first (end 0) or last (end 1) node to where it leaves the parent's lumen."""
    node = (vessel.node_a, vessel.node_b)[end]
    if degree[node] < 3:
        return 0.0
    parent = parent_of(scene, node)
    if parent is vessel:
        return 0.0
    turn = slice(None) if end == 0 else slice(None, None, -1)
    x, y = vessel.x_px[turn], vessel.y_px[turn]
    s = vessel.s_px if end == 0 else vessel.s_px[-1] - vessel.s_px[::-1]
    distance, nearest = cKDTree(np.column_stack((parent.x_px, parent.y_px))).query(np.column_stack((x, y)))
    outside = np.asarray(distance) - parent.radius_px[np.asarray(nearest)]
    if not (outside > 0).any():
        return float(s[-1])
    first = int(np.argmax(outside > 0))
    if first == 0:
        return 0.0
    back = outside[first] / (outside[first] - outside[first - 1])
    return float(s[first] - back * (s[first] - s[first - 1]))


def _visible_runs(
    scene: Scene, vessel: Vessel, low: float, high: float
) -> list[tuple[float, float, tuple[bool, bool]]]:
    """Stretches of arc length within low..high that can be seen, and whether the rim cuts their ends."""
    s = vessel.s_px
    if high <= low:
        return []
    at = np.concatenate(([low], s[(s > low) & (s < high)], [high]))

    def seen(where: FloatArray) -> FloatArray:
        x, y = np.interp(where, s, vessel.x_px), np.interp(where, s, vessel.y_px)
        return scene.visible(x, y).astype(float)

    inside = seen(at) > 0
    edges = np.flatnonzero(np.diff(np.concatenate(([False], inside, [False])).astype(int)))
    runs = []
    for first, stop in zip(edges[::2].tolist(), (edges[1::2] - 1).tolist(), strict=True):
        rim = (first > 0, stop < len(at) - 1)
        begin = _bisect(seen, at[first], at[first - 1]) if rim[0] else float(at[first])
        end = _bisect(seen, at[stop], at[stop + 1]) if rim[1] else float(at[stop])
        if end > begin:
            runs.append((begin, end, rim))
    return runs


def _bisect(seen: Callable[[FloatArray], FloatArray], inside: float, outside: float) -> float:
    """Arc length at which the field of view ends between a visible and an unseen point, to 1e-9 px."""
    for _ in range(30):
        middle = 0.5 * (inside + outside)
        if seen(np.array([middle]))[0] > 0:
            inside = middle
        else:
            outside = middle
    return inside
