"""Finds the optic disc of a fundus picture: a bright round place with a margin, to which the wide vessels lead."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy import fft, ndimage
from scipy.special import expit

from vasohm.arrays import AnyArray, BoolArray, Float32Array, FloatArray
from vasohm.flags import Flag
from vasohm.image.disc import OpticDisc
from vasohm.image.prepare import PreparedImage
from vasohm.network.disc_margin import Circle, Ground, Margin, fit_margin
from vasohm.network.disc_weights import WEIGHTS
from vasohm.network.graph import VesselGraph
from vasohm.network.paths import tangents

LEAST_CONFIDENCE = 0.5  # a place that is less probably the disc than not is not taken for it
ACROSS = 320  # blocks over the field of view: the thinnest disc looked for is 20 of them wide
COARSER = 2  # blocks of the grid on which places are looked for; the margin is fitted on the finer one
RADII = 0.032 * 1.25 ** np.arange(8)  # of a disc over the field's diameter, to 0.15: fields of 60 to 20 degrees
INSIDE, AROUND = 0.85, (1.15, 1.7)  # radii between which light inside and around is compared
LEAST_SEEN = 0.3  # of either: a disc may lie partly outside the field, and vessels are taken out
LEAST_EXCESS = 1.3  # over the texture's deviation, of a place that is looked at
LEAST_TEXTURE = 0.5  # of 255 grey levels
MOST_PLACES = 12  # whose margin is fitted
ALIKE_RADII, ALIKE_LN = 0.35, 0.3  # places so near each other, of sizes so like, lead to the same margin
WIDER = 1.15  # times as wide: another margin around the first, not the same one
MIDDLE = 0.5  # of the disc's radius: a cup's centre lies no further from the disc's; common practice, no source
NEAR = (1.1, 3.0)  # radii from the centre, between which vessels are asked whether they point at it
RING = (1.1, 1.7)  # and between which trunks are counted
NO_WIDTH = 0.5  # of vessels where there are none, over the typical one
FILL_BLOCKS = 2.0
MOST_COMPLETE, MOST_SHARP = 0.85, 0.6  # more than that is no better evidence: photographs have less than phantoms
DARK_SHARE = 0.3  # of a block covered by a vessel from which it is left out


@dataclass(frozen=True, slots=True)
class DiscSearch:
    """The optic disc where one is known, and else what to say about it."""

    disc: OpticDisc | None
    notes: tuple[str, ...] = ()
    flags: Flag = Flag.NONE


def find_disc(graph: VesselGraph, prepared: PreparedImage, vessels: BoolArray) -> DiscSearch:
    """Find the optic disc, or refuse to.

    Parameters
    ----------
    graph : VesselGraph
        The vessels' centrelines.
    prepared : PreparedImage
        The measured channel and the field of view.
    vessels : (h, w) bool
        Pixels of vessels: they are no part of the ground's light.

    Returns
    -------
    DiscSearch
        A disc whose confidence is at least 0.5; or none, with the flag ``disc_not_found`` and a note why.

    Notes
    -----
    Vessels are taken out of the light. Places brighter than the ring around them, in eight sizes, are ranked by that
    excess and by how many wide vessels point at them; around the twelve most promising a circle is fitted to the
    steepest fall of light in each direction, and its radius taken from the median over all directions. The confidence
    is a logistic rule on how complete, sharp, even and round that margin is and how the vessels lie to it; its weights
    come from phantoms with and without discs, with bright spots elsewhere, and say how probable it is that the centre
    is right within a tenth of the disc's diameter. Where one probable place lies inside another, as the cup does in the
    disc, the outer one is taken; a rival elsewhere takes its part of the confidence, for an eye has one disc. A disc
    that is seen in part is found where at least a sixth of its margin is seen between vessels.
    """
    if graph.n_points == 0:
        return _refuse("no vessel leads to one")
    ground, edge = lay_ground(prepared, vessels)
    diameter = 2 * float(np.sqrt(prepared.fov.sum() / np.pi)) / edge
    places = candidates(graph, ground, (edge, diameter))
    found = [(probability(WEIGHTS, features), circle) for circle, features in places]
    if not found:
        return _refuse("no place is bright, round and has a margin")
    confidence, circle = likeliest(found)
    x, y, radius = (float(value) for value in (*_pixels(circle.x, circle.y, edge), circle.radius * edge))
    if confidence < LEAST_CONFIDENCE:
        where = f"the likeliest place, x {x:.0f}, y {y:.0f} with a radius of {radius:.0f} px, is one with a probability"
        return _refuse(f"{where} of {confidence:.2f}, less than {LEAST_CONFIDENCE:g}")
    return DiscSearch(OpticDisc(x, y, radius, "image", confidence))


def likeliest(found: list[tuple[float, Circle]]) -> tuple[float, Circle]:
    """Place that is most probably the disc, and how probable that is beside its rivals.

    Parameters
    ----------
    found : one or more places, each with the probability that it is the disc, seen alone.
    """
    alone, circle = _outermost(found)
    elsewhere = [share for share, other in found if np.hypot(other.x - circle.x, other.y - circle.y) > circle.radius]
    return _before_rival(alone, max(elsewhere, default=0.0)), circle


def _outermost(found: list[tuple[float, Circle]]) -> tuple[float, Circle]:
    """Most probable place; or, while a wider one around it is probable too, that one: the cup lies inside the disc."""
    best = max(found, key=lambda one: one[0])
    while around := [
        (share, circle) for share, circle in found if share >= LEAST_CONFIDENCE and _holds(circle, best[1])
    ]:
        best = max(around, key=lambda one: one[0])
    return best


def _holds(outer: Circle, inner: Circle) -> bool:
    apart = float(np.hypot(outer.x - inner.x, outer.y - inner.y))
    is_about_its_middle = apart < MIDDLE * outer.radius and apart + inner.radius < WIDER * outer.radius
    return outer.radius > WIDER * inner.radius and is_about_its_middle


def _before_rival(share: float, rival: float) -> float:
    """Probability of one of two places of which at most one is the disc, from those that each has alone."""
    odds, rival_odds = (one / max(1.0 - one, np.finfo(float).tiny) for one in (share, rival))
    return float(odds / (1.0 + odds + rival_odds))


def _refuse(why: str) -> DiscSearch:
    advice = 'Tell disc_x_px, disc_y_px and disc_radius_px in the image sheet, or set [shape] disc = "none"'
    return DiscSearch(None, (f"no optic disc was found: {why}. {advice}.",), Flag.DISC_NOT_FOUND)


def _pixels(x: float, y: float, edge: int) -> tuple[float, float]:
    return (x + 0.5) * edge - 0.5, (y + 0.5) * edge - 0.5


def probability(weights: Mapping[str, float], features: Mapping[str, float]) -> float:
    """Probability that a place with these features is the disc."""
    return float(expit(weights["intercept"] + sum(weights[name] * value for name, value in features.items())))


def candidates(graph: VesselGraph, ground: Ground, scale: tuple[int, float]) -> list[tuple[Circle, dict[str, float]]]:
    """Places that may be the disc, each with what tells it from another bright place.

    Parameters
    ----------
    graph : the vessels.
    ground : light without them, from `lay_ground`.
    scale : a block's edge in pixels, and the field's diameter in blocks.
    """
    edge, diameter = scale
    found: list[tuple[Circle, dict[str, float]]] = []
    vessels = _Vessels.of(graph, edge)
    for circle, excess in _promising(vessels, _bright_places(ground, diameter)):
        is_known = any(_is_alike(circle, other) for other, _ in found)
        margin = None if is_known else fit_margin(ground, circle)
        if margin is not None:
            found.append((margin.circle, _describe(vessels, margin, excess)))
    return found


def lay_ground(prepared: PreparedImage, vessels: BoolArray) -> tuple[Ground, int]:
    """Light of the picture without its vessels, on blocks; and a block's edge in pixels."""
    diameter = 2 * float(np.sqrt(prepared.fov.sum() / np.pi))
    edge = max(1, round(diameter / ACROSS))
    free = prepared.fov & ~vessels
    weight = _block_mean(free, edge)
    level = _block_mean(np.where(free, prepared.picture, 0), edge)
    inside = ndimage.minimum_filter(_block_mean(prepared.fov, edge), 3, mode="constant") == 1
    known = inside & (ndimage.maximum_filter(_block_mean(vessels, edge), 3) <= DARK_SHARE)
    light = np.divide(level, weight, out=np.zeros_like(level), where=weight > 0)
    return Ground(_filled(light, known), known), edge


