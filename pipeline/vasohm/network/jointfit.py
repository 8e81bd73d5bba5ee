"""Blurred tube profiles fitted jointly along each segment: banded Gauss-Newton steps for all segments at once.

Unknowns at every centreline point: ln radius, ln contrast, offset of the axis, background and its slope, and where
asked for the height of the light reflex on the axis. Priors tie neighbouring points; only ln r has a free stiffness.
The normal matrix of all points has 2 B diagonals on each side, B the number of unknowns.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import cho_solve_banded, cholesky_banded

from vasohm.arrays import AnyArray, BoolArray, Float32Array, FloatArray, IntArray
from vasohm.network.profiles import ProfileTable, height_slope, ln_height, tube_light, tube_strips
from vasohm.network.strips import CHUNK, Overlaps, Strips

LN_R, LN_C, OFFSET, LEVEL, SLOPE, REFLEX = range(6)
LIGHT_CHUNK = 4000  # samples handled at once
HUBER = 3.0  # residuals beyond this many standard deviations count linearly
REFLEX_WIDTH = 0.25  # sd of the light reflex in radii
CONVERGED = 2e-3  # of ln r; the next Gauss-Newton step would be far smaller
SETTLED = 0.003  # gain in log likelihood of a segment by its last step: 0.08 standard deviations of any unknown at most


@dataclass(frozen=True, slots=True, eq=False)
class Observed:
    """Strips of some points, their weights, and what other vessels lay on them.

    `weights` hold 1 / stated variance x usability x length of centreline / noise factor. `row_scale` (n_points,) is
    weight times true variance of a sample: 0 where a strip is not usable, less than 1 where samples share noise.
    """

    offsets: IntArray  # (n_segments + 1,)
    segment: IntArray  # (n_points,)
    strips: tuple[Strips, ...]
    overlaps: tuple[Overlaps, ...]
    weights: tuple[Float32Array, ...]
    row_scale: FloatArray

    @property
    def n_points(self) -> int:
        return len(self.segment)

    @property
    def n_segments(self) -> int:
        return len(self.offsets) - 1

    def by_segment(self, values: FloatArray) -> FloatArray:
        """Sum (n_points,) values over each segment."""
        return np.bincount(self.segment, values, self.n_segments)


@dataclass(frozen=True, slots=True, eq=False)
class Priors:
    """Gaussian priors as diagonals of their precision matrix: within points, to the next, to the one after next.

    Differences are held near 0 by `diagonals` (3, n_points, B), single unknowns near `mean` by `hold`, both
    (n_points, B). `bend` holds the same three diagonals of the second difference of ln r at unit stiffness.
    """

    diagonals: FloatArray
    bend: FloatArray  # (3, n_points)
    ln_stiffness: FloatArray  # (n_segments,) of the bend, per radius cubed
    hold: FloatArray
    mean: FloatArray

    def full(self, segment: IntArray) -> FloatArray:
        """Diagonals (3, n_points, B) without the part that holds single unknowns."""
        out = self.diagonals.copy()
        out[:, :, LN_R] += np.exp(self.ln_stiffness)[segment] * self.bend
        return out


@dataclass(frozen=True, slots=True, eq=False)
class Normal:
    """Second-order picture of the data's log likelihood at the unknowns."""

    matrix: FloatArray  # (n_points, B, B)
    gradient: FloatArray  # (n_points, B)
    cost: FloatArray  # (n_points,)

    def copy(self) -> "Normal":
        return Normal(self.matrix.copy(), self.gradient.copy(), self.cost.copy())


# --- model against data ---------------------------------------------------------------------------------------------


