"""Tests by rearranging subjects: exact where there are few ways, seeded draws otherwise."""

from collections.abc import Iterator
from itertools import combinations, permutations, product
from math import comb, factorial

import numpy as np

from vasohm.arrays import FloatArray, IntArray

MOST_EXACT = 40_000  # ways that are all tried
DRAWS = 9_999
CHUNK = 2_000_000  # numbers held at once
ROUNDING = 1e-9  # relative; statistics of equal arrangements differ in the last digits


def permute_groups(y: FloatArray, is_level: FloatArray, rng: np.random.Generator) -> tuple[float, float]:
    """Test of two groups of subjects by giving their labels to others.

    Parameters
    ----------
    y : (n,) one value a subject.
    is_level : (n,) 1 on the one side, 0 on the other.
    rng : where there are more than 40 000 ways, 9 999 of them are drawn.

    Returns
    -------
    p, two-sided, of the difference over its standard error with unequal variances; and the least p that can come out.

    References
    ----------
    Janssen A. Stat Probab Lett 1997;36:9-21, doi:10.1016/S0167-7152(97)00043-6 (the studentised statistic); Phipson B,
    Smyth GK. Stat Appl Genet Mol Biol 2010;9:39, doi:10.2202/1544-6115.1585, eq. 2 (p of draws).
    """
    n, n_level = len(y), int(is_level.sum())
    y = y - y.mean()
    observed = _welch_t(y, is_level[None] > 0)[0]
    ways = comb(n, n_level)
    exact = ways <= MOST_EXACT
    count = 0
    for labels in _all_labels(n, n_level) if exact else _drawn_labels(n, n_level, rng):
        count += int(np.sum(_welch_t(y, labels) >= observed * (1 - ROUNDING)))
    if exact:
        mirrored = 2 if 2 * n_level == n else 1
        return count / ways, mirrored / ways
    return (count + 1) / (DRAWS + 1), 1 / (DRAWS + 1)


def permute_residuals(
    y: FloatArray, design: FloatArray, rng: np.random.Generator, *, by_sign: bool
) -> tuple[float, float]:
    """Test of the first column of a design by rearranging what the other columns leave over.

    Parameters
    ----------
    y : (n,) one value, or one difference, a subject.
    design : (n, p) of full rank, p < n.
    rng : for the draws where there are more than 40 000 ways.
    by_sign : whether residuals change their signs, as differences may, or their places.

    Returns
    -------
    p, two-sided, and the least p that can come out.

    References
    ----------
    Freedman D, Lane D. J Bus Econ Stat 1983;1:292-298, doi:10.1080/07350015.1983.10509354; Winkler AM et al. NeuroImage
    2014;92:381-397, doi:10.1016/j.neuroimage.2014.01.060, for signs.
    """
    n, p = design.shape
    rest = np.linalg.qr(design[:, 1:])[0] if p > 1 else np.zeros((n, 0))
    fitted = rest @ (rest.T @ y)
    residual = y - fitted
    column = design[:, 0] - rest @ (rest.T @ design[:, 0])
    column /= np.linalg.norm(column)

    def statistic(values: FloatArray) -> FloatArray:
        left = values - (values @ rest) @ rest.T
        along = left @ column
        across = np.maximum(np.sum(np.square(left), axis=1) - np.square(along), 0)
        return np.abs(along) / np.sqrt(np.maximum(across, np.finfo(float).tiny))

    observed = statistic(y[None])[0]
    ways = 2**n if by_sign else factorial(n)
    exact = ways <= MOST_EXACT
    count = 0
    for arranged in _arranged(residual, rng, by_sign=by_sign, exact=exact):
        count += int(np.sum(statistic(fitted + arranged) >= observed * (1 - ROUNDING)))
    if exact:
        return count / ways, (2 if by_sign else 1) / ways
    return (count + 1) / (DRAWS + 1), 1 / (DRAWS + 1)


def _welch_t(y: FloatArray, labels: FloatArray) -> FloatArray:
    """Absolute difference over its standard error for each arrangement (m, n) of labels."""
    held = labels.astype(np.float64)
    n, n_level = len(y), held[0].sum()
    n_other = n - n_level
    total, squares = y.sum(), float(y @ y)
    sum_level, squares_level = held @ y, held @ np.square(y)
    mean_level, mean_other = sum_level / n_level, (total - sum_level) / n_other
    var_level = (squares_level - n_level * mean_level**2) / (n_level - 1)
    var_other = (squares - squares_level - n_other * mean_other**2) / (n_other - 1)
    variance = np.maximum(var_level, 0) / n_level + np.maximum(var_other, 0) / n_other
    return np.abs(mean_level - mean_other) / np.sqrt(np.maximum(variance, np.finfo(float).tiny))


def _all_labels(n: int, n_level: int) -> Iterator[FloatArray]:
    places = np.array(list(combinations(range(n), n_level)), dtype=np.int64)
    for start in range(0, len(places), rows := max(1, CHUNK // n)):
        yield _labels(places[start : start + rows], n)


def _drawn_labels(n: int, n_level: int, rng: np.random.Generator) -> Iterator[FloatArray]:
    for size in _chunks(n):
        yield _labels(np.argsort(rng.random((size, n)), axis=1)[:, :n_level], n)


def _labels(places: IntArray, n: int) -> FloatArray:
    labels = np.zeros((len(places), n))
    np.put_along_axis(labels, places, 1.0, axis=1)
    return labels


def _arranged(residual: FloatArray, rng: np.random.Generator, *, by_sign: bool, exact: bool) -> Iterator[FloatArray]:
    n = len(residual)
    if exact and by_sign:
        yield residual * np.array(list(product((1.0, -1.0), repeat=n)))
    elif exact:
        yield residual[np.array(list(permutations(range(n))), dtype=np.int64)]
    else:
        for size in _chunks(n):
            if by_sign:
                yield residual * rng.choice((-1.0, 1.0), size=(size, n))
            else:
                yield residual[np.argsort(rng.random((size, n)), axis=1)]


def _chunks(n: int) -> Iterator[int]:
    rows = max(1, CHUNK // n)
    for start in range(0, DRAWS, rows):
        yield min(rows, DRAWS - start)
