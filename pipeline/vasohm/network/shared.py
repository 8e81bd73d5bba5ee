"""How the fit answers to what all segments share: blur, absorption, the prior of contrast."""

from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import FloatArray, freeze
from vasohm.network.jointfit import (
    Normal,
    Observed,
    Priors,
    factor,
    model_strips,
    prior_pull,
    robust_weights,
    solve,
    without_neighbours,
)
from vasohm.network.profiles import Optics, ProfileTable, profile_table
from vasohm.network.strips import CHUNK

LN_STEP = 0.02  # of blur and absorption, for derivatives by difference
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
    """Respond to ln of blur and of absorption, by differences of the model."""
    others = [table_like(table, shifted(table.optics, name, LN_STEP)) for name in names]
    n, n_unknowns = theta.shape
    k = len(names)
    gradient, curvature = np.zeros((n, k)), np.zeros((n, k, k))
    mixed = np.zeros((n, n_unknowns, k))
    for strips, overlaps, weights in zip(observed.strips, observed.overlaps, observed.weights, strict=True):
        y = without_neighbours(table, strips, overlaps, theta)
        for low in range(0, len(strips.points), CHUNK):
            points = strips.points[low : low + CHUNK]
            model = model_strips(table, strips.half_width, theta[points])
            change = np.stack(
                [model_strips(other, strips.half_width, theta[points])[:, 0] - model[:, 0] for other in others], axis=2
            ) / np.float32(LN_STEP)
            residual = y[low : low + CHUNK] - model[:, 0]
            w, _ = robust_weights(weights[low : low + CHUNK], residual, observed.row_scale[points])
            weighted = change * w[:, :, None]
            gradient[points] = np.matmul(residual[:, None], weighted)[:, 0]
            curvature[points] = np.matmul(change.transpose(0, 2, 1), weighted)
            mixed[points] = np.matmul(model[:, 1:], weighted)
    return Response(gradient, curvature, mixed)


@dataclass(frozen=True, slots=True, eq=False)
class Marginal:
    """Shared parameters with all points' unknowns taken out, summed by segment, and the unknowns' answer to them."""

    gradient: FloatArray  # (n_segments, k)
    information: FloatArray  # (n_segments, k, k)
    answer: FloatArray  # (n_points, B, k): change of the unknowns for a unit change of each parameter

    def __post_init__(self) -> None:
        freeze(self)


def marginalise(observed: Observed, priors: Priors, theta: FloatArray, normal: Normal, response: Response) -> Marginal:
    """Take the unknowns of the points out (Schur complement of the joint normal equations)."""
    factored = factor(normal.matrix, priors.full(observed.segment), priors.hold)
    answer = solve(factored, response.mixed)
    pull = normal.gradient + prior_pull(priors, theta, observed.segment)[0]
    k = response.gradient.shape[1]
    left = response.gradient - np.einsum("nbk,nb->nk", answer, pull)
    width = response.curvature - np.einsum("nbk,nbl->nkl", response.mixed, answer)
    gradient = np.stack([observed.by_segment(left[:, i]) for i in range(k)], axis=1)
    information = np.stack(
        [np.stack([observed.by_segment(width[:, i, j]) for j in range(k)], axis=1) for i in range(k)], axis=1
    )
    return Marginal(gradient, information, -answer)
