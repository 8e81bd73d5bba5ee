"""Two groups of vessels whose features differ by a shift and depend alike on all else; each error is known apart."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from vasohm.arrays import FloatArray, freeze

Neighbours: TypeAlias = Callable[[FloatArray], FloatArray]

FREEDOM = 4.0  # of the t distribution whose weights keep odd segments from pulling
RIDGE = 0.5  # segments' worth of a belief that nothing explains a colour but the class
SMALLEST_SD = 1e-3
LEAST_NOISY = 8.0  # segments from which the factor on the noise is told
MOST_INFLATION = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class Data:
    """Features of n segments, the covariance of their errors, and what may explain them beside the group."""

    value: FloatArray  # (n, f)
    noise: FloatArray  # (n, f, f)
    x: FloatArray  # (n, k)

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def design(self) -> FloatArray:
        return np.column_stack((np.ones(len(self.x)), self.x))


@dataclass(frozen=True, slots=True, eq=False)
class Groups:
    """Two groups that differ by `shift` and share lines, spread and a factor on the noise; one where it is 0."""

    line: FloatArray  # (1 + k, f) of the middle between the groups
    shift: FloatArray  # (f,) second group minus first
    spread: FloatArray  # (f, f) covariance within a group
    inflation: float

    def __post_init__(self) -> None:
        freeze(self)

    def log_density(self, data: Data, side: float) -> FloatArray:
        """Log density (n,) of segments `side` shifts from the middle, but for a constant that all groups share.

        Of t distributions, so that few odd segments do not decide.
        """
        f = data.value.shape[1]
        total = self.spread + self.inflation * data.noise
        away = data.value - data.design @ self.line - side * self.shift
        square = np.einsum("ni,nij,nj->n", away, np.linalg.inv(total), away)
        _, ln_volume = np.linalg.slogdet(total)
        density: FloatArray = -0.5 * ln_volume - 0.5 * (FREEDOM + f) * np.log1p(square / FREEDOM)
        return density

    def log_ratio(self, data: Data) -> FloatArray:
        """Log of the likelihood of the second group over that of the first, (n,)."""
        return self.log_density(data, 0.5) - self.log_density(data, -0.5)


def fit_groups(data: Data, second: FloatArray | None, neighbours: Neighbours, rounds: int) -> Groups:
    """Fit two groups by expectation and maximisation (Dempster, Laird & Rubin, J R Stat Soc B 1977;39:1-38).

    Parameters
    ----------
    data : features.
    second : (n,) first guess of the probability of the second group; None for a single group.
    neighbours : from the log odds of all segments to the probabilities of the second group.
    rounds : of expectation and maximisation.
    """
    n, f = data.value.shape
    single = second is None
    member = np.full(n, 0.5) if second is None else second
    groups = Groups(
        np.zeros((1 + data.x.shape[1], f)), np.zeros(f), np.diag(np.var(data.value, axis=0) + SMALLEST_SD**2), 1.0
    )
    weight = np.ones(n)
    for _ in range(rounds):
        groups = _maximised(groups, data, member, weight, single=single)
        if not single:
            member = neighbours(groups.log_ratio(data))
        weight = _weights(groups, data, member)
    return groups


def _maximised(groups: Groups, data: Data, second: FloatArray, weight: FloatArray, *, single: bool) -> Groups:
    n, f = data.value.shape
    side = np.repeat((-0.5, 0.5), n)
    both = np.column_stack((np.ones(2 * n), np.zeros(2 * n) if single else side, np.tile(data.x, (2, 1))))
    member = np.concatenate(((1 - second) * weight, second * weight))
    own = np.tile(data.noise, (2, 1, 1))
    total = groups.spread + groups.inflation * own
    found, left = np.empty((both.shape[1], f)), np.empty((2 * n, f))
    for k in range(f):
        precise = member / total[:, k, k]
        ridge = np.full(both.shape[1], RIDGE * np.median(1 / total[:, k, k]))
        ridge[:2] = 1e-9
        y = np.tile(data.value[:, k], 2)
        found[:, k] = np.linalg.solve(both.T @ (precise[:, None] * both) + np.diag(ridge), both.T @ (precise * y))
        left[:, k] = y - both @ found[:, k]
    precise = member / total[:, 0, 0]
    square = left[:, :, None] * left[:, None, :]
    spread = np.einsum("n,nij->ij", precise, square - groups.inflation * own) / precise.sum()
    noisy = member * (own[:, 0, 0] > spread[0, 0])
    inflation = groups.inflation
    if noisy.sum() > LEAST_NOISY:
        inflation *= float(np.sqrt((noisy * square[:, 0, 0] / total[:, 0, 0]).sum() / noisy.sum()))
    line = np.delete(found, 1, axis=0)
    return Groups(
        line,
        np.zeros(f) if single else found[1],
        _positive(spread),
        float(np.clip(inflation, 1.0, MOST_INFLATION)),
    )


def _weights(groups: Groups, data: Data, second: FloatArray) -> FloatArray:
    """Weights (n,) of a t distribution."""
    f = data.value.shape[1]
    precision = np.linalg.inv(groups.spread + groups.inflation * data.noise)
    left = data.value - data.design @ groups.line
    square = np.zeros(len(left))
    for side, member in ((-0.5, 1 - second), (0.5, second)):
        away = left - side * groups.shift
        square += member * np.einsum("ni,nij,nj->n", away, precision, away)
    return np.asarray((FREEDOM + f) / (FREEDOM + square))


def _positive(spread: FloatArray) -> FloatArray:
    """The nearest covariance whose standard deviations are not below the smallest."""
    values, vectors = np.linalg.eigh(0.5 * (spread + spread.T))
    return np.asarray(vectors @ np.diag(np.maximum(values, SMALLEST_SD**2)) @ vectors.T)
