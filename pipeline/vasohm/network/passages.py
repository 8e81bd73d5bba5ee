"""The ways of two vessels through their crossing, where neither shows its own edges."""

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.graph import VesselGraph, end_radius

LEAST_ANGLE = np.radians(20.0)  # flatter crossings are not told
BESIDE_PX = 2.0  # blur: edges are seen apart from so far outside the other lumen
DIRECTION_PX = 16  # of a way's direction beside the crossing: with .1 px of jitter good to half a degree
CLEAR_PX = 4  # smoothing carries what lies inside so far out

Window = tuple[int, int, int]  # segment, its first and its last point at a crossing, as indices of all points


def crossing_windows(graph: VesselGraph) -> list[Window]:
    """Stretches of centreline along which the two vessels of a crossing lie over each other."""
    windows = []
    calibre = end_radius(graph)[:, 0]
    found = graph.crossings
    for place, pair in enumerate(zip(found.segment_over.tolist(), found.segment_under.tolist(), strict=True)):
        if pair[0] == pair[1]:
            continue  # a vessel that crosses itself has no two nearest places
        at = [_nearest(graph, segment, found.x_px[place], found.y_px[place]) for segment in pair]
        ways = [_chord(graph, segment, point) for segment, point in zip(pair, at, strict=True)]
        angle = max(float(np.arccos(np.clip(abs(ways[0] @ ways[1]), 0.0, 1.0))), LEAST_ANGLE)
        reach = int(np.ceil((calibre[list(pair)].sum() + BESIDE_PX) / (2 * np.tan(angle / 2)) + BESIDE_PX))
        for segment, point in zip(pair, at, strict=True):
            first, last = (
                max(int(graph.offsets[segment]), point - reach),
                min(int(graph.offsets[segment + 1]) - 1, point + reach),
            )
            windows.append((segment, first, last))
    return windows


def in_windows(windows: list[Window], n_points: int) -> BoolArray:
    """Points (n_points,) of these stretches."""
    inside = np.zeros(n_points, dtype=bool)
    for _, first, last in windows:
        inside[first : last + 1] = True
    return inside


def draw_passages(
    x: FloatArray, y: FloatArray, offsets: IntArray, windows: list[Window]
) -> tuple[FloatArray, FloatArray]:
    """Draw each stretch anew as a cubic between the centreline before and behind it (Hermite).

    A stretch that reaches an end of its segment stays as it is.
    """
    xy = np.column_stack((x, y))
    for segment, first, last in windows:
        start, stop = first - CLEAR_PX, last + CLEAR_PX
        before, behind = (
            max(int(offsets[segment]), start - DIRECTION_PX),
            min(int(offsets[segment + 1]) - 1, stop + DIRECTION_PX),
        )
        if start - before < CLEAR_PX or behind - stop < CLEAR_PX:
            continue
        xy[start : stop + 1] = bow(
            (xy[start], xy[stop]), (xy[start] - xy[before], xy[behind] - xy[stop]),
            np.linspace(0.0, 1.0, stop - start + 1),
        )  # fmt: skip
    return xy[:, 0].copy(), xy[:, 1].copy()


def bow(ends: tuple[FloatArray, FloatArray], ways: tuple[FloatArray, FloatArray], t: FloatArray) -> FloatArray:
    """Points (n, 2) at `t` from 0 to 1 of the cubic from one end to the other that leaves and arrives in these ways."""
    gap = float(np.hypot(*(ends[1] - ends[0])))
    slopes = [gap * way / max(float(np.hypot(*way)), 1e-9) for way in ways]
    t = t[:, None]
    points = ends[0] + t * t * (3 - 2 * t) * (ends[1] - ends[0])
    return np.asarray(points + t * (1 - t) ** 2 * slopes[0] - t * t * (1 - t) * slopes[1])


def _nearest(graph: VesselGraph, segment: int, x: float, y: float) -> int:
    first, stop = int(graph.offsets[segment]), int(graph.offsets[segment + 1])
    return first + int(np.hypot(graph.x_px[first:stop] - x, graph.y_px[first:stop] - y).argmin())


def _chord(graph: VesselGraph, segment: int, point: int) -> FloatArray:
    """Unit direction of a segment over a stretch around one of its points."""
    low = max(int(graph.offsets[segment]), point - 2 * DIRECTION_PX)
    high = min(int(graph.offsets[segment + 1]) - 1, point + 2 * DIRECTION_PX)
    way = np.array([graph.x_px[high] - graph.x_px[low], graph.y_px[high] - graph.y_px[low]])
    return np.asarray(way / max(float(np.hypot(*way)), 1e-9))