def model_strips(table: ProfileTable, half_width: int, theta: FloatArray) -> Float32Array:
    """Model strips (n, 1 + B, samples): the light itself, then its derivatives by the B unknowns."""
    n_unknowns = theta.shape[1]
    x = np.arange(-half_width, half_width + 1, dtype=np.float32)
    tube = tube_strips(table, half_width, theta[:, LN_R], theta[:, LN_C], theta[:, OFFSET])
    out = np.empty((len(theta), 1 + n_unknowns, len(x)), np.float32)
    out[:, 1 + LN_R] = tube[:, 1]
    out[:, 1 + LN_C] = tube[:, 0]
    out[:, 1 + OFFSET] = tube[:, 2]
    out[:, 1 + LEVEL] = 1.0
    out[:, 1 + SLOPE] = x
    base = theta[:, LEVEL : SLOPE + 1].astype(np.float32)
    out[:, 0] = tube[:, 0] + base[:, :1] + base[:, 1:] * x
    if n_unknowns > REFLEX:
        _add_reflex(table, x, theta, out)
    return out


def _add_reflex(table: ProfileTable, x: Float32Array, theta: FloatArray, out: Float32Array) -> None:
    """Take a Gaussian streak on the axis, `theta[:, REFLEX]` of the tube's height before blur, from model strips."""
    optics = table.optics
    sharp = REFLEX_WIDTH * np.exp(theta[:, LN_R])
    width = np.hypot(sharp, optics.s_px)
    height = np.exp(theta[:, LN_C] + ln_height(optics, theta[:, LN_R])) * sharp / width
    u = ((x - theta[:, OFFSET, None]) / width[:, None]).astype(np.float32)
    streak = -height[:, None].astype(np.float32) * np.exp(-0.5 * u**2)
    taken = theta[:, REFLEX, None].astype(np.float32) * streak
    widening = (sharp / width) ** 2  # d ln width / d ln r
    growth = (height_slope(optics, theta[:, LN_R]) + 1.0 - widening)[:, None].astype(np.float32)
    out[:, 0] += taken
    out[:, 1 + LN_R] += taken * (growth + widening[:, None].astype(np.float32) * u**2)
    out[:, 1 + LN_C] += taken
    out[:, 1 + OFFSET] += taken * u / width[:, None].astype(np.float32)
    out[:, 1 + REFLEX] = streak


