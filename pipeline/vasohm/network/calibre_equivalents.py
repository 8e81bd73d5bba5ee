"""Calibre of the central retinal artery and vein as the vessels around the optic disc tell it."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.flags import Flag
from vasohm.image.disc import OpticDisc
from vasohm.network.along import arc_shares
from vasohm.network.graph import VesselClass
from vasohm.network.groups import mean_by, sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph

KNUDTSON, PARR_HUBBARD = "knudtson", "parr-hubbard"
LEAST_VESSELS = {KNUDTSON: 6, PARR_HUBBARD: 2}
MOST_VESSELS = {KNUDTSON: 6, PARR_HUBBARD: None}
LN_STEP = 1e-5  # of a width, for derivatives by difference
CUT_SHARE = 0.02  # of the zone outside the field of view: more can hide a vessel
RINGS = 64  # with which a place in the picture is looked at

Width = FloatArray
Formula = Callable[[Width, Width], Width]


@dataclass(frozen=True, slots=True)
class Equivalents:
    """Central retinal artery and vein equivalent, as diameters; NaN where too few vessels tell them."""

    artery_um: float
    artery_se_um: float
    vein_um: float
    vein_se_um: float
    ratio: float  # artery over vein
    ratio_se: float
    n_arterioles: int  # that cross the zone and were used
    n_venules: int
    formula: str
    zone_px: tuple[float, float]  # radii around the disc's centre
    flags: Flag


@dataclass(frozen=True, slots=True, eq=False)
class _Crossing:
    """Vessels that cross the zone: one entry a segment."""

    segment: IntArray
    width_um: FloatArray
    ln_random_se: FloatArray
    causes: FloatArray  # (n, k)


def knudtson_artery(wide: Width, narrow: Width) -> Width:
    """Trunk of two arterioles; Knudtson et al. 2003, branching coefficient 1.28."""
    return np.asarray(0.88 * np.hypot(wide, narrow))


def knudtson_vein(wide: Width, narrow: Width) -> Width:
    """Trunk of two venules; Knudtson et al. 2003, branching coefficient 1.11."""
    return np.asarray(0.95 * np.hypot(wide, narrow))


def hubbard_artery(wide: Width, narrow: Width) -> Width:
    """Trunk of two arterioles in micrometres, NaN for a pair too thin to have one; Parr and Spears 1974."""
    square = 0.87 * narrow**2 + 1.01 * wide**2 - 0.22 * wide * narrow - 10.76
    return np.sqrt(np.where(square > 0, square, np.nan))


def hubbard_vein(wide: Width, narrow: Width) -> Width:
    """Trunk of two venules in micrometres; Hubbard et al. 1999."""
    return np.asarray(np.sqrt(0.72 * narrow**2 + 0.91 * wide**2 + 450.05))


FORMULAS: dict[str, tuple[Formula, Formula]] = {
    KNUDTSON: (knudtson_artery, knudtson_vein),
    PARR_HUBBARD: (hubbard_artery, hubbard_vein),
}


def combine(width_um: FloatArray, formula: Formula) -> float:
    """Diameter of the trunk that vessels of these diameters would come from, NaN for none.

    Round after round the widest is paired with the narrowest, the next with the next; an odd one in the middle is
    carried to the next round.
    """
    left = np.sort(np.asarray(width_um, dtype=float))
    if not left.size:
        return np.nan
    while left.size > 1:
        half = left.size // 2
        pairs = formula(left[::-1][:half], left[:half])
        left = np.sort(np.concatenate((pairs, left[half : left.size - half])))
    return float(left[0])


def find_equivalents(
    measured: MeasuredGraph, fov: BoolArray, disc: OpticDisc, how: tuple[str, tuple[float, float]]
) -> Equivalents:
    """Measure the calibre equivalents of an eye.

    Parameters
    ----------
    measured : MeasuredGraph
        Vessels with their class and radius.
    fov : (h, w) bool
        The field of view.
    disc : OpticDisc
        Where the optic disc is.
    how : (str, (float, float))
        ``"knudtson"`` or ``"parr-hubbard"``, and the zone's limits from the disc's margin in disc diameters.

    Returns
    -------
    Equivalents
        NaN where fewer vessels of a class cross the zone than the formula asks for, or the disc lies partly outside the
        field; `flags` say why, and where the field cuts the zone or a vessel of no class may belong to those used.

    Notes
    -----
    A vessel is a segment that meets the circle in the middle of the zone, however often it does; the stub to its node
    inside a parent's lumen counts as its way, so that no vessel is lost that branches on the circle. Its diameter is
    twice its mean lumen radius over all of its way through the zone. Knudtson's formula takes the six widest of each
    class and asks for six; Parr and Hubbard's takes all, so that it grows with their number.

    Random doubt of the radii adds in quadrature, weighted by what each width moves the result. What the vessels share,
    the pixel size too, moves them together, and largely leaves the ratio of artery to vein alone.

    References
    ----------
    Knudtson MD, Lee KE, Hubbard LD, Wong TY, Klein R, Klein BEK (2003) Revised formulas for summarizing retinal vessel
    diameters. Curr Eye Res 27:143-149, doi:10.1076/ceyr.27.3.143.16049; Parr JC, Spears GFS (1974) Am J Ophthalmol
    77:472-477; Hubbard LD et al. (1999) Ophthalmology 106:2269-2280, doi:10.1016/S0161-6420(99)90525-0.
    """
    formula, zone_dd = how
    zone_px = (disc.radius_px * (1.0 + 2.0 * zone_dd[0]), disc.radius_px * (1.0 + 2.0 * zone_dd[1]))
    flags = Flag.NONE
    if _share_outside(fov, disc, (0.0, disc.radius_px)) > 0:
        return Equivalents(np.nan, np.nan, np.nan, np.nan, np.nan, np.nan, 0, 0, formula, zone_px, Flag.DISC_OUTSIDE)
    if _share_outside(fov, disc, zone_px) > CUT_SHARE:
        flags |= Flag.ZONE_CUT
    crossing = _cross(measured, disc, zone_px)
    of_class = measured.graph.vessel_class[crossing.segment]
    unsaid = crossing.width_um[of_class == VesselClass.NONE]
    found, numbers = [], []
    for kind, pair, few in (
        (VesselClass.ARTERIOLE, FORMULAS[formula][0], Flag.FEW_ARTERIOLES),
        (VesselClass.VENULE, FORMULAS[formula][1], Flag.FEW_VENULES),
    ):
        used = np.flatnonzero(of_class == kind)
        used = used[np.lexsort((used, -crossing.width_um[used]))][: MOST_VESSELS[formula]]
        enough = len(used) >= LEAST_VESSELS[formula]
        if enough and unsaid.max(initial=0.0) > crossing.width_um[used].min():
            flags |= Flag.ZONE_UNSAID
        flags |= Flag.NONE if enough else few
        found.append(_equivalent(crossing, used, pair) if enough else (np.nan, np.nan, np.zeros(0)))
        numbers.append(len(used))
    (artery, artery_random, artery_shared), (vein, vein_random, vein_shared) = found
    ratio = artery / vein
    apart = artery_shared - vein_shared if np.isfinite(ratio) else np.zeros(0)
    return Equivalents(
        artery_um=artery,
        artery_se_um=artery * _total(artery_random, artery_shared),
        vein_um=vein,
        vein_se_um=vein * _total(vein_random, vein_shared),
        ratio=ratio,
        ratio_se=ratio * _total(float(np.hypot(artery_random, vein_random)), apart),
        n_arterioles=numbers[0],
        n_venules=numbers[1],
        formula=formula,
        zone_px=zone_px,
        flags=flags,
    )


def _total(random: float, shared: FloatArray) -> float:
    return float(np.sqrt(random**2 + np.square(shared).sum()))


def _equivalent(crossing: _Crossing, used: IntArray, formula: Formula) -> tuple[float, float, FloatArray]:
    """Equivalent, its random standard uncertainty in ln, and its change in ln with each shared cause."""
    width = crossing.width_um[used]
    moves = LN_STEP * np.eye(len(used))
    gradient = np.array(
        [np.log(combine(width * np.exp(move), formula) / combine(width / np.exp(move), formula)) for move in moves]
    ) / (2 * LN_STEP)
    random = float(np.sqrt(np.sum(np.square(gradient * crossing.ln_random_se[used]))))
    return combine(width, formula), random, gradient @ crossing.causes[used]


def _cross(measured: MeasuredGraph, disc: OpticDisc, zone_px: tuple[float, float]) -> _Crossing:
    graph, share = measured.graph, arc_shares(measured)
    n, of = graph.n_segments, owner(graph.offsets)
    away = np.hypot(graph.x_px - disc.x_px, graph.y_px - disc.y_px)
    middle_px = 0.5 * (zone_px[0] + zone_px[1])
    beyond = away > middle_px
    turns = (beyond[1:] != beyond[:-1]) & (of[1:] == of[:-1])
    meets = np.bincount(of[1:][turns], minlength=n) > 0
    node_beyond = np.hypot(graph.node_x_px - disc.x_px, graph.node_y_px - disc.y_px) > middle_px
    for node, end in ((graph.node_a, graph.offsets[:-1]), (graph.node_b, graph.offsets[1:] - 1)):
        meets |= node_beyond[node] != beyond[end]
    inside = np.where((away >= zone_px[0]) & (away <= zone_px[1]), share * measured.length_um[of], 0.0)
    segment = np.flatnonzero(meets & (sum_by(of, inside, n) > 0))
    weight = np.where(np.isin(of, segment), inside / np.maximum(sum_by(of, inside, n)[of], 1e-300), 0.0)
    radius = mean_by(of, measured.radius_um, weight, n)
    lever = np.divide(weight * measured.radius_um, radius[of], out=np.zeros(len(of)), where=weight > 0)
    pixel_se = np.nan_to_num(measured.pixel_size_rel_se) * measured.column
    causes = [sum_by(of, lever * column, n)[segment] for column in (*measured.shared.T, pixel_se)]
    random_se = np.sqrt(measured.covariance.segment_variance(lever)[segment]) if n else np.zeros(0)
    return _Crossing(segment, 2.0 * radius[segment], random_se, np.stack(causes, axis=1))


def _share_outside(fov: BoolArray, disc: OpticDisc, ring_px: tuple[float, float]) -> float:
    """Share of a ring around the disc's centre that lies outside the field of view."""
    at = (np.arange(RINGS) + 0.5) / RINGS
    reach = np.sqrt(ring_px[0] ** 2 + at * (ring_px[1] ** 2 - ring_px[0] ** 2))[:, None]
    turn = 2 * np.pi * (np.arange(4 * RINGS) / (4 * RINGS))[None, :]
    column = np.rint(disc.x_px + reach * np.cos(turn)).astype(np.int64)
    row = np.rint(disc.y_px + reach * np.sin(turn)).astype(np.int64)
    within = (row >= 0) & (column >= 0) & (row < fov.shape[0]) & (column < fov.shape[1])
    seen = within & fov[np.clip(row, 0, fov.shape[0] - 1), np.clip(column, 0, fov.shape[1] - 1)]
    return float(1.0 - seen.mean())
