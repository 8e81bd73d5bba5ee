"""Effect sizes and many p-values at once: plain formulas."""

import numpy as np
from scipy.special import gammaln

from vasohm.arrays import FloatArray


def adjusted(p: FloatArray) -> FloatArray:
    """Adjust p-values so that the share of false discoveries among those called is bounded.

    Parameters
    ----------
    p : (n,) p-values of one family; NaN is no member of it.

    Returns
    -------
    (n,) the smallest share of false discoveries at which each would be called; NaN where `p` is.

    References
    ----------
    Benjamini Y, Hochberg Y. J R Stat Soc B 1995;57:289-300, doi:10.1111/j.2517-6161.1995.tb02031.x, step-up procedure.
    """
    adjusted_p = np.full(len(p), np.nan)
    members = np.flatnonzero(np.isfinite(p))
    order = members[np.argsort(p[members], kind="stable")]
    raised = p[order] * len(order) / np.arange(1, len(order) + 1)
    adjusted_p[order] = np.minimum(1.0, np.minimum.accumulate(raised[::-1])[::-1])
    return adjusted_p


def small_sample_factor(df: float) -> float:
    """Factor that takes the bias out of a standardised difference of few subjects.

    Parameters
    ----------
    df : degrees of freedom of the standard deviation, above 1.

    References
    ----------
    Hedges LV. J Educ Stat 1981;6:107-128, doi:10.3102/10769986006002107, eq. 6e (exact, by the gamma function).
    """
    return float(np.exp(gammaln(df / 2) - gammaln((df - 1) / 2)) / np.sqrt(df / 2))


def hedges_g(effect: float, one: FloatArray, other: FloatArray, *, paired: bool) -> float:
    """Return an effect in standard deviations of subjects, without the bias of small samples.

    Parameters
    ----------
    effect : difference of the two sides, on the scale of the values.
    one, other : values of the subjects on either side.
    paired : whether these are the same subjects; then the mean of both variances is the yardstick, and the degrees of
        freedom are those of the pairs.

    Returns
    -------
    g; NaN where the subjects do not differ or are too few.

    References
    ----------
    Hedges 1981, as above; for pairs Lakens D. Front Psychol 2013;4:863, doi:10.3389/fpsyg.2013.00863, eq. 10.
    """
    df = len(one) - 1 if paired else len(one) + len(other) - 2
    if min(len(one), len(other)) < 2 or df < 2:
        return np.nan
    if paired:
        variance = (np.var(one, ddof=1) + np.var(other, ddof=1)) / 2
    else:
        variance = (np.var(one, ddof=1) * (len(one) - 1) + np.var(other, ddof=1) * (len(other) - 1)) / df
    return float(effect / np.sqrt(variance) * small_sample_factor(df)) if variance > 0 else np.nan
