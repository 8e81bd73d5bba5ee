"""Brightness across each centreline, sampled on straight strips, and which of its samples belong to other vessels."""

from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_dilation, map_coordinates, spline_filter

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray, freeze

Owners: TypeAlias = tuple[NDArray[np.int32], ...]  # by pixel (h * w,), see `paint_owners`
SplineOrder: TypeAlias = Literal[3, 5]

SPOILT_PX = 2  # a pixel's own error falls to 7 % in a cubic spline so far away
TANGENT_REACH = 3  # points on each side; directions must be good to 5 degrees
JOINED_BLURS, ALONE_BLURS = 1.0, 2.5  # how far beyond its rim a neighbour's samples are taken out, in blurs
RIM_BLURS = (0.5, 1.5)  # a rim is seen when no sample is missing from so far inside to so far outside
MOST_OWNERS = 3  # segments a pixel can tell: as many as meet at a branching
CHUNK = 1000  # strips handled at once, so that they stay in the cache


@dataclass(frozen=True, slots=True, eq=False)
class TubeLines:
    """Centrelines whose radii are wanted: one flat table of points, about 1 px apart, and which segments meet.

    Segment i holds points `offsets[i]:offsets[i + 1]` and runs from node `node_a[i]` to `node_b[i]`.
    """

    x_px: FloatArray  # (n_points,)
    y_px: FloatArray
    offsets: IntArray  # (n_segments + 1,)
    seed_radius_px: FloatArray  # (n_points,) crude: for searching only
    vessel_class: IntArray  # (n_segments,)
    node_a: IntArray
    node_b: IntArray

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def n_points(self) -> int:
        return len(self.x_px)

    @property
    def n_segments(self) -> int:
        return len(self.offsets) - 1


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """Where each point lies, which way its normal points, and the length of centreline it stands for."""

    x: FloatArray  # (n_points,)
    y: FloatArray
    normal_x: FloatArray
    normal_y: FloatArray
    share_px: FloatArray
    segment: IntArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """An image ready for sampling: spline coefficients and, by pixel, 1 / variance (0 where it must not be used)."""

    coefficients: Float32Array  # (h, w)
    precision: Float32Array
    clipped: BoolArray
    order: SplineOrder

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Strips:
    """Strips of equal width: samples at -half_width..half_width px along the normals of `points`."""

    half_width: int
    points: IntArray  # (n,) ascending
    y: Float32Array  # (n, 2 half_width + 1)
    precision: Float32Array

    def __post_init__(self) -> None:
        freeze(self)

    def renumbered(self, number: IntArray) -> "Strips":
        """Return the same strips under other numbers of their points."""
        return Strips(self.half_width, number[self.points], self.y, self.precision)


@dataclass(frozen=True, slots=True, eq=False)
class Overlaps:
    """Samples of one `Strips` on which another vessel lies: flat index, that vessel's point, distance to its axis."""

    sample: IntArray
    point: IntArray
    distance_px: FloatArray
    joined: BoolArray  # the two segments meet at a node

    def __post_init__(self) -> None:
        freeze(self)

    def select(self, keep: BoolArray) -> "Overlaps":
        """Return those that are kept."""
        return Overlaps(self.sample[keep], self.point[keep], self.distance_px[keep], self.joined[keep])

    @staticmethod
    def nothing() -> "Overlaps":
        return Overlaps(np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros(0), np.zeros(0, np.bool_))


def make_picture(
    signal: Float32Array, noise_sd: Float32Array, valid: BoolArray, clipped: BoolArray, order: SplineOrder = 3
) -> Picture:
    """Prepare an image (h, w) for sampling; pixels outside the field of view do not count.

    Nor do those at the scale's limit and beside them: a spline draws the neighbours of a pixel that is too low along.
    """
    spoilt = binary_dilation(clipped, iterations=SPOILT_PX) if clipped.any() else clipped
    usable = valid & ~spoilt & (noise_sd > 0)
    filled = np.where(np.isfinite(signal), signal, 0.0).astype(np.float32)
    precision = np.zeros(signal.shape, np.float32)
    np.divide(1.0, noise_sd.astype(np.float32) ** 2, out=precision, where=usable)
    coefficients = spline_filter(filled, order=order, output=np.float32, mode="mirror")
    return Picture(coefficients, precision, np.array(clipped), order)


