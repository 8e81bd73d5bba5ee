"""How much correlated noise widens the scatter of fitted radii."""

from dataclasses import dataclass

import numpy as np
from scipy import fft

from vasohm.arrays import FloatArray, freeze
from vasohm.network.jointfit import LN_C, LN_R, Observed, banded, factor, model_strips, solve
from vasohm.network.noise import LAGS_PX
from vasohm.network.priors import Expected, make_priors
from vasohm.network.profiles import ProfileTable, ln_height

N_RADII = 14
LENGTH_PX = 48  # of the segment on which the scatter is worked out
ROUNDS = 4
FACTOR_RANGE = (0.2, 1e5)


@dataclass(frozen=True, slots=True, eq=False)
class NoiseFactor:
    """Variance of a segment's radius under the picture's noise over that under independent noise of the stated size.

    `variance` is the true variance of a pixel in units of the stated one.
    """

    ln_r: FloatArray
    ln_factor: FloatArray
    variance: float

    def __post_init__(self) -> None:
        freeze(self)

    def at(self, ln_r: FloatArray) -> FloatArray:
        """Return the factor at (n,) ln r."""
        return np.exp(np.interp(ln_r, self.ln_r, self.ln_factor))


def noise_factor(table: ProfileTable, covariance: FloatArray, cnr: float, contrast_sd: float) -> NoiseFactor:
    """Work out the factor over a range of radii.

    Parameters
    ----------
    covariance : of pixels by squared distance, in units of the stated variance.
    cnr : height of a typical vessel over the stated standard deviation.
    contrast_sd : of the prior of ln contrast: the better it is known, the more hurts noise on the scale of a vessel.

    Notes
    -----
    The joint fit is linear in small noise: ln r of a segment is a weighted sum over all samples of its strips. The
    factor is the variance of that sum under the covariance over its variance under independent unit noise. As the
    weights rest on the factor itself, both are found by iteration.
    """
    s = table.optics.s_px
    grid = np.linspace(np.log(0.3 * s), np.log(min(table.radius_max_px, max(30.0 * s, 2.0))), N_RADII)
    if not covariance[1:].any():
        return NoiseFactor(grid, np.full(N_RADII, np.log(covariance[0])), float(covariance[0]))
    lag = np.arange(-LAGS_PX, LAGS_PX + 1)
    squared = lag[:, None] ** 2 + lag**2
    kernel = np.where(squared <= LAGS_PX**2, covariance[np.minimum(squared, LAGS_PX**2)], 0.0)
    found = [_factor_at(table, kernel, float(l), cnr, contrast_sd) for l in grid]
    return NoiseFactor(grid, np.log(np.clip(found, *FACTOR_RANGE)), float(covariance[0]))


def _factor_at(table: ProfileTable, kernel: FloatArray, ln_r: float, cnr: float, contrast_sd: float) -> float:
    optics, n = table.optics, LENGTH_PX
    half = min(int(np.ceil(np.exp(ln_r) + 3 * optics.s_px + 3)), table.half_px - 1)
    theta = np.zeros((n, 5))
    theta[:, LN_R] = ln_r
    theta[:, LN_C] = np.log(cnr) - ln_height(optics, np.array([ln_r]))[0]
    design = model_strips(table, half, theta[:1])[0, 1:].astype(np.float64)
    segment = np.zeros(n, np.int64)
    alone = Observed(np.array([0, n]), segment, (), (), (), np.ones(n))
    one = np.ones(1)
    expected = Expected(theta[:1, LN_C], one * contrast_sd, 0 * one, one)
    priors = make_priors(alone, table, theta, expected)
    mean = np.zeros(theta.shape)
    mean[:, LN_R] = 1.0 / n
    result = float(kernel[LAGS_PX, LAGS_PX])
    for _ in range(ROUNDS):
        matrix = np.broadcast_to(design @ design.T / result, (n, 5, 5))
        influence = solve(factor(banded(matrix), priors.full(segment), priors.hold), mean) @ design
        spread = float(np.sum(influence * _convolved(influence, kernel)))
        result = float(np.clip(spread / np.sum(influence**2), *FACTOR_RANGE))
    return result


def _convolved(values: FloatArray, kernel: FloatArray) -> FloatArray:
    """Convolve with a kernel of odd edges at the size of `values`, which are 0 beyond their border."""
    full = [fft.next_fast_len(n + k - 1, real=True) for n, k in zip(values.shape, kernel.shape, strict=True)]
    whole = fft.irfft2(fft.rfft2(values, full) * fft.rfft2(kernel, full), full)
    inner = (slice((k - 1) // 2, (k - 1) // 2 + n) for n, k in zip(values.shape, kernel.shape, strict=True))
    return np.asarray(whole[tuple(inner)])
