"""Strips of chosen segments with their weights, and the priors that tie their points."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.network.jointfit import LEVEL, LN_C, LN_R, OFFSET, REFLEX, SLOPE, Observed, Priors, difference_diagonals
from vasohm.network.noise import noise_factor
from vasohm.network.profiles import ProfileTable, ln_height
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

WINDOW_BLURS, WINDOW_EXTRA_PX = 3.0, 3.0  # strips reach r + 3 s + 3 px: wider ones gain 6 % and meet neighbours
STIFFNESS = np.log(1e4)  # of ln r, per radius cubed, before the picture has told its own
THIN_PX = 0.7  # below, stiffness no longer falls with the radius
# standard deviations of what ties neighbouring points, per pixel of centreline
CONTRAST_STEP = 0.005
OFFSET_BEND_PX = 0.008
LEVEL_STEP, SLOPE_STEP = 0.02, 0.002  # in units of the vessel's height
REFLEX_STEP = 0.02
RADIUS_STEP = 0.2  # of ln r: only keeps stretches without data from running away
# standard deviations that hold the mean of a segment, counted once a segment
OFFSET_PX, RADIUS_SPREAD, LEVEL_SPREAD, SLOPE_SPREAD = 1.5, 1.5, 10.0, 1.0


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """A picture, the lines in it, which of them own each pixel, and the noise's covariance by squared distance."""

    picture: Picture
    lines: TubeLines
    frame: Frame
    owners: Owners
    covariance: FloatArray

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
    scale[points] = scene.frame.share_px[points] / noise_factor(table, scene.covariance, theta[points, LN_R])
    number = np.full(scene.lines.n_points, -1, np.int64)
    number[points] = np.arange(len(points))
    strips, overlaps, weights = [], [], []
    for sampled in sample_strips(scene.picture, scene.frame, half, points):
        found = find_overlaps(sampled, scene.frame, scene.lines, scene.owners, scene.shape)
        w, usable = weigh_strips(sampled, found, radius, theta[:, OFFSET], s, alone=alone)
        scale[sampled.points] *= usable
        weights.append(w * scale[sampled.points, None].astype(np.float32))
        strips.append(sampled.renumbered(number))
        overlaps.append(Overlaps.nothing() if alone else found)
    segment = np.repeat(np.arange(len(segments)), np.diff(offsets))
    return Observed(offsets, segment, tuple(strips), tuple(overlaps), tuple(weights), scale[points]), points


def widest_window(table: ProfileTable) -> float:
    """Return the widest strip that a table serves, with room for grouping and for offsets of the axis."""
    return (table.half_px - 4) / 1.2


@dataclass(frozen=True, slots=True, eq=False)
class Expected:
    """Mean and standard deviation (n_segments,) of what is known of each segment before it is fitted."""

    ln_contrast: FloatArray
    ln_contrast_sd: FloatArray
    reflex: FloatArray
    reflex_sd: FloatArray

    def __post_init__(self) -> None:
        freeze(self)


def make_priors(observed: Observed, table: ProfileTable, theta: FloatArray, expected: Expected) -> Priors:
    """Build the priors around present unknowns `theta` (n_points, B).

    Whatever holds a whole segment is counted once, not once a point.
    """
    segment, n = observed.segment, len(theta)
    once = 1.0 / np.maximum(np.diff(observed.offsets), 1)[segment]
    radius = np.exp(theta[:, LN_R])
    ln_high = observed.by_segment(once * (theta[:, LN_C] + ln_height(table.optics, theta[:, LN_R])))
    high = np.exp(ln_high)[segment]
    step, bend, hold = (np.zeros(theta.shape) for _ in range(3))
    step[:, LN_R] = 1 / RADIUS_STEP**2
    step[:, LN_C] = 1 / CONTRAST_STEP**2
    bend[:, OFFSET] = 1 / OFFSET_BEND_PX**2
    step[:, LEVEL] = 1 / (LEVEL_STEP * high) ** 2
    step[:, SLOPE] = 1 / (SLOPE_STEP * high) ** 2
    hold[:, LN_R] = once / RADIUS_SPREAD**2
    hold[:, LN_C] = once / expected.ln_contrast_sd[segment] ** 2
    hold[:, OFFSET] = once / OFFSET_PX**2
    hold[:, LEVEL] = once / (LEVEL_SPREAD * high) ** 2
    hold[:, SLOPE] = once / (SLOPE_SPREAD * high) ** 2
    centre = np.zeros(theta.shape)
    centre[:, LN_R] = theta[:, LN_R]
    centre[:, LN_C] = expected.ln_contrast[segment]
    if theta.shape[1] > REFLEX:
        step[:, REFLEX] = 1 / REFLEX_STEP**2
        hold[:, REFLEX] = once / expected.reflex_sd[segment] ** 2
        centre[:, REFLEX] = expected.reflex[segment]
    cubed = np.zeros(n)
    cubed[:-1] = np.maximum(radius[1:], THIN_PX) ** 3  # at the middle of three points
    bends = difference_diagonals(np.zeros(n), cubed, segment)
    stiffness = np.full(observed.n_segments, STIFFNESS)
    return Priors(difference_diagonals(step, bend, segment), bends, stiffness, hold, centre)
