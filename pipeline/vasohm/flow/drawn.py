"""Segments whose radii, lengths, scale and blood are drawn at random from what is known of them."""

from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flow.poiseuille import LEAST_LENGTH_PX, local_exponent
from vasohm.flow.rheology import HIGHEST_HEMATOCRIT, Blood
from vasohm.network.along import arc_shares
from vasohm.network.groups import sum_by
from vasohm.network.paths import owner, position
from vasohm.network.radius import MeasuredGraph

PIECES = 4  # that a segment is cut into: the radius within one errs by one factor
LARGEST_LN_SHIFT = 7.0  # of a drawn radius: a thousandfold either way
MOST_VALUES = 2_000_000  # drawn at a time: 16 MB an array


@dataclass(frozen=True, slots=True, eq=False)
class Pieces:
    """Chosen segments in `PIECES` pieces each, and how they err; n is the number of chosen segments.

    A piece's ln r errs by the mean of its points' errors, weighted by what they do to the segment's resistance, so that
    to first order a segment errs as its points together do.
    """

    blood: Blood
    segment: IntArray  # (n,) among all
    radius_um: FloatArray  # (n, PIECES) of the uniform tube of equal resistance at one viscosity
    ln_weight: FloatArray  # (n, PIECES) of μ r⁻⁴ at that radius in the segment's mean of it; -inf for no piece
    spread: FloatArray  # (n, PIECES, PIECES) times standard normal numbers: random errors of ln r
    column: FloatArray  # (n, PIECES) share of the radius that goes with the pixel size
    shared: FloatArray  # (n, PIECES, n_causes) change of ln r for one standard uncertainty
    plasma: FloatArray  # (n, PIECES) change of ln μ for one standard uncertainty of plasma viscosity
    hematocrit: FloatArray  # (n,)
    length_rel_se: FloatArray  # (n,)
    pixel_size_rel_se: float

    def __post_init__(self) -> None:
        freeze(self)

    def only(self, place: IntArray) -> "Pieces":
        """Those of the segments at these places."""
        held = {field.name: getattr(self, field.name) for field in fields(self)}
        fewer: dict[str, Any] = {name: value[place] for name, value in held.items() if isinstance(value, np.ndarray)}
        return replace(self, **fewer)


def cut_into_pieces(measured: MeasuredGraph, blood: Blood, hematocrit: FloatArray, chosen: IntArray) -> Pieces:
    """Condense what is known of the points of the chosen segments.

    Parameters
    ----------
    measured : MeasuredGraph
        Radii along the segments with their covariance.
    blood : Blood
        A viscosity law with its constants and their doubt.
    hematocrit : (n_segments,) array
        Discharge hematocrit of each segment.
    chosen : (n,) int array
        Segments, all with a resistance.

    Returns
    -------
    Pieces
    """
    offsets, n_all = measured.graph.offsets, measured.graph.n_segments
    segment = owner(offsets)
    is_chosen = np.zeros(n_all, dtype=bool)
    is_chosen[chosen] = True
    inside = is_chosen[segment]
    piece = segment * PIECES + position(offsets) * PIECES // np.maximum(np.diff(offsets), 1)[segment]

    def by_piece(values: FloatArray) -> FloatArray:
        return sum_by(piece, np.where(inside, values, 0.0), n_all * PIECES).reshape(n_all, PIECES)[chosen]

    share, cells = arc_shares(measured), np.where(inside, hematocrit[segment], 0.0)  # others may have none
    radius = np.where(inside, measured.radius_um, 1.0)
    viscosity = blood.viscosity(radius, cells)
    part = share * viscosity * radius**-4
    pull = np.where(inside, part * local_exponent(blood, radius, cells, viscosity), 0.0)
    weight, whole = by_piece(share), by_piece(pull)
    mean_power = np.divide(by_piece(share * radius**-4), weight, out=np.ones(weight.shape), where=weight > 0)
    radius_um = mean_power**-0.25
    own_hematocrit = hematocrit[chosen]
    at_radius = blood.viscosity(radius_um, own_hematocrit[:, None]) * mean_power
    with np.errstate(divide="ignore"):
        ln_weight = np.log(by_piece(part)) - np.log(at_radius)

    def mean_by_piece(values: FloatArray) -> FloatArray:
        return np.divide(by_piece(pull * values), whole, out=np.zeros(whole.shape), where=whole != 0)

    length_um = np.maximum(measured.length_um[chosen], LEAST_LENGTH_PX * measured.pixel_size_um)
    shared = [mean_by_piece(cause) for cause in measured.shared.T]
    return Pieces(
        blood=blood,
        segment=chosen,
        radius_um=radius_um,
        ln_weight=ln_weight,
        spread=_spread(measured, piece, pull, whole, chosen),
        column=mean_by_piece(measured.column),
        shared=np.stack([*shared], axis=2) if shared else np.zeros((*whole.shape, 0)),
        plasma=mean_by_piece(blood.ln_change_with_plasma(radius, cells, viscosity)),
        hematocrit=own_hematocrit,
        length_rel_se=np.nan_to_num(measured.length_random_se_um[chosen] / length_um),
        pixel_size_rel_se=float(np.nan_to_num(measured.pixel_size_rel_se)),
    )


