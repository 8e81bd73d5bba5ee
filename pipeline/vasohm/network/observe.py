"""Strips of chosen segments with their weights."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.network.correlated import NoiseFactor
from vasohm.network.jointfit import LN_R, OFFSET, Observed
from vasohm.network.pilot import segment_quantile
from vasohm.network.profiles import ProfileTable
from vasohm.network.strips import (
    Frame,
    Overlaps,
    Owners,
    Picture,
    TubeLines,
    find_overlaps,
    sample_strips,
    weigh_strips,
)

WIDEST_SEEDS = 2.6  # a strip that seems wider shows something other than its vessel
WINDOW_BLURS, WINDOW_EXTRA_PX = 3.0, 3.0  # strips reach r + 3 s + 3 px: wider ones gain 6 % and meet neighbours


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """A picture, the lines in it, which of them own each pixel, and what its noise does to radii."""

    picture: Picture
    lines: TubeLines
    frame: Frame
    owners: Owners
    covariance: FloatArray  # of pixels of noise by squared distance
    noise: NoiseFactor

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def shape(self) -> tuple[int, int]:
        height, width = self.picture.precision.shape
        return height, width


def points_of(lines: TubeLines, segments: IntArray) -> tuple[IntArray, IntArray]:
    """Points of chosen segments, and the offsets among them."""
    counts = np.diff(lines.offsets)[segments]
    offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    points = np.repeat(lines.offsets[segments] - offsets[:-1], counts) + np.arange(offsets[-1])
    return points, offsets


def observe(
    scene: Scene, segments: IntArray, theta: FloatArray, table: ProfileTable, *, alone: bool
) -> tuple[Observed, IntArray]:
    """Sample and weigh the strips of chosen segments.

    Parameters
    ----------
    segments : (n,) ascending.
    theta : (n_points, B) present unknowns of all points, of which ln r and offset are used.
    alone : take out what neighbours light up; else it is subtracted, which needs all segments.

    Returns
    -------
    Strips numbered by the points of the chosen segments, and the numbers (n_chosen,) of these in the whole picture.
    """
    s = table.optics.s_px
    points, offsets = points_of(scene.lines, segments)
    radius = np.exp(theta[:, LN_R])
    half = np.minimum(radius[points] + WINDOW_BLURS * s + WINDOW_EXTRA_PX, widest_window(table))
    scale = np.zeros(scene.lines.n_points)
    scale[points] = scene.frame.share_px[points] / scene.noise.at(theta[points, LN_R])
    seed = segment_quantile(scene.lines.seed_radius_px, scene.lines.offsets, 0.8)
    widest = (WIDEST_SEEDS * seed + 2 * s)[scene.frame.segment]
    number = np.full(scene.lines.n_points, -1, np.int64)
    number[points] = np.arange(len(points))
    strips, overlaps, weights = [], [], []
    for sampled in sample_strips(scene.picture, scene.frame, half, points):
        found = find_overlaps(sampled, scene.frame, scene.lines, scene.owners, scene.shape)
        w, usable = weigh_strips(sampled, found, radius, theta[:, OFFSET], s, alone=alone)
        scale[sampled.points] *= usable & (radius[sampled.points] < widest[sampled.points])
        weights.append(w * scale[sampled.points, None].astype(np.float32))
        strips.append(sampled.renumbered(number))
        lit = np.abs(found.distance_px) < radius[found.point] + WINDOW_BLURS * s + 1
        overlaps.append(
            Overlaps.nothing() if alone else found.select(lit & (weights[-1].reshape(-1)[found.sample] > 0))
        )
    segment = np.repeat(np.arange(len(segments)), np.diff(offsets))
    unit = scale[points] * scene.noise.variance
    return Observed(offsets, segment, tuple(strips), tuple(overlaps), tuple(weights), unit), points


def widest_window(table: ProfileTable) -> float:
    """Return the widest strip that a table serves, with room for grouping and for offsets of the axis."""
    return (table.half_px - 4) / 1.2