def _block_mean(values: AnyArray, edge: int) -> Float32Array:
    height, width = values.shape
    padded = np.pad(values, ((0, -height % edge), (0, -width % edge)))
    blocks = padded.reshape(padded.shape[0] // edge, edge, padded.shape[1] // edge, edge)
    return np.asarray(blocks.mean(axis=(1, 3), dtype=np.float32))


def _filled(light: Float32Array, known: BoolArray) -> Float32Array:
    """Fill what is not known from close by, so that readings beside it are not torn."""
    weight = ndimage.gaussian_filter(known.astype(np.float32), FILL_BLOCKS)
    mean = ndimage.gaussian_filter(np.where(known, light, 0), FILL_BLOCKS)
    middle = np.median(light[known]) if known.any() else 0.0
    around = np.divide(mean, weight, out=np.full_like(mean, middle), where=weight > 0.02)
    return np.where(known, light, around)


def _bright_places(ground: Ground, diameter: float) -> list[tuple[Circle, float]]:
    """Round places brighter than around them; each with its excess over the deviation that is usual at its size."""
    weight = _block_mean(ground.known, COARSER)
    level = _block_mean(np.where(ground.known, ground.light, 0), COARSER)
    reach = int(AROUND[1] * RADII[-1] * diameter / COARSER) + 2
    size = tuple(fft.next_fast_len(n + 2 * reach + 1, real=True) for n in weight.shape)
    spectra = (fft.rfft2(weight, size), fft.rfft2(level, size))
    found = []
    for radius in RADII * diameter / COARSER:
        inside = _mean_within(spectra, (size, weight.shape), (0.0, INSIDE * radius))
        around = _mean_within(spectra, (size, weight.shape), (AROUND[0] * radius, AROUND[1] * radius))
        contrast = inside - around
        usable = np.isfinite(contrast)
        if not usable.any():
            continue
        middle = np.median(contrast[usable])
        texture = max(1.4826 * float(np.median(np.abs(contrast[usable] - middle))), LEAST_TEXTURE)
        excess = np.where(usable, (contrast - middle) / texture, -np.inf)
        apart = 2 * max(1, int(0.6 * radius)) + 1
        for y, x in np.argwhere((ndimage.maximum_filter(excess, apart) == excess) & (excess > LEAST_EXCESS)):
            place = Circle(*_pixels(float(x), float(y), COARSER), COARSER * float(radius))
            found.append((place, float(excess[y, x])))
    return found


def _mean_within(
    spectra: tuple[AnyArray, AnyArray], sizes: tuple[tuple[int, ...], tuple[int, ...]], ring: tuple[float, float]
) -> FloatArray:
    """Mean light in a ring around every place; NaN where too little of the ring is known."""
    size, shape = sizes
    reach = int(np.ceil(ring[1])) + 1
    away = np.hypot(*np.mgrid[-reach : reach + 1, -reach : reach + 1])
    hole = np.clip(ring[0] + 0.5 - away, 0, 1) if ring[0] > 0 else 0.0
    kernel = (np.clip(ring[1] + 0.5 - away, 0, 1) - hole).astype(np.float32)
    turned = fft.rfft2(kernel, size)
    cut = tuple(slice(reach, reach + n) for n in shape)
    weight, total = (fft.irfft2(turned * spectrum, size)[cut] for spectrum in spectra)
    return np.divide(total, weight, out=np.full(shape, np.nan), where=weight > LEAST_SEEN * kernel.sum())


def _promising(vessels: "_Vessels", places: list[tuple[Circle, float]]) -> list[tuple[Circle, float]]:
    """Places worth a look: bright ones to which vessels lead, each but once."""
    rated = []
    for circle, excess in places:
        around = vessels.around(circle)
        rated.append((np.log(excess) + around["pointing"] + 0.7 * around["trunks"] + around["width"], circle, excess))
    rated.sort(key=lambda one: (-one[0], one[1].y, one[1].x, one[1].radius))
    chosen: list[tuple[Circle, float]] = []
    for _, circle, excess in rated:
        if len(chosen) < MOST_PLACES and not any(_is_alike(circle, other) for other, _ in chosen):
            chosen.append((circle, excess))
    return chosen


def _is_alike(one: Circle, other: Circle) -> bool:
    is_near = np.hypot(one.x - other.x, one.y - other.y) < ALIKE_RADII * one.radius
    return bool(is_near and abs(np.log(one.radius / other.radius)) < ALIKE_LN)


@dataclass(frozen=True, slots=True, eq=False)
class _Vessels:
    """The vessels' centrelines and what is asked of them for every place."""

    edge: int  # of a block, px
    x_px: FloatArray  # (n_points,)
    y_px: FloatArray
    along_x: FloatArray
    along_y: FloatArray
    wide: FloatArray
    trunk: float  # radius of wide ones, px
    mean_square: float  # of the radius

    @classmethod
    def of(cls, graph: VesselGraph, edge: int) -> "_Vessels":
        wide = graph.seed_radius_px
        along_x, along_y = tangents(graph.x_px, graph.y_px, graph.offsets)
        trunk, mean_square = float(np.quantile(wide, 0.95)), float(np.mean(wide**2))
        return cls(edge, graph.x_px, graph.y_px, along_x, along_y, wide, trunk, mean_square)

    def around(self, circle: Circle) -> dict[str, float]:
        """How vessels lie to a place: whether they point at it, how many trunks reach it, how wide they are."""
        x, y = _pixels(circle.x, circle.y, self.edge)
        dx, dy = self.x_px - x, self.y_px - y
        radius = self.edge * circle.radius
        at = np.hypot(dx, dy) / radius
        near = np.flatnonzero((at > NEAR[0]) & (at < NEAR[1]))
        if not len(near):
            return {"pointing": 0.0, "trunks": 0.0, "width": float(np.log(NO_WIDTH))}
        at, wide = at[near], self.wide[near]
        towards = np.abs(self.along_x[near] * dx[near] + self.along_y[near] * dy[near]) / (at * radius)
        crossing = (wide * towards)[at < RING[1]].sum() / (radius * (RING[1] - RING[0]))
        return {
            "pointing": float(np.average(2 * towards**2 - 1, weights=wide**2)),  # mean cos 2 angle: 0 at random
            "trunks": float(np.log1p(crossing / self.trunk)),
            "width": float(0.5 * np.log(np.mean(wide**2) / self.mean_square)),
        }


def _describe(vessels: _Vessels, margin: Margin, excess: float) -> dict[str, float]:
    return {
        "excess": float(np.log(max(excess, 1.0))),
        "complete": min(margin.complete, MOST_COMPLETE),
        "sharp": min(max(margin.sharp, 0.0), MOST_SHARP),
        "scatter": margin.scatter,
        "steady": margin.steady,
        **vessels.around(margin.circle),
    }