def _spread(
    measured: MeasuredGraph, piece: IntArray, pull: FloatArray, whole: FloatArray, chosen: IntArray
) -> FloatArray:
    """Symmetric roots (n, PIECES, PIECES) of the covariance of the pieces' errors; what is no covariance counts as 0.

    A covariance is the variance of a sum less those of its parts, so that the variance of a sum is all that need be
    known.
    """
    sums = [np.where(piece % PIECES == k, pull, 0.0) for k in range(PIECES)]
    variance = [measured.covariance.segment_variance(one)[chosen] for one in sums]
    covariance = np.zeros((chosen.size, PIECES, PIECES))
    for i in range(PIECES):
        covariance[:, i, i] = variance[i]
        for j in range(i):
            both = measured.covariance.segment_variance(sums[i] + sums[j])[chosen]
            covariance[:, i, j] = covariance[:, j, i] = 0.5 * (both - variance[i] - variance[j])
    scale = np.divide(1.0, whole, out=np.zeros(whole.shape), where=whole != 0)
    values, vectors = np.linalg.eigh(np.nan_to_num(covariance * scale[:, :, None] * scale[:, None, :]))
    root = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :]
    return np.asarray(root @ vectors.transpose(0, 2, 1))  # the symmetric root: near covariances have near roots


def draw_ln_resistance(pieces: Pieces, rng: np.random.Generator, draws: int) -> FloatArray:
    """Draw how far ln R of each segment lies from ln R at the radii as measured.

    Parameters
    ----------
    pieces : Pieces
        The segments.
    rng : Generator
        Where the random numbers come from.
    draws : int
        How many.

    Returns
    -------
    (n, draws) array; the shared causes are the same for all segments of a draw. Infinite where the law lets no blood
    pass.
    """
    n = pieces.segment.size
    causes = rng.standard_normal((pieces.shared.shape[2], draws))
    pixel, cells, plasma = rng.standard_normal((3, draws))
    each = max(1, MOST_VALUES // max(n * PIECES, 1))
    ln_mean = _ln_sum(pieces.ln_weight + np.log(_over_radius4(pieces, pieces.radius_um, pieces.hematocrit[:, None])))
    parts = []
    for first in range(0, draws, each):
        now = slice(first, min(first + each, draws))
        own = rng.standard_normal((n, PIECES, now.stop - first))
        stretched = pieces.pixel_size_rel_se * pixel[now]
        shift = pieces.spread @ own + pieces.shared @ causes[:, now]
        shift += np.log1p(pieces.column[:, :, None] * np.expm1(stretched))
        radius = pieces.radius_um[:, :, None] * np.exp(np.clip(shift, -LARGEST_LN_SHIFT, LARGEST_LN_SHIFT))
        hematocrit = np.clip(
            pieces.hematocrit[:, None, None] + pieces.blood.hematocrit_se * cells[now], 0.0, HIGHEST_HEMATOCRIT
        )
        ln_part = pieces.ln_weight[:, :, None] + np.log(_over_radius4(pieces, radius, hematocrit))
        ln_part += pieces.plasma[:, :, None] * plasma[now]
        length = pieces.length_rel_se[:, None] * rng.standard_normal((n, now.stop - first))
        parts.append(_ln_sum(ln_part) - ln_mean[:, None] + length + stretched)
    return np.concatenate(parts, axis=1)


def _over_radius4(pieces: Pieces, radius_um: FloatArray, hematocrit: FloatArray) -> FloatArray:
    return pieces.blood.viscosity(radius_um, hematocrit) * radius_um**-4


def _ln_sum(ln_part: FloatArray) -> FloatArray:
    """Logarithm of the sum over pieces."""
    return np.asarray(np.logaddexp.reduce(ln_part, axis=1))
