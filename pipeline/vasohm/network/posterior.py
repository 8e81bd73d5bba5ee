"""What the joint fit knows: stiffness by its evidence, variances of points and segments, response to shared errors."""

from dataclasses import dataclass

import numpy as np
from scipy.linalg.blas import dtbsv

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.network.jointfit import (
    LN_R,
    Normal,
    Observed,
    Priors,
    banded,
    factor,
    prior_pull,
    solve,
    times,
    with_stiffness,
)

LOG10_STIFFNESS = np.arange(1.0, 8.0)
SPREAD_OF_STIFFNESS = 1.0  # sd of log10 stiffness of segments around the image's


@dataclass(frozen=True, slots=True, eq=False)
class StiffnessDoubt:
    """How probable each stiffness of `LOG10_STIFFNESS` is, and how far ln r would move with it.

    The radii are those of one stiffness; that it is not known adds the variance of these moves (law of total variance).
    """

    probability: FloatArray  # (n_segments, n_stiffnesses)
    move: FloatArray  # (n_points, n_stiffnesses) of ln r

    def __post_init__(self) -> None:
        freeze(self)

    def point_variance(self, segment: IntArray) -> FloatArray:
        """Variance (n_points,) of ln r."""
        return _spread(self.probability[segment], self.move)

    def segment_variance(self, gradient: FloatArray, segment: IntArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points."""
        moves = np.zeros(self.probability.shape)
        if len(segment):
            first = np.flatnonzero(np.diff(segment, prepend=-1))
            moves[segment[first]] = np.add.reduceat(gradient[:, None] * self.move, first, axis=0)
        return _spread(self.probability, moves)


def _spread(probability: FloatArray, move: FloatArray) -> FloatArray:
    mean = np.sum(probability * move, axis=1, keepdims=True)
    return np.asarray(np.sum(probability * (move - mean) ** 2, axis=1))


@dataclass(frozen=True, slots=True, eq=False)
class BandedCovariance:
    """Covariance of ln r along every segment: the banded Cholesky factor of its inverse, and what stiffness adds."""

    factored: FloatArray
    segment: IntArray  # (n_points,)
    n_segments: int
    n_unknowns: int
    doubt: StiffnessDoubt

    def __post_init__(self) -> None:
        freeze(self)

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,).

        With the inverse covariance factored as L L', that is the square of L^-1 gradient: half a solution tells it.
        """
        if not len(self.segment):  # of which the library makes a fault
            return np.zeros(self.n_segments)
        right = np.zeros((len(self.segment), self.n_unknowns))
        right[:, LN_R] = gradient
        half = dtbsv(len(self.factored) - 1, self.factored, right.ravel(), lower=1, overwrite_x=1)
        known = np.bincount(self.segment, np.sum(np.square(half.reshape(right.shape)), axis=1), self.n_segments)
        return known + self.doubt.segment_variance(gradient, self.segment)


def weigh_stiffness(
    observed: Observed, priors: Priors, theta: FloatArray, normal: Normal
) -> tuple[FloatArray, StiffnessDoubt]:
    """Find the most probable ln stiffness (n_segments,), drawn towards what the whole image prefers, and its doubt.

    The evidence of each stiffness on the grid `LOG10_STIFFNESS` is that of one linearisation at `theta`.
    """
    log_evidence, move = _evidence(observed, priors, theta, normal)
    whole = _peak(log_evidence.sum(axis=0, keepdims=True))[0]
    drawn = log_evidence - 0.5 * ((LOG10_STIFFNESS - whole) / SPREAD_OF_STIFFNESS) ** 2
    probability = np.exp(drawn - drawn.max(axis=1, keepdims=True))
    probability /= probability.sum(axis=1, keepdims=True)
    return _peak(drawn) * np.log(10.0), StiffnessDoubt(probability, move)


def _evidence(observed: Observed, priors: Priors, theta: FloatArray, normal: Normal) -> tuple[FloatArray, FloatArray]:
    """Log evidence (n_segments, n_stiffnesses), and the steps of ln r (n_points, n_stiffnesses) to each mode."""
    counts = np.diff(observed.offsets)
    zero = with_stiffness(priors, np.full(observed.n_segments, -np.inf))
    pull, cost = prior_pull(zero, theta, observed.segment)
    bent = times(priors.bend, theta[:, LN_R])
    right, diagonals = normal.gradient + pull, zero.full(observed.segment)
    band = banded(normal.matrix)
    columns, moves = [], []
    for log10 in LOG10_STIFFNESS:
        stiffness = 10.0**log10
        stiff, drawn = diagonals.copy(), right.copy()
        stiff[:, :, LN_R] += stiffness * priors.bend
        drawn[:, LN_R] -= stiffness * bent
        factored = factor(band.copy(), stiff, priors.hold)
        step = solve(factored, drawn)
        gain = 0.5 * np.sum(drawn * step, axis=1)
        moves.append(step[:, LN_R])
        width = np.log(factored[0]).reshape(theta.shape).sum(axis=1)
        held = cost + 0.5 * stiffness * theta[:, LN_R] * bent
        columns.append(
            observed.by_segment(gain - held - width) + 0.5 * np.maximum(counts - 2, 0) * log10 * np.log(10.0)
        )
    return np.stack(columns, axis=1), np.stack(moves, axis=1)


def _peak(score: FloatArray) -> FloatArray:
    """Place of each row's maximum, by the parabola through it and its neighbours."""
    k = np.argmax(score, axis=1)
    inner = np.clip(k, 1, score.shape[1] - 2)
    row = np.arange(len(score))
    low, mid, high = (score[row, inner + j] for j in (-1, 0, 1))
    bend = low - 2 * mid + high
    shift = np.where(bend < 0, 0.5 * (low - high) / np.where(bend < 0, bend, -1.0), 0.0)
    step = LOG10_STIFFNESS[1] - LOG10_STIFFNESS[0]
    peak = LOG10_STIFFNESS[inner] + step * np.clip(shift, -1.0, 1.0)
    return np.where(k == inner, peak, LOG10_STIFFNESS[k])


def point_variance(observed: Observed, priors: Priors, normal: Normal) -> FloatArray:
    """Variance (n_points,) of ln r: the diagonal of the inverse of a block-tridiagonal matrix, two points a block.

    Forward: S_k = A_k - B_k' S_(k-1)^-1 B_k. Backward: C_k = S_k^-1 + G C_(k+1) G' with G = S_k^-1 B_(k+1).
    All segments go side by side, longest first.
    """
    n_unknowns = priors.hold.shape[1]
    counts = np.diff(observed.offsets)
    order = np.argsort(-counts, kind="stable")
    blocks = (counts[order] + 1) // 2
    start = observed.offsets[:-1][order]
    last = observed.n_points - 1
    diagonals = priors.full(observed.segment)
    inverses: list[FloatArray] = []
    gains: list[FloatArray] = []
    for k in range(int(blocks.max(initial=0))):
        alive = int(np.searchsorted(-blocks, -k, side="left"))
        first = start[:alive] + 2 * k
        whole = 2 * k + 1 < counts[order][:alive]
        block = _block(normal, diagonals, priors.hold, first, whole)
        if k:
            link = _link(diagonals, first - 2, np.minimum(first - 1, last), whole, n_unknowns)
            gain = inverses[-1][:alive] @ link
            block = block - link.transpose(0, 2, 1) @ gain
            gains.append(gain)
        inverses.append(np.linalg.inv(block))
    variance = np.zeros(observed.n_points)
    inner = np.zeros((0, 2 * n_unknowns, 2 * n_unknowns))
    for k in reversed(range(len(inverses))):
        here = inverses[k]
        if len(inner):
            gain = gains[k][: len(inner)]
            here = here.copy()
            here[: len(inner)] += gain @ inner @ gain.transpose(0, 2, 1)
        first = start[: len(here)] + 2 * k
        whole = 2 * k + 1 < counts[order][: len(here)]
        variance[first] = here[:, LN_R, LN_R]
        variance[first[whole] + 1] = here[whole, n_unknowns + LN_R, n_unknowns + LN_R]
        inner = here
    return np.maximum(variance, 0.0)


def _block(normal: Normal, diagonals: FloatArray, hold: FloatArray, first: IntArray, whole: FloatArray) -> FloatArray:
    """Blocks (n, 2 B, 2 B) of points `first` and the next; where a segment has no next point, unity stands there."""
    b = hold.shape[1]
    second = np.where(whole, first + 1, first)
    eye = np.arange(b)
    out = np.zeros((len(first), 2 * b, 2 * b))
    out[:, :b, :b] = normal.matrix[first]
    out[:, eye, eye] += diagonals[0, first] + hold[first]
    out[:, b:, b:] = np.where(whole[:, None, None], normal.matrix[second], 0.0)
    out[:, b + eye, b + eye] += np.where(whole[:, None], diagonals[0, second] + hold[second], 1.0)
    tie = np.where(whole[:, None], diagonals[1, first], 0.0)
    out[:, eye, b + eye] = tie
    out[:, b + eye, eye] = tie
    return out


def _link(diagonals: FloatArray, one: IntArray, two: IntArray, whole: FloatArray, b: int) -> FloatArray:
    """Coupling (n, 2 B, 2 B) of a block (points `one`, `two`) to the next."""
    eye = np.arange(b)
    out = np.zeros((len(one), 2 * b, 2 * b))
    out[:, eye, eye] = diagonals[2, one]
    out[:, b + eye, eye] = diagonals[1, two]
    out[:, b + eye, b + eye] = np.where(whole[:, None], diagonals[2, two], 0.0)
    return out
