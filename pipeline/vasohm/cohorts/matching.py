"""Which place on one set of centrelines belongs to which on another, however both are cut. Arrays only."""

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy.sparse import coo_array
from scipy.sparse.csgraph import maximum_bipartite_matching
from scipy.spatial import cKDTree

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze

LEAST_REACH_PX = 2.0  # a centreline further off belongs to another vessel, unless the vessel is wide
REACH_RADII = 0.75  # of a wide vessel: its centreline lies within its own lumen
BEYOND_PX = 2.0  # how far past the end of one centreline the other may go on
LEAST_COSINE = np.cos(np.deg2rad(45.0))  # of the angle between two centrelines that are one vessel
PLACE_PX = 5.0  # between a measured branching or crossing and the true one
TANGENT_POINTS = 2  # to either side, from which a direction is taken
NEIGHBOURS = (8, 64, 512)  # points looked at for one of the right direction, more only where fewer do not do
BLOCK = 4_000_000  # pairs of points held at a time
LONGEST_STEP = 3.0  # along the true centreline, in steps along the measured one: beyond it the match has jumped


@dataclass(frozen=True, slots=True, eq=False)
class Track:
    """Centrelines as points in their order, about a pixel apart; those of a segment stand together."""

    x_px: FloatArray  # (n,)
    y_px: FloatArray
    s_px: FloatArray  # arc length from the segment's first point
    radius_px: FloatArray
    segment: IntArray  # index of the segment, ascending
    reach_px: FloatArray  # how far off another track may lie and still be the same vessel

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def xy(self) -> FloatArray:
        """Positions, (n, 2)."""
        return np.column_stack((self.x_px, self.y_px))

    @property
    def step_px(self) -> FloatArray:
        """Arc length to the next point, (n,); NaN at the last point of a segment."""
        step = np.full(len(self.s_px), np.nan)
        step[:-1] = np.where(self.segment[1:] == self.segment[:-1], np.diff(self.s_px), np.nan)
        return step

    @property
    def weight_px(self) -> FloatArray:
        """Arc length that each point stands for, (n,)."""
        half = 0.5 * np.nan_to_num(self.step_px)
        return half + np.concatenate(([0.0], half[:-1])) if len(half) else half

    @property
    def tangent(self) -> FloatArray:
        """Unit direction at each point, (n, 2); zero in a segment without length."""
        index = np.arange(len(self.segment))
        first = np.searchsorted(self.segment, self.segment, side="left")
        last = np.searchsorted(self.segment, self.segment, side="right") - 1
        ahead, behind = np.minimum(index + TANGENT_POINTS, last), np.maximum(index - TANGENT_POINTS, first)
        along = self.xy[ahead] - self.xy[behind]
        length = np.hypot(along[:, 0], along[:, 1])
        return along / np.where(length > 0, length, 1.0)[:, None]


def track(points: pd.DataFrame, segments: pd.DataFrame, pixel_size_um: float, *, reaching: bool) -> Track:
    """Take the centrelines of a table of points; the index of a segment is its row in the table of segments.

    `reaching` ones are the same vessel as others within their lumen, the rest only where the others reach them.
    """
    row = pd.Series(np.arange(len(segments)), index=segments["segment_id"])
    segment = row.reindex(points["segment_id"]).to_numpy(np.int64)
    order = np.lexsort((points["point"].to_numpy(), segment))

    def column(name: str) -> FloatArray:
        return points[name].to_numpy(np.float64)[order]

    radius_px = column("radius_um") / pixel_size_um
    return Track(
        x_px=column("x_px"),
        y_px=column("y_px"),
        s_px=column("s_um") / pixel_size_um,
        radius_px=radius_px,
        segment=segment[order],
        reach_px=np.maximum(LEAST_REACH_PX, REACH_RADII * radius_px) if reaching else np.zeros(len(order)),
    )


@dataclass(frozen=True, slots=True, eq=False)
class Feet:
    """The foot of each point of one track on another track."""

    segment: IntArray  # (n,) of the other track; -1 where there is none
    s_px: FloatArray  # along that segment, between its points; NaN where there is none
    radius_px: FloatArray  # there
    across_px: FloatArray  # distance at right angles to the other track

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def found(self) -> BoolArray:
        return self.segment >= 0


def feet(points: Track, lines: Track) -> Feet:
    """Find for each point the nearest place of another track with its direction and within reach.

    Returns
    -------
    Feet
        Of the length of `points`. A point has none where the nearest place lies out of the reach of both, or where
        the other track has ended before.
    """
    at = nearest(points, lines)
    n = len(at)
    if not len(lines.segment):
        nothing = np.full(n, np.nan)
        return Feet(np.full(n, -1), nothing, nothing.copy(), nothing.copy())
    place, last = np.maximum(at, 0), len(lines.segment) - 1
    # pieces of the line before and behind the nearest point; at its ends they have no length
    before = np.where(lines.segment[np.maximum(place - 1, 0)] == lines.segment[place], np.maximum(place - 1, 0), place)
    behind = np.where(
        lines.segment[np.minimum(place + 1, last)] == lines.segment[place], np.minimum(place + 1, last), place
    )
    here = points.xy
    share_1, off_1 = _on_piece(here, lines.xy[before], lines.xy[place])
    share_2, off_2 = _on_piece(here, lines.xy[place], lines.xy[behind])
    first = np.hypot(*off_1.T) <= np.hypot(*off_2.T)
    low, high = np.where(first, before, place), np.where(first, place, behind)
    share = np.where(first, share_1, share_2)
    offset = np.where(first[:, None], off_1, off_2)
    tangent = lines.tangent[place]
    beyond = np.abs(np.sum(offset * tangent, axis=1))
    across = np.abs(offset[:, 0] * tangent[:, 1] - offset[:, 1] * tangent[:, 0])
    found = (at >= 0) & (beyond <= BEYOND_PX)
    return Feet(
        segment=np.where(found, lines.segment[place], -1),
        s_px=np.where(found, lines.s_px[low] + share * (lines.s_px[high] - lines.s_px[low]), np.nan),
        radius_px=np.where(
            found, lines.radius_px[low] + share * (lines.radius_px[high] - lines.radius_px[low]), np.nan
        ),
        across_px=np.where(found, across, np.nan),
    )


