"""How the fit answers to what all segments share: blur, absorption, the prior of contrast."""

from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, Float32Array, FloatArray, freeze
from vasohm.network.jointfit import (
    LN_C,
    LN_R,
    OFFSET,
    Normal,
    Observed,
    Priors,
    banded,
    factor,
    model_strips,
    prior_pull,
    robust_weights,
    solve,
    without_neighbours,
)
from vasohm.network.profiles import Optics, ProfileTable, profile_table
from vasohm.network.strips import CHUNK

LN_STEP = 0.01  # of absorption, for derivatives by difference
ODD_SEGMENT = (5.0, 0.35)  # out of focus: ln blur off by so many standard errors, and by so much
S_RANGE_PX = (0.4, 12.0)
TAU_RANGE = (0.05, 8.0)  # absorption across the widest vessel: beyond it is a cylinder, or a slab


@dataclass(frozen=True, slots=True, eq=False)
class Response:
    """Derivatives of the data's log likelihood by k shared parameters, point by point."""

    gradient: FloatArray  # (n_points, k)
    curvature: FloatArray  # (n_points, k, k)
    mixed: FloatArray  # (n_points, B, k) with the unknowns of the point

    def __post_init__(self) -> None:
        freeze(self)


def table_like(table: ProfileTable, optics: Optics) -> ProfileTable:
    """Tabulate other optics over the same range."""
    return profile_table(optics, table.radius_max_px, table.half_px)


def shifted(optics: Optics, parameter: str, ln_step: float) -> Optics:
    """Return optics with one of ``"blur"`` and ``"absorption"`` changed by a factor exp(`ln_step`)."""
    if parameter == "blur":
        return replace(optics, s_px=optics.s_px * float(np.exp(ln_step)))
    return replace(optics, mu_per_px=optics.mu_per_px * float(np.exp(ln_step)))


def parameters_of(optics: Optics) -> tuple[str, ...]:
    """Names of what describes the optics beyond their family."""
    return ("blur", "absorption") if optics.family == "absorber" else ("blur",)


def optics_response(observed: Observed, table: ProfileTable, theta: FloatArray, names: tuple[str, ...]) -> Response:
    """Respond to ln of blur and of absorption.

    Lengths have no scale of their own: a tube, its offset and its absorption length all stretched by the blur's
    factor give the same strip, stretched. That leaves the answer to absorption alone to be found by difference.
    """
    n, n_unknowns = theta.shape
    k = len(names)
    gradient, curvature = np.zeros((n, k)), np.zeros((n, k, k))
    mixed = np.zeros((n, n_unknowns, k))
    denser = None if k == 1 else table_like(table, shifted(table.optics, "absorption", LN_STEP))
    for strips, overlaps, weights in zip(observed.strips, observed.overlaps, observed.weights, strict=True):
        y = without_neighbours(table, strips, overlaps, theta)
        rows = np.flatnonzero(observed.row_scale[strips.points] > 0)
        for low in range(0, len(rows), CHUNK):
            part = rows[low : low + CHUNK]
            points = strips.points[part]
            model = model_strips(table, strips.half_width, theta[points])
            change = _answer_of_strips(table, denser, strips.half_width, theta[points], model)
            residual = y[part] - model[:, 0]
            w, _ = robust_weights(weights[part], residual, observed.row_scale[points])
            weighted = change * w[:, :, None]
            gradient[points] = np.matmul(residual[:, None], weighted)[:, 0]
            curvature[points] = np.matmul(change.transpose(0, 2, 1), weighted)
            mixed[points] = np.matmul(model[:, 1:], weighted)
    return Response(gradient, curvature, mixed)


def _answer_of_strips(
    table: ProfileTable, denser: ProfileTable | None, half_width: int, theta: FloatArray, model: Float32Array
) -> Float32Array:
    """Change (n, samples, k) of model strips for a unit change of ln blur and, if `denser` is given, ln absorption."""
    x = np.arange(-half_width, half_width + 1) - theta[:, OFFSET, None]
    blur = x.astype(np.float32) * model[:, 1 + OFFSET] - model[:, 1 + LN_R]
    if table.optics.family == "cylinder":  # its contrast is per px of chord
        blur += model[:, 1 + LN_C]
    if denser is None:
        return blur[:, :, None]
    absorption = (model_strips(denser, half_width, theta)[:, 0] - model[:, 0]) / np.float32(LN_STEP)
    return np.stack([blur + absorption, absorption], axis=2)


@dataclass(frozen=True, slots=True, eq=False)
class Marginal:
    """Shared parameters with all points' unknowns taken out, summed by segment, and the unknowns' answer to them."""

    gradient: FloatArray  # (n_segments, k)
    information: FloatArray  # (n_segments, k, k)
    answer: FloatArray  # (n_points, B, k): change of the unknowns for a unit change of each parameter
    factored: FloatArray  # banded Cholesky factor of the normal equations of the unknowns

    def __post_init__(self) -> None:
        freeze(self)


def marginalise(observed: Observed, priors: Priors, theta: FloatArray, normal: Normal, response: Response) -> Marginal:
    """Take the unknowns of the points out (Schur complement of the joint normal equations)."""
    factored = factor(banded(normal.matrix), priors.full(observed.segment), priors.hold)
    answer = solve(factored, response.mixed)
    pull = normal.gradient + prior_pull(priors, theta, observed.segment)[0]
    k = response.gradient.shape[1]
    left = response.gradient - np.einsum("nbk,nb->nk", answer, pull)
    width = response.curvature - np.einsum("nbk,nbl->nkl", response.mixed, answer)
    gradient = np.stack([observed.by_segment(left[:, i]) for i in range(k)], axis=1)
    information = np.stack(
        [np.stack([observed.by_segment(width[:, i, j]) for j in range(k)], axis=1) for i in range(k)], axis=1
    )
    return Marginal(gradient, information, -answer, factored)


def in_focus(marginal: Marginal) -> BoolArray:
    """Segments whose own blur does not contradict the others'."""
    shift, se = blur_of_segments(marginal)
    middle = float(np.median(shift)) if len(shift) else 0.0
    odd = (np.abs(shift - middle) > ODD_SEGMENT[0] * se) & (np.abs(shift - middle) > ODD_SEGMENT[1])
    return ~odd if odd.mean() < 0.5 else np.ones(len(odd), np.bool_)


def blur_of_segments(marginal: Marginal) -> tuple[FloatArray, FloatArray]:
    """Return how far each segment's own ln blur lies above the image's, and its standard error."""
    information = np.maximum(marginal.information[:, 0, 0], 1e-9)
    return marginal.gradient[:, 0] / information, 1.0 / np.sqrt(information)
