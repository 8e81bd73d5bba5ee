"""A measured mask held against one that a person drew: overlap, centrelines and length, by counts. Arrays only."""

from collections.abc import Mapping
from dataclasses import dataclass, fields

import numpy as np
from scipy import ndimage
from scipy.spatial import cKDTree
from skimage.morphology import skeletonize

from vasohm.arrays import BoolArray, FloatArray
from vasohm.cohorts.matching import LEAST_REACH_PX, REACH_RADII

# Half the steps from a pixel of a centreline to its eight neighbours: their sum is the length that it stands for
_HALF_DIAGONAL = np.sqrt(0.5)
_HALF_STEPS = np.array([[_HALF_DIAGONAL, 0.5, _HALF_DIAGONAL], [0.5, 0.0, 0.5], [_HALF_DIAGONAL, 0.5, _HALF_DIAGONAL]])


@dataclass(frozen=True, slots=True)
class Agreement:
    """What two masks have in common inside the field of view; counts of pixels, lengths in pixels. They add up."""

    n_both: float  # vessel in both
    n_measured_only: float
    n_drawn_only: float
    n_neither: float
    n_centreline_measured: float  # pixels of the measured mask's centreline
    n_centreline_measured_in_drawn: float
    n_centreline_drawn: float
    n_centreline_drawn_in_measured: float
    length_drawn_px: float
    length_found_px: float  # of it, with a measured centreline beside it
    length_measured_px: float
    length_confirmed_px: float  # of it, with a drawn vessel around or beside it

    def __add__(self, other: "Agreement") -> "Agreement":
        return Agreement(*(getattr(self, f.name) + getattr(other, f.name) for f in fields(self)))

    @property
    def scores(self) -> Mapping[str, float]:
        """Scores from the counts, by column of `appraisal_masks.csv`; NaN where a divisor is zero."""
        both, extra, missed, neither = self.n_both, self.n_measured_only, self.n_drawn_only, self.n_neither
        precision = _share(self.n_centreline_measured_in_drawn, self.n_centreline_measured)
        sensitivity = _share(self.n_centreline_drawn_in_measured, self.n_centreline_drawn)
        margins = (both + extra) * (both + missed) * (neither + extra) * (neither + missed)
        return {
            "dice": _share(2 * both, 2 * both + extra + missed),
            "centreline_dice": _share(2 * precision * sensitivity, precision + sensitivity),
            "centreline_precision": precision,
            "centreline_sensitivity": sensitivity,
            "sensitivity": _share(both, both + missed),
            "specificity": _share(neither, neither + extra),
            "matthews_correlation": _share(both * neither - extra * missed, float(np.sqrt(margins))),
            "length_recall": _share(self.length_found_px, self.length_drawn_px),
            "length_precision": _share(self.length_confirmed_px, self.length_measured_px),
        }


def agreement(
    measured: BoolArray, drawn: BoolArray, fov: BoolArray, points_px: tuple[FloatArray, FloatArray, FloatArray]
) -> Agreement:
    """Hold a measured mask and centreline against a drawn mask, inside the field of view only.

    Parameters
    ----------
    measured, drawn, fov : (h, w) bool.
    points_px : x, y (n,) of measured centreline points, and the length that each stands for, all in pixels.

    Notes
    -----
    Dice = 2|A and B| / (|A| + |B|). `centreline_dice` is clDice of Shit et al., CVPR 2021, arXiv:2003.07311, eq. 1 and
    2, with the thinning of Zhang and Suen (Commun ACM 1984;27:236): the share of each centreline inside the other
    mask. A drawn vessel is found where a measured centreline runs within 2 px of its own, or within 0.75 of its
    radius; a measured point is confirmed within 2 px of a drawn vessel.
    """
    a, b = measured & fov, drawn & fov
    line_a, line_b = (np.asarray(skeletonize(mask), dtype=bool) for mask in (a, b))
    x, y, weight = points_px
    column, row = (
        np.clip(np.rint(at).astype(np.int64), 0, most - 1) for at, most in ((x, fov.shape[1]), (y, fov.shape[0]))
    )
    seen = fov[row, column]
    x, y, weight, column, row = x[seen], y[seen], weight[seen], column[seen], row[seen]
    length = ndimage.convolve(line_b.astype(float), _HALF_STEPS, mode="constant")[line_b]
    reach = np.maximum(LEAST_REACH_PX, REACH_RADII * ndimage.distance_transform_edt(b)[line_b])
    places = np.column_stack(np.nonzero(line_b)[::-1])
    away = cKDTree(np.column_stack((x, y))).query(places)[0] if len(x) and len(places) else np.full(len(places), np.inf)
    near_drawn = ndimage.distance_transform_edt(~b) <= LEAST_REACH_PX if b.any() else np.zeros(b.shape, dtype=bool)
    return Agreement(
        n_both=float(np.sum(a & b)),
        n_measured_only=float(np.sum(a & ~b)),
        n_drawn_only=float(np.sum(b & ~a)),
        n_neither=float(np.sum(fov & ~a & ~b)),
        n_centreline_measured=float(line_a.sum()),
        n_centreline_measured_in_drawn=float(np.sum(line_a & b)),
        n_centreline_drawn=float(line_b.sum()),
        n_centreline_drawn_in_measured=float(np.sum(line_b & a)),
        length_drawn_px=float(length.sum()),
        length_found_px=float(length[away <= reach].sum()),
        length_measured_px=float(weight.sum()),
        length_confirmed_px=float(weight[near_drawn[row, column]].sum()),
    )


def _share(part: float, whole: float) -> float:
    return part / whole if whole > 0 else np.nan