def _on_piece(here: FloatArray, a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Where the foot lies on straight pieces a-b, as a share from 0 to 1, and the offset from it, (n, 2)."""
    along = b - a
    squared = np.sum(along**2, axis=1)
    share = np.clip(np.sum((here - a) * along, axis=1) / np.where(squared > 0, squared, 1.0), 0.0, 1.0)
    return share, here - (a + share[:, None] * along)


def nearest(points: Track, lines: Track) -> IntArray:
    """Index of the nearest point of `lines` with the direction and within reach; -1 where there is none."""
    found = np.full(len(points.segment), -1)
    n_lines = len(lines.segment)
    if not n_lines or not len(found):
        return found
    tree = cKDTree(lines.xy)
    furthest = max(float(points.reach_px.max()), float(lines.reach_px.max()))
    here, ahead, line_ahead = points.xy, points.tangent, lines.tangent
    todo = np.arange(len(found))
    for most in NEIGHBOURS:
        k = min(most, n_lines)
        unsettled = []
        for block in np.array_split(todo, max(1, len(todo) * k // BLOCK)):
            distance, index = tree.query(here[block], k=list(range(1, k + 1)), distance_upper_bound=furthest)
            inside = np.isfinite(distance)
            index = np.where(inside, index, 0)
            reach = np.maximum(points.reach_px[block][:, None], lines.reach_px[index])
            cosine = np.abs(np.einsum("ij,ikj->ik", ahead[block], line_ahead[index]))
            fits = inside & (distance <= reach) & (cosine >= LEAST_COSINE)
            fitting = fits.any(axis=1)
            found[block[fitting]] = index[fitting, np.argmax(fits, axis=1)[fitting]]
            unsettled.append(block[~fitting & inside[:, -1]])
        todo = np.concatenate(unsettled)
        if not len(todo) or k == n_lines:
            break
    return found


@dataclass(frozen=True, slots=True, eq=False)
class Pieces:
    """Stretches between two neighbouring measured points whose feet lie on one true segment."""

    begin: IntArray  # (n,) index of the first of the two measured points; the second follows it
    length_px: FloatArray  # along the measured centreline
    true_length_px: FloatArray  # along the true one
    true_segment: IntArray
    doubled_px: FloatArray  # true length that another piece covers already

    def __post_init__(self) -> None:
        freeze(self)


def pieces(measured: Track, on_truth: Feet) -> Pieces:
    """Follow measured centrelines along the true ones, and tell what is covered more than once."""
    step = measured.step_px
    begin = np.flatnonzero(np.isfinite(step))
    same = on_truth.found[begin] & (on_truth.segment[begin] == on_truth.segment[begin + 1])
    begin = begin[same]
    length, from_px, to_px = step[begin], on_truth.s_px[begin], on_truth.s_px[begin + 1]
    kept = np.abs(to_px - from_px) <= LONGEST_STEP * length + BEYOND_PX
    begin, length, from_px, to_px = begin[kept], length[kept], from_px[kept], to_px[kept]
    true_segment = on_truth.segment[begin]
    return Pieces(
        begin=begin,
        length_px=length,
        true_length_px=np.abs(to_px - from_px),
        true_segment=true_segment,
        doubled_px=_overlap(true_segment, np.minimum(from_px, to_px), np.maximum(from_px, to_px)),
    )


def _overlap(line: IntArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """Length of each interval that earlier ones (by line, then place) cover; the sum is total length less union."""
    overlap = np.zeros(len(line))
    if not len(line):
        return overlap
    shift = line * (high.max() + 1.0)  # lays the lines end to end, so that one pass serves all
    order = np.lexsort((high, low, line))
    start, end = (low + shift)[order], (high + shift)[order]
    covered = np.concatenate(([-np.inf], np.maximum.accumulate(end)[:-1]))
    overlap[order] = np.maximum(np.minimum(end, covered) - start, 0.0)
    return overlap


def pair_places(measured: FloatArray, true: FloatArray) -> int:
    """Count pairs of a measured and a true place within `PLACE_PX`, each place in at most one pair; (n, 2) each."""
    if not len(measured) or not len(true):
        return 0
    near: list[list[int]] = cKDTree(true).query_ball_tree(cKDTree(measured), PLACE_PX)
    columns = np.array([column for held in near for column in held], dtype=np.int32)
    rows = np.repeat(np.arange(len(true), dtype=np.int32), [len(held) for held in near])
    graph: Any = coo_array((np.ones(len(rows), np.int8), (rows, columns)), shape=(len(true), len(measured))).tocsr()
    return int(np.sum(maximum_bipartite_matching(graph, perm_type="column") >= 0))
