"""The subject is the unit: observations become one value, or one difference, a subject."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy import sparse

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.cohorts.observations import Observations, combined, named
from vasohm.errors import CohortError

LEAST_PAIRED_SHARE = 0.5  # of subjects seen at both levels, from which a comparison is one of differences
CONSTANT = 1e-12  # a covariate that changes by less within subjects does not change


@dataclass(frozen=True, slots=True, eq=False)
class Units:
    """Values of subjects and the design that explains them; its first column is the contrast."""

    value: FloatArray  # (u,)
    design: FloatArray  # (u, p)
    variance: FloatArray  # (u,) of the measurement
    shared: FloatArray  # (u, c) standard uncertainty from each calibration
    paired: bool
    n_unpaired: int  # subjects left out of the differences
    constant_covariates: tuple[str, ...]  # left out of the differences
    level_means: tuple[FloatArray, FloatArray]  # of subjects at the level and at the reference


@dataclass(frozen=True, slots=True, eq=False)
class Means:
    """Mean of each cell: images of an eye first, then eyes of a subject."""

    weights: "sparse.csr_matrix[np.float64]"  # (cells, n)

    def of(self, values: FloatArray) -> FloatArray:
        return np.asarray(self.weights @ values)

    def variance(self, own: FloatArray) -> FloatArray:
        return np.asarray(self.weights.multiply(self.weights) @ own)


def nested_means(cells: IntArray, within: tuple[IntArray, ...]) -> Means:
    """Average within the innermost units first, so that a unit with many images counts no more than one with few.

    Parameters
    ----------
    cells : (n,) index of the cell of each observation, from 0 without gaps.
    within : as in `Observations`.
    """
    n = len(cells)
    keys = [cells]
    for codes in within:
        keys.append(combined(keys[-1], codes))
    keys.append(np.arange(n))
    weight = np.ones(n)
    for parent, child in pairwise(keys):
        pairs = np.unique(np.column_stack([parent, child]), axis=0)
        weight /= np.bincount(pairs[:, 0], minlength=int(parent.max()) + 1)[parent]
    shape = (int(cells.max()) + 1, n)
    return Means(sparse.csr_matrix((weight, (cells, np.arange(n))), shape=shape))


def subject_means(observed: Observations) -> tuple[IntArray, FloatArray, FloatArray, FloatArray]:
    """Return the subjects, their means, and the own and shared uncertainty of these."""
    subjects, cells = np.unique(observed.subject, return_inverse=True)
    means = nested_means(cells, observed.within)
    return subjects, means.of(observed.value), means.variance(observed.variance), means.of(by_calibration(observed))


def by_calibration(observed: Observations) -> FloatArray:
    """Shared standard uncertainty (n, c) of each value, in the column of its calibration."""
    calibrations, column = np.unique(observed.calibration, return_inverse=True)
    shared = np.zeros((len(column), len(calibrations)))
    shared[np.arange(len(column)), column] = observed.shared_se
    return shared


def is_paired(observed: Observations, by: str) -> bool:
    """Tell whether the same subjects were seen at both levels.

    Parameters
    ----------
    observed : of two levels.
    by : name of the column of levels, for the message.

    Raises
    ------
    CohortError
        When some subjects were, but fewer than half: neither groups nor pairs.
    """
    pairs = np.unique(np.column_stack([observed.subject, observed.level]), axis=0)
    subjects, counts = np.unique(pairs[:, 0], return_counts=True)
    both = subjects[counts == 2]
    if both.size and both.size < LEAST_PAIRED_SHARE * len(subjects):
        levels = named([observed.levels[code] for code in np.unique(observed.level)])
        message = (
            f"{both.size} of {len(subjects)} subjects have more than one {by} "
            f"({named([observed.subjects[s] for s in both])}; levels {levels}), the others one: neither groups nor "
            "pairs. Mend the column, or leave these rows out."
        )
        raise CohortError(message)
    return both.size > 0


def group_units(observed: Observations, level: int) -> Units:
    """One value a subject, of two groups."""
    subjects, value, variance, shared = subject_means(observed)
    first = np.unique(observed.subject, return_index=True)[1]
    is_level = (observed.level[first] == level).astype(np.float64)
    _, cells = np.unique(observed.subject, return_inverse=True)
    covariates = nested_means(cells, observed.within).of(observed.covariates)
    design = np.column_stack([is_level, np.ones(len(subjects)), covariates])
    _check_rank(design, observed.covariate_names, n_own=2)
    return Units(value, design, variance, shared, False, 0, (), (value[is_level > 0], value[is_level == 0]))


def pair_units(observed: Observations, level: int) -> Units:
    """One difference a subject: level minus reference, within the same eyes where an eye was seen at both."""
    chosen = _comparable(observed)
    n_unpaired = len(np.unique(observed.subject)) - len(np.unique(observed.subject[chosen]))
    held = observed.some(chosen)
    subjects, rows = np.unique(held.subject, return_inverse=True)
    cells = rows + len(subjects) * (held.level != level)
    means = nested_means(cells, held.within)
    n = len(subjects)

    def difference(values: FloatArray) -> FloatArray:
        cell = means.of(values)
        return np.asarray(cell[:n] - cell[n:])

    own = means.variance(held.variance)
    covariates = difference(held.covariates)
    changes = np.abs(covariates).max(axis=0, initial=0.0) > CONSTANT
    names = held.covariate_names
    design = np.column_stack([np.ones(n), covariates[:, changes]])
    _check_rank(design, tuple(name for name, kept in zip(names, changes, strict=True) if kept), n_own=1)
    cell = means.of(held.value)
    return Units(
        value=difference(held.value),
        design=design,
        variance=own[:n] + own[n:],
        shared=difference(by_calibration(held)),
        paired=True,
        n_unpaired=n_unpaired,
        constant_covariates=tuple(name for name, kept in zip(names, changes, strict=True) if not kept),
        level_means=(cell[:n], cell[n:]),
    )


def _comparable(observed: Observations) -> BoolArray:
    """Observations of subjects with both levels; of eyes with both levels where the subject has such."""
    complete = _has_both(observed.subject, observed.level)
    if observed.within:
        eye_complete = _has_both(observed.within[0], observed.level)
        helped = np.bincount(observed.subject, weights=eye_complete)[observed.subject] > 0
        complete &= eye_complete | ~helped
    return complete


def _has_both(unit: IntArray, level: IntArray) -> BoolArray:
    pairs = np.unique(np.column_stack([unit, level]), axis=0)
    return np.bincount(pairs[:, 0], minlength=int(unit.max()) + 1)[unit] == 2


def _check_rank(design: FloatArray, covariates: tuple[str, ...], n_own: int) -> None:
    """Refuse covariates that say what the contrast or other covariates say."""
    scale = np.linalg.norm(design, axis=0)
    scaled = design / np.where(scale > 0, scale, 1.0)
    if len(design) <= design.shape[1] - len(covariates):
        return  # too few subjects at all: said as such
    for k, name in enumerate(covariates, start=n_own + 1):
        if np.linalg.matrix_rank(scaled[:, :k], tol=1e-8) < k:
            told = "levels that are compared" if k == n_own + 1 else "levels that are compared, or other covariates,"
            message = (
                f"covariate {name!r} tells the same as the {told} among {len(design)} subjects: their parts cannot be "
                "told apart. Leave it out."
            )
            raise CohortError(message)