def make_frame(x_px: FloatArray, y_px: FloatArray, offsets: IntArray) -> Frame:
    """Directions from the chord over a few points on each side, so that jitter of single points does not matter."""
    n = len(x_px)
    counts = np.diff(offsets)
    segment = np.repeat(np.arange(len(counts)), counts)
    index = np.arange(n)
    first, last = offsets[segment], offsets[segment + 1] - 1
    reach = np.minimum(TANGENT_REACH, np.maximum(np.minimum(index - first, last - index), 1))
    low, high = np.maximum(index - reach, first), np.minimum(index + reach, last)
    along_x, along_y = x_px[high] - x_px[low], y_px[high] - y_px[low]
    chord = np.hypot(along_x, along_y)
    along_x = np.where(chord > 0, along_x, 1.0)
    chord = np.where(chord > 0, chord, 1.0)
    before, after = np.maximum(index - 1, first), np.minimum(index + 1, last)
    step = np.hypot(x_px[after] - x_px[before], y_px[after] - y_px[before])
    share = np.where(after - before == 2, step / 2, np.where(after - before == 1, step, 1.0))
    return Frame(np.array(x_px), np.array(y_px), -along_y / chord, along_x / chord, np.clip(share, 0.1, 3.0), segment)


def recentre(frame: Frame, offset_px: FloatArray, offsets: IntArray) -> Frame:
    """Move points onto the axis found beside them, and turn their normals to it.

    A strip askew by an angle d shows a tube 1 / cos(d) times as wide, and its blur as well.
    """
    return make_frame(frame.x + offset_px * frame.normal_x, frame.y + offset_px * frame.normal_y, offsets)


def offset_from(frame: Frame, moved: Frame, offset_px: FloatArray) -> FloatArray:
    """Return how far beside the points of `frame` an axis lies that lies `offset_px` beside those of `moved`."""
    away_x = moved.x + offset_px * moved.normal_x - frame.x
    away_y = moved.y + offset_px * moved.normal_y - frame.y
    return away_x * frame.normal_x + away_y * frame.normal_y


def group_widths(half_width_px: FloatArray, points: IntArray) -> list[tuple[int, IntArray]]:
    """Sort points into few groups of equal strip width, each at least as wide as asked."""
    steps = np.unique(np.ceil(np.geomspace(6, 4000, 38)).astype(np.int64))
    place = np.minimum(np.searchsorted(steps, half_width_px), len(steps) - 1)
    return [(int(steps[k]), points[place == k]) for k in np.unique(place)]


def sample_strips(picture: Picture, frame: Frame, half_width_px: FloatArray, points: IntArray) -> tuple[Strips, ...]:
    """Sample strips at 1 px steps along the normals of `points`, each at least `half_width_px` (n,) wide.

    Unit steps of a spline on the pixel grid keep independent noise nearly independent, so that the
    variance of the raw pixels is the right weight.
    """
    strips = []
    for half_width, members in group_widths(half_width_px, points):
        t = np.arange(-half_width, half_width + 1, dtype=np.float64)
        y = np.empty((len(members), len(t)), np.float32)
        precision = np.empty_like(y)
        for low in range(0, len(members), CHUNK):
            part = members[low : low + CHUNK]
            at_y = frame.y[part, None] + frame.normal_y[part, None] * t
            at_x = frame.x[part, None] + frame.normal_x[part, None] * t
            part_y = y[low : low + CHUNK]
            at = at_y, at_x
            map_coordinates(picture.coefficients, at, part_y, picture.order, mode="mirror", prefilter=False)
            pixel, inside = _pixels(at_y, at_x, picture.precision.shape)
            precision[low : low + CHUNK] = np.where(inside, picture.precision.ravel()[pixel], 0.0)
        strips.append(Strips(half_width, members, y, precision))
    return tuple(strips)


def _pixels(at_y: FloatArray, at_x: FloatArray, shape: tuple[int, ...]) -> tuple[IntArray, BoolArray]:
    row, column = np.rint(at_y).astype(np.int64), np.rint(at_x).astype(np.int64)
    inside = (row >= 0) & (row < shape[0]) & (column >= 0) & (column < shape[1])
    return np.where(inside, row * shape[1] + column, 0), inside


# --- other vessels --------------------------------------------------------------------------------------------------


