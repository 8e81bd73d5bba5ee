"""What ties neighbouring points of a segment, and what is expected of a segment before it is fitted."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import FloatArray, freeze
from vasohm.network.jointfit import LEVEL, LN_C, LN_R, OFFSET, REFLEX, SLOPE, Observed, Priors, difference_diagonals
from vasohm.network.profiles import ProfileTable, ln_height

STIFFNESS = np.log(1e4)  # of ln r, per radius cubed, before the picture has told its own
THIN_PX = 0.7  # below, stiffness no longer falls with the radius
# standard deviations of what ties neighbouring points, per pixel of centreline
CONTRAST_STEP = 0.005
OFFSET_BEND_PX = 0.008
LEVEL_STEP, SLOPE_STEP = 0.02, 0.002  # in units of the vessel's height
REFLEX_STEP = 0.01
RADIUS_STEP, UNSEEN_RADIUS_STEP = 0.2, 0.03  # of ln r: keeps it from running away, most where no strip is usable
# standard deviations that hold the mean of a segment, counted once a segment
OFFSET_PX, RADIUS_SPREAD, LEVEL_SPREAD, SLOPE_SPREAD = 1.5, 0.8, 10.0, 1.0


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
    seen = observed.row_scale > 0
    seen[:-1] &= seen[1:]
    step[:, LN_R] = np.where(seen, 1 / RADIUS_STEP**2, 1 / UNSEEN_RADIUS_STEP**2)
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