def without_neighbours(
    table: ProfileTable, strips: Strips, overlaps: Overlaps, theta: FloatArray, active: BoolArray | None = None
) -> Float32Array:
    """Return the strips less the light that other vessels throw on their samples; those not `active` may keep it."""
    if active is not None:
        overlaps = overlaps.select(active[strips.points[overlaps.sample // strips.y.shape[1]]])
    if len(overlaps.sample) == 0:
        return strips.y
    who = theta[overlaps.point]
    light = np.empty(len(who), np.float32)
    for low in range(0, len(who), LIGHT_CHUNK):
        part = slice(low, low + LIGHT_CHUNK)
        here = who[part]
        light[part] = tube_light(table, here[:, LN_R], here[:, LN_C], overlaps.distance_px[part] - here[:, OFFSET])
    y = strips.y.copy()
    np.subtract.at(y.reshape(-1), overlaps.sample, light)
    return y


def normal_equations(
    observed: Observed, table: ProfileTable, theta: FloatArray, active: BoolArray | None = None
) -> Normal:
    """Compare model and strips; points outside `active` (n_points,) are left zero."""
    n, n_unknowns = theta.shape
    normal = Normal(np.zeros((n, n_unknowns, n_unknowns)), np.zeros((n, n_unknowns)), np.zeros(n))
    wanted = observed.row_scale > 0 if active is None else active & (observed.row_scale > 0)
    for strips, overlaps, weights in zip(observed.strips, observed.overlaps, observed.weights, strict=True):
        y = without_neighbours(table, strips, overlaps, theta, active)
        rows = np.flatnonzero(wanted[strips.points])
        for low in range(0, len(rows), CHUNK):
            part = rows[low : low + CHUNK]
            points = strips.points[part]
            model = model_strips(table, strips.half_width, theta[points])
            np.subtract(y[part], model[:, 0], out=model[:, 0])
            w, cost = robust_weights(weights[part], model[:, 0], observed.row_scale[points])
            product = np.matmul(model[:, 1:] * w[:, None], model.transpose(0, 2, 1))
            normal.gradient[points] = product[:, :, 0]
            normal.matrix[points] = product[:, :, 1:]
            normal.cost[points] = cost
    return normal


def robust_weights(w: Float32Array, residual: Float32Array, row_scale: FloatArray) -> tuple[Float32Array, FloatArray]:
    """Weights lowered for outliers, and the cost of each strip."""
    scale = np.maximum(row_scale, 1e-12).astype(np.float32)[:, None]
    squared = w * residual**2
    beyond = squared > HUBER**2 * scale
    cost = np.asarray(np.sum(squared, axis=1, dtype=np.float64)) / 2
    if beyond.any():
        row, _ = np.nonzero(beyond)
        excess = squared[beyond]
        unit = np.broadcast_to(scale, w.shape)[beyond]
        z = np.sqrt(excess / unit)
        w = w.copy()
        w[beyond] *= HUBER / z
        cost += np.bincount(row, unit * (HUBER * z - HUBER**2 / 2) - excess / 2, len(w))
    return w, cost


# --- priors ---------------------------------------------------------------------------------------------------------


def difference_diagonals(step: FloatArray, bend: FloatArray, segment: IntArray) -> FloatArray:
    """Diagonals (3, n, ...) of first differences weighing `step` (n, ...) and second differences weighing `bend`.

    `step[i]` is for points i and i + 1, `bend[i]` for i, i + 1 and i + 2; none reaches over a segment's end.
    """
    out = np.zeros((3, *step.shape))
    extra = (1,) * (step.ndim - 1)
    one = step[:-1] * (segment[1:] == segment[:-1]).reshape(-1, *extra)
    out[0, :-1] += one
    out[0, 1:] += one
    out[1, :-1] -= one
    two = bend[:-2] * (segment[2:] == segment[:-2]).reshape(-1, *extra)
    out[0, :-2] += two
    out[0, 1:-1] += 4 * two
    out[0, 2:] += two
    out[1, :-2] -= 2 * two
    out[1, 1:-1] -= 2 * two
    out[2, :-2] += two
    return out


def times(diagonals: FloatArray, theta: FloatArray) -> FloatArray:
    """Multiply the symmetric matrix given by its diagonals (3, n, ...) with `theta` (n, ...)."""
    out = diagonals[0] * theta
    for k in (1, 2):
        out[:-k] += diagonals[k, :-k] * theta[k:]
        out[k:] += diagonals[k, :-k] * theta[:-k]
    return np.asarray(out)


def prior_pull(priors: Priors, theta: FloatArray, segment: IntArray) -> tuple[FloatArray, FloatArray]:
    """Gradient (n, B) of the log prior and its cost (n,) by point."""
    stiff = times(priors.full(segment), theta)
    away = theta - priors.mean
    cost = 0.5 * np.sum(theta * stiff + priors.hold * away**2, axis=1)
    return -stiff - priors.hold * away, cost


# --- solving --------------------------------------------------------------------------------------------------------


def banded(matrix: FloatArray) -> FloatArray:
    """Lower form (n, B, 2 B + 1) of (n, B, B) blocks on the diagonal: each unknown's own, and those that come after."""
    n, n_unknowns = matrix.shape[:2]
    band = np.zeros((n, n_unknowns, 2 * n_unknowns + 1))
    for low in range(0, n, CHUNK):
        part = slice(low, low + CHUNK)
        for one in range(n_unknowns):
            band[part, one, : n_unknowns - one] = matrix[part, one:, one]
    return band


def factor(band: FloatArray, diagonals: FloatArray, hold: FloatArray) -> FloatArray:
    """Cholesky factor (2 B + 1, n B), lower form, of `banded` data, which is overwritten, plus priors."""
    n_unknowns = hold.shape[1]
    band[:, :, 0] += diagonals[0] + hold
    band[:, :, n_unknowns] = diagonals[1]
    band[:, :, 2 * n_unknowns] = diagonals[2]
    flat = band.reshape(-1, band.shape[2]).T
    done: FloatArray = cholesky_banded(flat, overwrite_ab=True, lower=True, check_finite=False)
    return done


def solve(factored: FloatArray, right: FloatArray) -> FloatArray:
    """Solve for right sides (n, B) or (n, B, k)."""
    flat = right.reshape(factored.shape[1], *right.shape[2:])
    answer: AnyArray = cho_solve_banded((factored, True), flat, check_finite=False)
    return answer.reshape(right.shape)


def fit_joint(
    observed: Observed,
    priors: Priors,
    table: ProfileTable,
    start: FloatArray,
    *,
    max_steps: int,
    begun: Normal | None = None,
) -> tuple[FloatArray, Normal]:
    """Find the most probable unknowns (n_points, B) of every segment, and the normal equations there.

    A segment whose step made things worse goes back and is damped ten times more; one whose step is small is done.
    `begun` are the normal equations at `start`, where they are known already.
    """
    segment = observed.segment
    theta = start.copy()
    n_unknowns = theta.shape[1]
    limit = np.array([0.7, 0.7, 1.0, np.inf, np.inf, 0.5])[:n_unknowns]
    diagonals = priors.full(segment)
    best = normal_equations(observed, table, theta) if begun is None else begun.copy()
    pull, prior_cost = prior_pull(priors, theta, segment)
    cost = observed.by_segment(best.cost + prior_cost)
    damping = np.zeros(observed.n_segments)
    running = np.ones(observed.n_segments, np.bool_)
    coupled = any(len(o.sample) for o in observed.overlaps)
    for _ in range(max_steps):
        points = np.flatnonzero(running[segment])
        if len(points) == 0:
            break
        own = segment[points]
        band = banded(best.matrix[points])
        extra = damping[own, None] * band[:, :, 0]
        factored = factor(band, diagonals[:, points], priors.hold[points] + extra)
        slope = best.gradient[points] + pull[points]
        step = solve(factored, slope)
        step /= _overlong(step / limit, own, observed.n_segments)[own, None]
        gain = 0.5 * np.bincount(own, np.sum(step * slope, axis=1), observed.n_segments)
        trial = theta.copy()
        trial[points] += step
        found = normal_equations(observed, table, trial, running[segment])
        new_pull, prior_cost = prior_pull(priors, trial, segment)
        new_cost = observed.by_segment(found.cost + prior_cost)
        # light of neighbours changes from step to step: then costs are not comparable to the last digit
        slack = 1e-9 * np.abs(cost) + (0.5 if coupled else 1e-6)
        better = running & (new_cost <= cost + slack)
        take = better[segment]
        theta[take], pull[take] = trial[take], new_pull[take]
        best.matrix[take], best.gradient[take] = found.matrix[take], found.gradient[take]
        best.cost[take] = found.cost[take]
        cost = np.where(better, new_cost, cost)
        largest = np.zeros(observed.n_segments)
        np.maximum.at(largest, own, np.abs(step[:, LN_R]))
        damping = np.where(running & ~better, np.maximum(damping * 10, 1e-2), damping / 10)
        small = (largest < CONVERGED) | ((gain < SETTLED) & (damping == 0))
        running &= ~(better & small) & (damping < 1e6)
    return theta, best


def _overlong(step: FloatArray, segment: IntArray, n_segments: int) -> FloatArray:
    """How many times each segment's longest step (in units of the limit) is too long; 1 where it is not.

    A segment's step is shortened as a whole: clipped point by point it would tear the smoothness it has to keep.
    """
    longest = np.ones(n_segments)
    np.maximum.at(longest, segment, np.abs(step).max(axis=1))
    return longest


def with_stiffness(priors: Priors, ln_stiffness: FloatArray) -> Priors:
    """Return the same priors with another stiffness of ln r (n_segments,)."""
    return replace(priors, ln_stiffness=ln_stiffness)


def total_cost(observed: Observed, priors: Priors, theta: FloatArray, normal: Normal) -> float:
    """Minus the log posterior, up to a constant."""
    return float(np.sum(normal.cost + prior_pull(priors, theta, observed.segment)[1]))
