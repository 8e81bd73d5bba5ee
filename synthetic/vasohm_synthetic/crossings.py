"""Where vessels merely cross in the picture."""

import numpy as np
import pandas as pd
from scipy.spatial import cKDTree

from vasohm_synthetic.columns import CROSSING_COLUMNS
from vasohm_synthetic.trace import Graph, Segment


def crossing_table(graph: Graph, image_id: str) -> pd.DataFrame:
    """List the places where axes of different layers meet.

    Which lies over cannot be told from light that adds or multiplies, so the lower id stands first.
    """
    rows = []
    trees = [cKDTree(np.column_stack((s.x_px, s.y_px))) for s in graph.segments]
    for i, first in enumerate(graph.segments):
        for j in range(i + 1, len(graph.segments)):
            second = graph.segments[j]
            if first.vessel.layer == second.vessel.layer:
                continue
            found: list[tuple[float, float]] = []
            for a, near in enumerate(trees[i].query_ball_tree(trees[j], 0.5)):
                found += [point for b in near if (point := _meeting(first, a, second, b)) is not None]
            for x, y in _apart(found):
                rows.append((image_id, x, y, i + 1, j + 1, 1.0))
    return pd.DataFrame(rows, columns=CROSSING_COLUMNS)


def _meeting(first: Segment, a: int, second: Segment, b: int) -> tuple[float, float] | None:
    """Where piece a of one axis meets piece b of another."""
    if a + 1 >= len(first.x_px) or b + 1 >= len(second.x_px):
        return None
    px, py = first.x_px[a], first.y_px[a]
    ux, uy = first.x_px[a + 1] - px, first.y_px[a + 1] - py
    vx, vy = second.x_px[b + 1] - second.x_px[b], second.y_px[b + 1] - second.y_px[b]
    cross = ux * vy - uy * vx
    if cross == 0:
        return None
    wx, wy = second.x_px[b] - px, second.y_px[b] - py
    t, u = (wx * vy - wy * vx) / cross, (wx * uy - wy * ux) / cross
    if 0 <= t <= 1 and 0 <= u <= 1:
        return float(px + t * ux), float(py + t * uy)
    return None


def _apart(points: list[tuple[float, float]]) -> list[tuple[float, float]]:
    """Drop points that repeat an earlier one."""
    kept: list[tuple[float, float]] = []
    for x, y in points:
        if all(np.hypot(x - kx, y - ky) > 1e-6 for kx, ky in kept):
            kept.append((x, y))
    return kept
