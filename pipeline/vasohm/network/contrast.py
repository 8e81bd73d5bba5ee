"""Contrast of thin vessels, learnt from those of the same picture that are wide enough to show it."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.jointfit import LN_C, LN_R, Normal, Observed, Priors, banded, factor, solve

RESOLVED_SE = 0.05  # of ln r: segments known better tell their contrast
SMALLEST_SPREAD = 0.03  # of ln contrast between segments
FEW, SPREAD_OF_FEW = 4, 0.5  # with fewer segments the spread is not measured but assumed
MOST_ODD = 0.1  # share of segments that may be left out as odd
UNKNOWN_SPREAD = 1.0  # sd of ln contrast where nothing is known


@dataclass(frozen=True, slots=True, eq=False)
class ContrastPrior:
    """Gaussian prior of each segment's ln contrast.

    `group` tells which segments share a mean: -1 where there is none and `mean` is the segment's own first guess.
    `mean_se` (n_groups,) is the standard error of each group's mean, `answer` (n_groups, k) its change with the optics.
    """

    mean: FloatArray  # (n_segments,)
    spread: FloatArray
    group: IntArray
    mean_se: FloatArray
    answer: FloatArray

    def __post_init__(self) -> None:
        freeze(self)


def segment_contrasts(
    observed: Observed, priors: Priors, theta: FloatArray, normal: Normal
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean ln contrast of each segment, its variance, and the variance of the mean ln r."""
    counts = np.maximum(np.diff(observed.offsets), 1)
    share = 1.0 / counts[observed.segment]
    factored = factor(banded(normal.matrix), priors.full(observed.segment), priors.hold)
    right = np.zeros((*theta.shape, 2))
    right[:, LN_C, 0] = share
    right[:, LN_R, 1] = share
    answer = solve(factored, right)
    variance = observed.by_segment(share * answer[:, LN_C, 0])
    variance_ln_r = observed.by_segment(share * answer[:, LN_R, 1])
    return observed.by_segment(share * theta[:, LN_C]), variance, variance_ln_r


@dataclass(frozen=True, slots=True, eq=False)
class KnownContrasts:
    """Segments that tell their contrast: class, ln contrast, variance, and change with the optics (n, k)."""

    vessel_class: IntArray
    ln_contrast: FloatArray
    variance: FloatArray
    answer: FloatArray

    def select(self, keep: BoolArray) -> "KnownContrasts":
        return KnownContrasts(self.vessel_class[keep], self.ln_contrast[keep], self.variance[keep], self.answer[keep])


def learn_contrast(
    known: KnownContrasts, vessel_class: IntArray, guess: FloatArray, classes: IntArray | None = None
) -> ContrastPrior:
    """Build the prior of every segment (n_segments,) from the segments that tell their contrast.

    A class with fewer than `FEW` such segments takes the prior of all. `classes` are those of the whole picture, where
    the segments are only some of it.
    """
    n = len(vessel_class)
    classes = np.unique(vessel_class) if classes is None else classes
    mean, spread = guess.copy(), np.full(n, UNKNOWN_SPREAD)
    group = np.full(n, -1, np.int64)
    means, answers = [], []
    if len(known.ln_contrast):
        told_apart = [c for c in classes if np.sum(known.vessel_class == c) >= FEW]
        rest = ~np.isin(vessel_class, told_apart)
        parts = [(vessel_class == c, known.select(known.vessel_class == c)) for c in told_apart]
        if len(told_apart) < len(classes):
            parts.append((rest, known))
        for number, (members, told) in enumerate(parts):
            centre, width, se, weight = _population(told.ln_contrast, told.variance)
            mean[members], spread[members], group[members] = centre, width, number
            means.append(se)
            answers.append(weight @ told.answer)
    k = known.answer.shape[1]
    return ContrastPrior(mean, spread, group, np.array(means), np.array(answers).reshape(len(answers), k))


def _population(value: FloatArray, variance: FloatArray) -> tuple[float, float, float, FloatArray]:
    """Mean, predictive spread, standard error of the mean, and the weights of the mean."""
    n = len(value)
    # a few odd vessels (out of focus, two in one) must not widen the prior of all
    middle = np.median(value)
    scale = max(1.4826 * float(np.median(np.abs(value - middle))), SMALLEST_SPREAD)
    keep = np.abs(value - middle) < 4 * np.sqrt(scale**2 + variance)
    if np.sum(~keep) > max(
        MOST_ODD * n, float(n > FEW)
    ):  # too many to be odd: vessels of this picture do differ so much
        keep = np.ones(n, np.bool_)
    between = SMALLEST_SPREAD**2
    for _ in range(10):
        weight = keep / (variance + between)
        weight = weight / weight.sum()
        centre = float(weight @ value)
        observed = float(np.sum(keep * (value - centre) ** 2) / max(int(keep.sum()) - 1, 1))
        between = max(observed - float(variance[keep].mean()), SMALLEST_SPREAD**2)
    n = int(keep.sum())
    if n < FEW:
        return centre, SPREAD_OF_FEW, SPREAD_OF_FEW / np.sqrt(n), weight
    spread = np.sqrt(between * (1 + 1 / n) * (1 + 2 / n))
    return centre, float(spread), float(np.sqrt(np.sum(weight**2 * (variance + between)))), weight
