"""The margin of a bright round place: where light falls off around it, direction by direction."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, Float32Array, FloatArray, freeze

DIRECTIONS = 72
REACH = (0.3, 1.9)  # radii between which light is read
STEP = 0.04  # of the radius
SMOOTH = 0.08  # of the radius, along each direction
SIDEWAYS = 1.5  # directions: neighbours share what one vessel hides
LOOKED_FOR = (0.65, 1.45)  # radii between which a margin may lie
SEEN_BEYOND = 1.2  # radii: where the field ends before, its border would be taken for the margin
TOLERANCE = 0.12  # of the radius: margins further off the circle count as another thing's
TURNS = 8
LEAST_DIRECTIONS = 12  # a sixth of the round: a circle through less says little of its radius
FURTHEST = 1.0  # radii that a circle may wander from where it began
GROWTH = (0.5, 1.6)  # of the radius in one turn; beyond it the circle runs away
STILL = 0.015  # of the radius: a circle that moves less has arrived
WIDTHS = (6.0, 3.0, 3.0, 2.0, 2.0)  # of the weight's reach, in tolerances, from round to round
HELD = 1e-3  # of the weight, that holds the centre where only one side of the margin is seen
INNER, OUTER = (0.45, 0.8), (1.2, 1.55)  # radii between which light is well inside and well outside
INSIDE, OUTSIDE = (0.8, 0.95), (1.05, 1.2)  # and just inside and just outside
FALLING = 0.2  # of the whole fall, from which light falls at the circle in one direction
PLACED = (0.7, 1.35)  # radii between which the scatter of the margin is read
KNOWN_SHARE = 0.3  # of the weight of a smoothed reading


@dataclass(frozen=True, slots=True, eq=False)
class Ground:
    """Light without its vessels, on a coarse grid of blocks."""

    light: Float32Array  # (h, w) with vessels and the outside filled from around
    known: BoolArray  # (h, w) where it is neither

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True)
class Circle:
    """In blocks of the grid."""

    x: float
    y: float
    radius: float


@dataclass(frozen=True, slots=True)
class Margin:
    """A circle and how well light tells it."""

    circle: Circle
    complete: float  # share of the directions seen in which light falls at the circle
    sharp: float  # share of the fall from well inside to well outside that lies within a fifth of the radius around it
    scatter: float  # of the margin around the circle, over the radius
    steady: float  # how evenly light falls at the circle: ln of 1 + median over deviation, between the directions


def _read_round(ground: Ground, circle: Circle) -> tuple[FloatArray, FloatArray]:
    """Light along directions around a circle's centre, (directions, radii), NaN where not known; and the radii."""
    at = np.arange(REACH[0], REACH[1], STEP)
    turn = 2 * np.pi * np.arange(DIRECTIONS) / DIRECTIONS
    x = circle.x + circle.radius * at * np.cos(turn)[:, None]
    y = circle.y + circle.radius * at * np.sin(turn)[:, None]
    place = np.stack((y, x))
    light = ndimage.map_coordinates(ground.light, place, order=1, mode="nearest")
    known = ndimage.map_coordinates(ground.known.astype(np.float32), place, order=1, mode="constant", cval=0.0)
    return np.where(known > 0.5, light, np.nan), at


def _smooth(light: FloatArray) -> FloatArray:
    """Mean of what is known around each reading."""
    known = np.isfinite(light).astype(float)
    sigma = (SIDEWAYS, SMOOTH / STEP)
    weight = ndimage.gaussian_filter(known, sigma, mode=("wrap", "nearest"))
    total = ndimage.gaussian_filter(np.nan_to_num(light), sigma, mode=("wrap", "nearest"))
    return np.divide(total, weight, out=np.full_like(light, np.nan), where=(weight > KNOWN_SHARE) & (known > 0))


def fit_margin(ground: Ground, start: Circle) -> Margin | None:
    """Fit a circle to where light falls most steeply, from a first guess.

    Returns
    -------
    Margin
        None where fewer than a sixth of the directions are seen, or the circle runs away.

    Notes
    -----
    Each direction gives the place of its steepest fall; the circle through them is found by least squares, weighted
    by the fall, with places off the circle losing their weight (biweight; Beaton and Tukey, Technometrics
    1974;16:147-185, doi:10.1080/00401706.1974.10489171). The radius is then that of the
    steepest fall of the median over all directions, which a vessel or the field's border in some of them leaves alone.
    """
    circle = start
    for _ in range(TURNS):
        light, at = _read_round(ground, circle)
        falls = -np.asarray(np.gradient(_smooth(light), STEP, axis=1))
        falls = np.where((at >= LOOKED_FOR[0]) & (at <= LOOKED_FOR[1]), falls, np.nan)
        usable = np.isfinite(falls[:, at > SEEN_BEYOND]).any(axis=1) & np.isfinite(falls[:, at < 1]).any(axis=1)
        if usable.sum() < LEAST_DIRECTIONS:
            return None
        best = np.nanargmax(np.where(usable[:, None], falls, 0.0), axis=1)
        steep = np.nan_to_num(falls[np.arange(DIRECTIONS), best])
        moved = _through(circle, at[best], np.maximum(steep, 0.0))
        if moved is None or np.hypot(moved.x - start.x, moved.y - start.y) > FURTHEST * start.radius:
            return None
        step = np.hypot(moved.x - circle.x, moved.y - circle.y) + abs(moved.radius - circle.radius)
        circle = moved
        if step < STILL * circle.radius:
            break
    return _describe(ground, circle)


