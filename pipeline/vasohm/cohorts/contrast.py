"""One contrast: a level held against the reference, by the method that its subjects allow."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import FloatArray
from vasohm.cohorts import doubts
from vasohm.cohorts.effects import hedges_g
from vasohm.cohorts.fits import Estimate, fit_regression, fit_welch
from vasohm.cohorts.mixed import fit_fixed_effects, is_singular, split_variance
from vasohm.cohorts.observations import Observations, combined
from vasohm.cohorts.permutation import permute_groups, permute_residuals
from vasohm.cohorts.units import CONSTANT, Units, group_units, is_paired, nested_means, pair_units

LEAST_SUBJECTS_A_GROUP = 5  # of a mixed model; its variances rest on the subjects
LEAST_PAIRS = 10
FEW_SUBJECTS = 6
MOST_ROWS_A_SUBJECT = 400  # beyond, averages of a subject leave nothing for a mixed model to gain
ALPHA = 0.05

MIXED, WELCH, REGRESSION = "mixed model", "welch", "regression of subject means"
DIFFERENCES, REGRESSED_DIFFERENCES, NONE = "differences of subjects", "regression of differences", "none"
METHODS = (MIXED, WELCH, REGRESSION, DIFFERENCES, REGRESSED_DIFFERENCES, NONE)


@dataclass(frozen=True, slots=True, eq=False)
class Contrast:
    """A level against the reference, on the scale of the observations; NaN is unknown."""

    level: str
    paired: bool
    is_ln: bool
    n_subjects: int
    n_subjects_reference: int
    n_observations: int
    effect: float
    low: float
    high: float
    p: float
    p_permutation: float
    hedges_g: float
    subject_sd: float  # of one group's subjects, or of the pairs' differences, covariates accounted for
    subject_df: float
    method: str
    flags: frozenset[str]


def contrast(observed: Observations, level: str, reference: str, by: str, rng: np.random.Generator) -> Contrast:
    """Hold one level against the reference.

    Parameters
    ----------
    observed : observations of at least these two levels; only theirs are used.
    level, reference : names of the levels.
    by : name of the column that holds them, for messages.
    rng : for the permutation test.

    Raises
    ------
    CohortError
        When subjects are neither in groups nor in pairs, or a covariate says what the levels say.

    Notes
    -----
    Groups: a mixed model where each has five subjects or more, some subjects have several observations, and the fit
    finds a variance between subjects; its degrees of freedom are subjects less fixed effects, as exact for equal
    numbers of observations. Else means of subjects: Welch's test, or a regression where there are covariates. Pairs:
    differences of subjects; a mixed model where there are ten pairs or more and also subjects seen at one level only.
    """
    index, against = (observed.levels.index(one) if one in observed.levels else -1 for one in (level, reference))
    held = observed.some((observed.level == index) | (observed.level == against))
    flags = {doubts.VALUES_MISSING} if observed.n_without else set()
    sizes = [len(np.unique(held.subject[held.level == one])) for one in (index, against)]
    paired = min(sizes) > 0 and is_paired(held, by)
    if min(sizes) < 2:
        return nothing(held, level, sizes, flags | {doubts.TOO_FEW_SUBJECTS}, paired=paired)
    units = pair_units(held, index) if paired else group_units(held, index)
    if len(units.value) - units.design.shape[1] < 1:
        return nothing(held, level, sizes, flags | {doubts.TOO_FEW_SUBJECTS}, paired=paired)
    estimate = _mixed(held, index, units, sizes) or _of_units(units)
    p_permutation, least_p = _permuted(units, rng)
    flags |= _doubts(units, estimate, sizes, least_p)
    low, high = estimate.interval()
    sd, df = _scatter(units)
    g = hedges_g(estimate.effect, *units.level_means, paired=paired)
    return Contrast(
        level=level,
        paired=paired,
        is_ln=held.is_ln,
        n_subjects=sizes[0],
        n_subjects_reference=sizes[1],
        n_observations=len(held.value),
        effect=estimate.effect,
        low=low,
        high=high,
        p=estimate.p,
        p_permutation=p_permutation if doubts.NO_SCATTER not in flags else np.nan,
        hedges_g=g,
        subject_sd=sd,
        subject_df=df,
        method=estimate.method,
        flags=frozenset(flags),
    )


def nothing(held: Observations, level: str, sizes: list[int], flags: set[str], *, paired: bool) -> Contrast:
    """Return a contrast of which nothing but its numbers of subjects can be told."""
    return Contrast(
        level=level,
        paired=paired,
        is_ln=held.is_ln,
        n_subjects=sizes[0],
        n_subjects_reference=sizes[1],
        n_observations=len(held.value),
        effect=np.nan,
        low=np.nan,
        high=np.nan,
        p=np.nan,
        p_permutation=np.nan,
        hedges_g=np.nan,
        subject_sd=np.nan,
        subject_df=np.nan,
        method=NONE,
        flags=frozenset(flags),
    )


def _of_units(units: Units) -> Estimate:
    if units.paired:
        method = DIFFERENCES if units.design.shape[1] == 1 else REGRESSED_DIFFERENCES
        return fit_regression(units.value, units.design, units.variance, units.shared, method)
    if units.design.shape[1] > 2:
        return fit_regression(units.value, units.design, units.variance, units.shared, REGRESSION)
    return fit_welch(units.value, units.design[:, 0], units.variance, units.shared, WELCH)


def _mixed(held: Observations, level: int, units: Units, sizes: list[int]) -> Estimate | None:
    """Fit a mixed model where the rule of `contrast` allows it."""
    n_pairs = len(units.value)
    enough = units.n_unpaired > 0 and n_pairs >= LEAST_PAIRS if units.paired else min(sizes) >= LEAST_SUBJECTS_A_GROUP
    if not enough or np.bincount(held.subject).max() > MOST_ROWS_A_SUBJECT:
        return None
    is_level = (held.level == level).astype(np.float64)
    between, within = _parted(held)
    design = np.column_stack([is_level, np.ones(len(is_level)), between, within])
    if np.linalg.matrix_rank(design) < design.shape[1]:
        return None
    components = split_variance(held, design, combined(held.subject, held.level) if units.paired else None)
    if components is None or is_singular(components):
        return None
    coefficients, covariance = fit_fixed_effects(held, design, components)
    df = float(n_pairs - units.design.shape[1])
    of_units = _of_units(units)
    return Estimate(float(coefficients[0]), float(covariance[0, 0]), df, of_units.shared_variance, MIXED)


def _parted(held: Observations) -> tuple[FloatArray, FloatArray]:
    """Covariates as mean of the subject and deviation from it, which need not act alike.

    References
    ----------
    Neuhaus JM, Kalbfleisch JD. Biometrics 1998;54:638-645, doi:10.2307/3109770.
    """
    cells = np.unique(held.subject, return_inverse=True)[1]
    between = nested_means(cells, held.within).of(held.covariates)[cells]
    within = held.covariates - between
    return between, within[:, np.abs(within).max(axis=0, initial=0.0) > CONSTANT]


def _permuted(units: Units, rng: np.random.Generator) -> tuple[float, float]:
    if units.paired:
        return permute_residuals(units.value, units.design, rng, by_sign=True)
    if units.design.shape[1] > 2:
        return permute_residuals(units.value, units.design, rng, by_sign=False)
    return permute_groups(units.value, units.design[:, 0], rng)


def _doubts(units: Units, estimate: Estimate, sizes: list[int], least_p: float) -> set[str]:
    told = {
        doubts.FEW_SUBJECTS: (len(units.value) if units.paired else min(sizes)) < FEW_SUBJECTS,
        doubts.NO_SCATTER: not estimate.variance > 0,
        doubts.FEW_PERMUTATIONS: least_p >= ALPHA,
        doubts.UNPAIRED_SUBJECTS: units.n_unpaired > 0,
        doubts.TWO_CALIBRATIONS: estimate.shared_variance > 0,
        doubts.COVARIATE_CONSTANT: bool(units.constant_covariates),
    }
    return {code for code, is_so in told.items() if is_so}


def _scatter(units: Units) -> tuple[float, float]:
    """Standard deviation of subjects about the fit, and its degrees of freedom."""
    residual = units.value - units.design @ np.linalg.lstsq(units.design, units.value, rcond=None)[0]
    df = len(residual) - units.design.shape[1]
    return float(np.sqrt(residual @ residual / df)), float(df)


def level_mean(value: FloatArray, variance: FloatArray, shared: FloatArray) -> tuple[float, float, float]:
    """Mean of subjects with its 95 % interval; what they share is in the interval in full."""
    if len(value) < 2:
        return (float(value[0]) if len(value) else np.nan), np.nan, np.nan
    estimate = fit_regression(value, np.ones((len(value), 1)), variance, shared, "mean")
    return estimate.effect, *estimate.interval()
