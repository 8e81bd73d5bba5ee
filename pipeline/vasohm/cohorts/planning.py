"""How many subjects a next study needs."""

import numpy as np
from scipy import stats

POWER = 0.8
ALPHA = 0.05
UPPER = 0.8  # probability with which the true scatter lies below the one that the careful number is made for
MOST_SUBJECTS = 1_000_000


def power_of(n: float, effect: float, sd: float, *, paired: bool) -> float:
    """Power of a two-sided t test at 5 %.

    Parameters
    ----------
    n : subjects a group, or pairs.
    effect : difference of means, in the units of `sd`; for a ratio its natural logarithm.
    sd : between subjects of one group, or of the pairs' differences.
    paired : whether each subject is its own reference.

    References
    ----------
    Chow SC, Shao J, Wang H. Sample size calculations in clinical research, 2nd ed, 2008, sections 3.1.1 and 3.2.1
    (noncentral t).
    """
    df = n - 1 if paired else 2 * n - 2
    noncentrality = abs(effect) / sd * np.sqrt(n if paired else n / 2)
    critical = stats.t.ppf(1 - ALPHA / 2, df)
    return float(stats.nct.sf(critical, df, noncentrality) + stats.nct.cdf(-critical, df, noncentrality))


def subjects_needed(effect: float, sd: float, *, paired: bool) -> float:
    """Return the least number of subjects a group, or pairs, with a power of 80 %; NaN beyond a million."""
    if not (np.isfinite(sd) and sd > 0 and effect != 0):
        return np.nan
    z = stats.norm.ppf(1 - ALPHA / 2) + stats.norm.ppf(POWER)
    guess = float((1 if paired else 2) * (z * sd / effect) ** 2)  # with a known scatter: never too many
    if guess > MOST_SUBJECTS:
        return np.nan
    n = max(2, int(np.floor(guess)))
    while power_of(n, effect, sd, paired=paired) < POWER:
        n += 1
    return float(n)


def upper_sd(sd: float, df: float) -> float:
    """Scatter that the true one lies below with a probability of 80 %.

    References
    ----------
    Browne RH. Stat Med 1995;14:1933-1940, doi:10.1002/sim.4780141709.
    """
    return float(sd * np.sqrt(df / stats.chi2.ppf(1 - UPPER, df))) if df > 0 else np.nan
