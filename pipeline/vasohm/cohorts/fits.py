"""Contrasts of subjects: regression and unequal variances, with what is known of each value's own uncertainty."""

from dataclasses import dataclass

import numpy as np
from scipy import stats
from scipy.optimize import brentq

from vasohm.arrays import FloatArray

ROUNDING = 1e-10  # relative; scatter below this is that of the arithmetic


@dataclass(frozen=True, slots=True)
class Estimate:
    """An effect with its doubt: what shows in the scatter of subjects, and what they share and so cannot show."""

    effect: float
    variance: float  # from the scatter of subjects, their measurement included
    df: float  # of that variance
    shared_variance: float  # known; of calibrations that the two sides do not have in common
    method: str

    @property
    def se(self) -> float:
        return float(np.sqrt(self.variance + self.shared_variance))

    @property
    def total_df(self) -> float:
        """Degrees of freedom of both together (JCGM 100:2008, eq. G.2b); those of a known part are infinite."""
        if not self.variance > 0:
            return np.nan
        return self.df * (1 + self.shared_variance / self.variance) ** 2

    def interval(self) -> tuple[float, float]:
        """Bounds of the 95 % interval of the effect."""
        half = float(stats.t.ppf(0.975, self.total_df)) * self.se if self.variance > 0 else np.nan
        return self.effect - half, self.effect + half

    @property
    def p(self) -> float:
        """Two-sided p of no effect."""
        return float(2 * stats.t.sf(abs(self.effect) / self.se, self.total_df)) if self.variance > 0 else np.nan


@dataclass(frozen=True, slots=True, eq=False)
class Regression:
    """Coefficients (p,), their covariance (p, p), and the weight (p, n) of each value in each coefficient."""

    coefficients: FloatArray
    covariance: FloatArray
    weights: FloatArray


def regress(y: FloatArray, design: FloatArray, known_variance: FloatArray) -> Regression:
    """Regression in which each value has a known variance of its own, beside a scatter that all have alike.

    Parameters
    ----------
    y : (n,) values.
    design : (n, p) of full rank, p < n.
    known_variance : (n,) of the measurement of each; zeros give ordinary least squares.

    Returns
    -------
    Regression
        With n - p degrees of freedom. Its variance is never below what the measurements alone allow.

    References
    ----------
    Paule RC, Mandel J. J Res Natl Bur Stand 1982;87:377-385, doi:10.6028/jres.087.022 (the common scatter); Hartung J,
    Knapp G. Stat Med 2001;20:1771-1782, doi:10.1002/sim.791, eq. 6, bounded below as in Rover C et al. BMC Med Res
    Methodol 2015;15:99, doi:10.1186/s12874-015-0091-1.
    """
    df = len(y) - design.shape[1]

    def weighted(scatter: float) -> tuple[FloatArray, FloatArray, FloatArray, float]:
        weight = 1 / (scatter + known_variance)
        covariance = np.linalg.inv(design.T @ (weight[:, None] * design))
        rows = covariance @ design.T * weight
        coefficients = rows @ y
        return coefficients, covariance, rows, float(np.sum(weight * np.square(y - design @ coefficients)))

    plain = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    scatter = float(plain @ plain) / df
    floor = ROUNDING**2 * max(float(np.max(np.square(y))), 1e-300)
    if np.any(known_variance > 0):
        low, high = floor, max(float(plain @ plain), floor) * 2 + floor

        def excess(at: float) -> float:
            return weighted(at)[3] - df

        if excess(low) <= 0:
            scatter = low
        else:
            while excess(high) > 0:
                high *= 4
            scatter = float(brentq(excess, low, high, xtol=1e-14, rtol=1e-12))
    elif scatter <= floor:
        coefficients, covariance, rows, _ = weighted(1.0)
        return Regression(coefficients, np.zeros_like(covariance), rows)
    coefficients, covariance, rows, _ = weighted(scatter)
    return Regression(coefficients, covariance, rows)


def shared_variance(weights: FloatArray, design: FloatArray, shared: FloatArray) -> float:
    """Variance of a contrast from errors that values share, without what their scatter shows already.

    Parameters
    ----------
    weights : (n,) of the values in the contrast.
    design : (n, p) of the fit.
    shared : (n, c) standard uncertainty of each value from each calibration.

    Notes
    -----
    With K = S S' the covariance of these errors, a' K a is their whole part in the contrast. Where all values rest on
    one calibration it cancels; where each side has its own, it stays whole. Errors that differ from value to value also
    spread the residuals, on average by tr(M K) / (n - p) each, M the projection onto residuals; that much of it is in
    the scatter and is not counted twice (law of propagation: JCGM 100:2008, 5.2.2).
    """
    n, p = design.shape
    basis = np.linalg.qr(design)[0]
    residual = float(np.sum(np.square(shared)) - np.sum(np.square(basis.T @ shared)))
    whole = float(np.sum(np.square(weights @ shared)))
    kept = whole - max(residual, 0.0) / (n - p) * float(weights @ weights)
    largest = float(np.sum(np.abs(weights) @ np.abs(shared))) ** 2  # were all of one sign
    return kept if kept > ROUNDING * largest else 0.0


def fit_regression(
    y: FloatArray, design: FloatArray, known_variance: FloatArray, shared: FloatArray, method: str
) -> Estimate:
    """Estimate the coefficient of the design's first column."""
    fit = regress(y, design, known_variance)
    extra = shared_variance(fit.weights[0], design, shared)
    df = len(y) - design.shape[1]
    return Estimate(float(fit.coefficients[0]), float(fit.covariance[0, 0]), df, extra, method)


def fit_welch(
    y: FloatArray, is_level: FloatArray, known_variance: FloatArray, shared: FloatArray, method: str
) -> Estimate:
    """Difference of two groups of subjects whose scatters may differ.

    References
    ----------
    Welch BL. Biometrika 1947;34:28-35, doi:10.1093/biomet/34.1-2.28, eq. 28, for the degrees of freedom.
    """
    weights = np.zeros(len(y))
    means, variances, sizes = [], [], []
    for side, sign in ((is_level > 0, 1.0), (is_level == 0, -1.0)):
        one = np.ones((int(side.sum()), 1))
        fit = regress(y[side], one, known_variance[side])
        weights[side] = sign * fit.weights[0]
        means.append(float(fit.coefficients[0]))
        variances.append(float(fit.covariance[0, 0]))
        sizes.append(int(side.sum()))
    total = sum(variances)
    parts = sum(v**2 / (n - 1) for v, n in zip(variances, sizes, strict=True))
    df = total**2 / parts if parts > 0 else np.nan
    extra = shared_variance(weights, np.column_stack([is_level, np.ones(len(y))]), shared)
    return Estimate(means[0] - means[1], total, df, extra, method)