def _through(circle: Circle, at: FloatArray, weight: FloatArray) -> Circle | None:
    """Circle through places at `at` radii of another; linear in the shift, which is small in the end."""
    turn = 2 * np.pi * np.arange(DIRECTIONS) / DIRECTIONS
    terms = np.stack((np.cos(turn), np.sin(turn), np.ones(DIRECTIONS)), axis=1)
    if np.count_nonzero(weight) < LEAST_DIRECTIONS:
        return None
    weight = np.minimum(weight, 2 * np.median(weight[weight > 0]))
    used = weight
    for width in WIDTHS:
        normal = terms.T @ (used[:, None] * terms) + HELD * weight.sum() * np.diag([1.0, 1.0, 0.0])
        if not used.any():
            return None
        shift = np.linalg.solve(normal, terms.T @ (used * at))
        off = (at - terms @ shift) / (width * TOLERANCE)
        used = weight * np.square(np.maximum(1 - np.square(off), 0))
    dx, dy, radius = (float(value) for value in shift)
    if not GROWTH[0] < radius < GROWTH[1]:
        return None
    return Circle(circle.x + circle.radius * dx, circle.y + circle.radius * dy, circle.radius * radius)


def _describe(ground: Ground, circle: Circle) -> Margin | None:
    light, at = _read_round(ground, circle)
    near = (at >= LOOKED_FOR[0]) & (at <= LOOKED_FOR[1])
    known = np.isfinite(light)
    enough = known.sum(axis=0) >= LEAST_DIRECTIONS
    if not enough[near].all():
        return None
    profile = np.array([np.nanmedian(column) if fine else np.nan for column, fine in zip(light.T, enough, strict=True)])
    falls = np.where(near, -np.gradient(ndimage.gaussian_filter1d(_held(profile), SMOOTH / STEP)), -np.inf)
    k = int(np.argmax(falls))
    radius = at[k] + STEP * _vertex(falls[k - 1 : k + 2])
    at = at / radius
    inner, outer, inside, outside = (_level(light, at, ring) for ring in (INNER, OUTER, INSIDE, OUTSIDE))
    if not (np.isfinite(inner).any() and np.isfinite(outer).any()):
        return None
    fall = float(np.nanmedian(inner) - np.nanmedian(outer))
    at_margin = inside - outside
    both = np.isfinite(at_margin)
    if both.sum() < LEAST_DIRECTIONS or not fall > 0:
        return None
    smooth = -np.asarray(np.gradient(_smooth(light), axis=1))
    band = (at > PLACED[0]) & (at < PLACED[1])
    place = at[band][np.argmax(np.where(np.isfinite(smooth[:, band]), smooth[:, band], -np.inf), axis=1)]
    return Margin(
        circle=Circle(circle.x, circle.y, circle.radius * radius),
        complete=float(np.mean(at_margin[both] > FALLING * fall)),
        sharp=float(np.median(at_margin[both]) / fall),
        scatter=float(np.median(np.abs(place[both] - 1))),
        steady=_steadiness(at_margin[both]),
    )


def _held(profile: FloatArray) -> FloatArray:
    """Ends that are not known take the nearest value that is."""
    index = np.arange(len(profile))
    fine = np.isfinite(profile)
    return np.interp(index, index[fine], profile[fine])


def _vertex(three: FloatArray) -> float:
    """Where a parabola through three values in a row is highest, from the middle one, in steps."""
    if len(three) < 3 or not np.isfinite(three).all():
        return 0.0
    bend = three[0] - 2 * three[1] + three[2]
    return float(np.clip(0.5 * (three[0] - three[2]) / bend, -0.5, 0.5)) if bend < 0 else 0.0


def _level(light: FloatArray, at: FloatArray, ring: tuple[float, float]) -> FloatArray:
    """Mean of what is known between two radii, one value a direction."""
    part = light[:, (at >= ring[0]) & (at <= ring[1])]
    known = np.isfinite(part)
    count = known.sum(axis=1)
    return np.divide(np.nan_to_num(part).sum(axis=1), count, out=np.full(len(part), np.nan), where=count > 0)


def _steadiness(falls: FloatArray) -> float:
    middle = float(np.median(falls))
    spread = 1.4826 * float(np.median(np.abs(falls - middle)))
    return float(np.log1p(max(middle, 0.0) / max(spread, 1e-3 * abs(middle), 1e-9)))
