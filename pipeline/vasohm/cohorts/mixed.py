"""A linear mixed model: subjects, and units within them, as random effects."""

import warnings
from dataclasses import dataclass

import numpy as np

from vasohm.arrays import FloatArray, IntArray
from vasohm.cohorts.observations import Observations, combined

SINGULAR = 1e-4  # of the whole variance; a subject's variance below this share is none


@dataclass(frozen=True, slots=True, eq=False)
class Components:
    """Variances of a mixed model: between subjects, of each nested unit, and of what is left."""

    subject: float
    nested: tuple[float, ...]
    residual: float
    factors: tuple[IntArray, ...]  # (n,) codes of the nested units that have a variance


def split_variance(observed: Observations, design: FloatArray, cells: IntArray | None = None) -> Components | None:
    """Variance components by restricted maximum likelihood.

    Parameters
    ----------
    observed : the observations.
    design : (n, p) of the fixed effects.
    cells : (n,) a further unit within subjects, such as subject and level together.

    Returns
    -------
    Components
        None where there is nothing to split, as with one observation a subject, or where the fit comes to no end.

    References
    ----------
    Patterson HD, Thompson R. Biometrika 1971;58:545-554, doi:10.1093/biomet/58.3.545; Laird NM, Ware JH. Biometrics
    1982;38:963-974, doi:10.2307/2529876.
    """
    n = len(observed.value)
    n_subjects = len(np.unique(observed.subject))
    if n_subjects == n or n - np.linalg.matrix_rank(design) <= 1:
        return None
    factors = []
    coarser = n_subjects
    for codes in (*(() if cells is None else (cells,)), *observed.within):
        unit = combined(observed.subject, codes)
        if coarser < (count := int(unit.max()) + 1) < n:
            factors.append(unit)
            coarser = count
    centre, spread = float(observed.value.mean()), float(observed.value.std())
    if not spread > 0:
        return None
    found = _fit((observed.value - centre) / spread, design, observed.subject, tuple(factors))
    if found is None:
        return None
    subject, nested, residual = found
    square = spread**2
    return Components(subject * square, tuple(one * square for one in nested), residual * square, tuple(factors))


def _fit(
    value: FloatArray, design: FloatArray, subject: IntArray, factors: tuple[IntArray, ...]
) -> tuple[float, tuple[float, ...], float] | None:
    from statsmodels.regression.mixed_linear_model import MixedLM, VCSpec  # noqa: PLC0415  heavy: loaded when needed

    order = np.argsort(subject, kind="stable")
    places = [order[subject[order] == one] for one in np.unique(subject)]
    names = [f"unit {k}" for k in range(len(factors))]
    matrices = [[_indicators(codes[place]) for place in places] for codes in factors]
    columns = [[[str(j) for j in range(held.shape[1])] for held in one] for one in matrices]
    nested = VCSpec(names, columns, matrices) if factors else None
    model = MixedLM(value, design, groups=subject, exog_re=np.ones((len(value), 1)), exog_vc=nested)
    for method in ("bfgs", "powell"):  # the second needs no slope, where the first steps out of what can be inverted
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # of a variance that comes out as none: looked at by the caller
            try:
                fitted = model.fit(reml=True, method=[method])
            except (np.linalg.LinAlgError, ValueError):
                continue
        parts = (float(fitted.cov_re[0, 0]), *map(float, fitted.vcomp), float(fitted.scale))
        if fitted.converged and np.all(np.isfinite(parts)):
            return parts[0], parts[1:-1], parts[-1]
    return None


def _indicators(codes: IntArray) -> FloatArray:
    return (codes[:, None] == np.unique(codes)).astype(np.float64)


def is_singular(components: Components) -> bool:
    """Tell whether no variance between subjects was found: the model then takes images for subjects."""
    whole = components.subject + sum(components.nested) + components.residual
    return not components.subject > SINGULAR * whole


def fit_fixed_effects(
    observed: Observations, design: FloatArray, components: Components
) -> tuple[FloatArray, FloatArray]:
    """Coefficients (p,) and covariance (p, p) of the fixed effects, given the variances.

    The known variance of each measurement takes the place of its part in the residual: with equal ones nothing
    changes, else what is measured better counts more.
    """
    known = observed.variance
    residual = max(components.residual - float(known.mean()), 0.0) + known
    if not np.all(residual > 0):
        residual = np.full(len(known), components.residual)
    information = np.zeros((design.shape[1], design.shape[1]))
    moment = np.zeros(design.shape[1])
    order = np.argsort(observed.subject, kind="stable")
    borders = np.flatnonzero(np.diff(observed.subject[order])) + 1
    for place in np.split(order, borders):
        covariance = np.diag(residual[place]) + components.subject
        for variance, codes in zip(components.nested, components.factors, strict=True):
            covariance = covariance + variance * (codes[place][:, None] == codes[place])
        solved = np.linalg.solve(covariance, np.column_stack([design[place], observed.value[place]]))
        information += design[place].T @ solved[:, :-1]
        moment += design[place].T @ solved[:, -1]
    inverse = np.linalg.inv(information)
    return inverse @ moment, inverse