def paint_owners(frame: Frame, reach_px: FloatArray, shape: tuple[int, int]) -> Owners:
    """Write on each pixel which segments' strips cover it within `reach_px` (n_points,), by one point of each.

    Returns
    -------
    Up to `MOST_OWNERS` layers (h * w,) of points, each of another segment than the layers before; -1 where none.
    """
    pixels, owners = [], []
    for half_width, members in group_widths(reach_px, np.arange(len(reach_px))):
        t = np.arange(-half_width, half_width + 0.25, 0.5)
        for low in range(0, len(members), CHUNK):
            part = members[low : low + CHUNK]
            at_y = frame.y[part, None] + frame.normal_y[part, None] * t
            at_x = frame.x[part, None] + frame.normal_x[part, None] * t
            pixel, inside = _pixels(at_y, at_x, shape)
            inside &= np.abs(t) <= reach_px[part, None]
            pixels.append(pixel[inside])
            owners.append(np.broadcast_to(part[:, None], inside.shape)[inside].astype(np.int32))
    pixel = np.concatenate(pixels) if pixels else np.zeros(0, np.int64)
    owner = np.concatenate(owners) if owners else np.zeros(0, np.int32)
    order = np.argsort(owner, kind="stable")
    pixel, owner = pixel[order], owner[order]
    layers = []
    for _ in range(MOST_OWNERS):
        layer = np.full(shape[0] * shape[1], -1, np.int32)
        layer[pixel] = owner  # of equal indices the last one stays
        left = frame.segment[layer[pixel]] != frame.segment[owner]
        pixel, owner = pixel[left], owner[left]
        layers.append(layer)
    return tuple(layers)


def find_overlaps(strips: Strips, frame: Frame, lines: TubeLines, owners: Owners, shape: tuple[int, int]) -> Overlaps:
    """Find the samples of strips that lie on or beside other vessels."""
    t = np.arange(-strips.half_width, strips.half_width + 1, dtype=np.float64)
    samples, points, distances, joined = [], [], [], []
    for low in range(0, len(strips.points), CHUNK):
        part = strips.points[low : low + CHUNK]
        at_y = frame.y[part, None] + frame.normal_y[part, None] * t
        at_x = frame.x[part, None] + frame.normal_x[part, None] * t
        pixel, inside = _pixels(at_y, at_x, shape)
        own = frame.segment[part, None]
        for owner in owners:
            other = np.where(inside, owner[pixel], -1).astype(np.int64)
            theirs = frame.segment[other]
            hit = np.nonzero((other >= 0) & (theirs != own))
            k = other[hit]
            distance = (at_x[hit] - frame.x[k]) * frame.normal_x[k] + (at_y[hit] - frame.y[k]) * frame.normal_y[k]
            samples.append((low + hit[0]) * len(t) + hit[1])
            points.append(k)
            distances.append(distance)
            joined.append(_meet(lines, frame.segment[part[hit[0]]], theirs[hit]))
    if not samples:
        return Overlaps.nothing()
    return Overlaps(*(np.concatenate(parts) for parts in (samples, points, distances, joined)))


def _meet(lines: TubeLines, one: IntArray, other: IntArray) -> BoolArray:
    a, b = lines.node_a, lines.node_b
    met: BoolArray = (a[one] == a[other]) | (a[one] == b[other]) | (b[one] == a[other]) | (b[one] == b[other])
    return met


def weigh_strips(
    strips: Strips, overlaps: Overlaps, radius: FloatArray, offset: FloatArray, s_px: float, *, alone: bool
) -> tuple[Float32Array, BoolArray]:
    """Take out samples in which other vessels lie, and strips that do not show both rims.

    Parameters
    ----------
    radius, offset : (n_points,) present radius and offset of the axis of all points.
    alone : nothing will be subtracted for neighbours, so that their blurred edges are taken out too.

    Returns
    -------
    Weights like `strips.precision`, and (n,) whether both rims of the strip are seen out to r + 1.5 s.
    """
    weights = strips.precision.copy()
    margin = np.where(overlaps.joined, JOINED_BLURS, 0.0) * s_px
    if alone:
        margin = np.full(len(overlaps.sample), ALONE_BLURS * s_px)
    away = np.abs(overlaps.distance_px - offset[overlaps.point])
    weights.reshape(-1)[overlaps.sample[away < radius[overlaps.point] + margin]] = 0.0
    t = np.arange(-strips.half_width, strips.half_width + 1.0)
    depth = np.abs(t - offset[strips.points, None]) - radius[strips.points, None]
    rim = (depth > -RIM_BLURS[0] * s_px) & (depth < RIM_BLURS[1] * s_px)
    usable = ~np.any(rim & (weights == 0), axis=1)
    return weights, usable
