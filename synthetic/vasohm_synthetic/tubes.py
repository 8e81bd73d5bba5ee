"""Single tubes: straight, arcs, sines and rings; of constant, tapering, narrowed or varying radius."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from vasohm_synthetic.arrays import FloatArray
from vasohm_synthetic.curves import Curve, arc, arc_length, process, resample, sinusoid, straight
from vasohm_synthetic.errors import refuse
from vasohm_synthetic.scene import CLASSES, MAX_LN_SD, MAX_SIDE_PX, Scene, Vessel

TUBE_SHAPES = ("straight", "arc", "sine", "ring")
LEAST_CORRELATION_PX = 0.5  # a radius cannot vary from one step of the axis to the next
LONGEST_PX = 10.0 * MAX_SIDE_PX


@dataclass(frozen=True, slots=True)
class Tube:
    """One tube as it is asked for; lengths in pixels. Its midpoint is at x_px, y_px (an arc's or ring's: the centre).

    The radius runs from `radius_px` to `radius_end_px` (None: the same), times exp of a Gaussian process of standard
    deviation `variation_sd` and correlation length `variation_px`, times 1 - `narrowing` at the middle of a
    Gaussian of full width at half depth `narrowing_px`.
    """

    x_px: float
    y_px: float
    radius_px: float
    length_px: float = 200.0
    angle_deg: float = 0.0
    shape: str = "straight"
    radius_end_px: float | None = None
    bend_radius_px: float = 60.0  # arc, ring
    amplitude_px: float = 8.0  # sine
    period_px: float = 60.0  # sine
    variation_sd: float = 0.0
    variation_px: float = 20.0
    narrowing: float = 0.0
    narrowing_px: float = 10.0
    vessel_class: str = ""
    gain: float = 1.0


def tube_problems(tube: Tube, shape: tuple[int, int]) -> list[str]:
    """Say everything that is impossible about a tube in a picture of `shape`; empty where nothing is."""
    end = tube.radius_px if tube.radius_end_px is None else tube.radius_end_px
    widest = max(tube.radius_px, end)
    checks = [
        (tube.shape in TUBE_SHAPES, f"shape {tube.shape!r} is none of {TUBE_SHAPES}"),
        (tube.radius_px > 0, f"radius_px {tube.radius_px:g} is not positive"),
        (tube.radius_end_px is None or end > 0, f"radius_end_px {end:g} is not positive"),
        (
            2 * widest < min(shape),
            f"radius_px {widest:g} does not fit {_size(shape)}",
        ),
        (1 < tube.length_px <= LONGEST_PX, f"length_px {tube.length_px:g} is not within 1 and {LONGEST_PX:g}"),
        (_reaches(tube, shape), f"x_px {tube.x_px:g}, y_px {tube.y_px:g} lies wholly outside {_size(shape)}"),
        (
            tube.shape not in ("arc", "ring") or widest < tube.bend_radius_px <= LONGEST_PX,
            f"bend_radius_px {tube.bend_radius_px:g} is not within the tube's radius and {LONGEST_PX:g}",
        ),
        (
            tube.shape != "arc" or tube.length_px < 2 * (np.pi * tube.bend_radius_px - widest),
            f"length_px {tube.length_px:g} closes the arc of bend_radius_px {tube.bend_radius_px:g}: take shape 'ring'",
        ),
        (
            tube.shape != "sine" or _sharpest_px(tube) > widest,
            f"amplitude_px {tube.amplitude_px:g} and period_px {tube.period_px:g} bend the tube within its own radius",
        ),
        (tube.period_px > 0, f"period_px {tube.period_px:g} is not positive"),
        (
            0 <= tube.amplitude_px <= MAX_SIDE_PX,
            f"amplitude_px {tube.amplitude_px:g} is not within 0 and {MAX_SIDE_PX}",
        ),
        (
            0 <= tube.variation_sd <= MAX_LN_SD,
            f"variation_sd {tube.variation_sd:g} is not within 0 and {MAX_LN_SD:g}",
        ),
        (
            tube.variation_px >= LEAST_CORRELATION_PX,
            f"variation_px {tube.variation_px:g} is below {LEAST_CORRELATION_PX:g}",
        ),
        (0 <= tube.narrowing < 1, f"narrowing {tube.narrowing:g} is not within 0 and 1"),
        (tube.narrowing_px > 0, f"narrowing_px {tube.narrowing_px:g} is not positive"),
        (
            tube.narrowing == 0 or tube.narrowing_px <= _length_px(tube),
            f"narrowing_px {tube.narrowing_px:g} is longer than the tube ({_length_px(tube):g} px)",
        ),
        (tube.vessel_class in CLASSES, f"vessel_class {tube.vessel_class!r} is none of {CLASSES}"),
        (tube.gain > 0, f"gain {tube.gain:g} is not positive"),
    ]
    return [problem for fine, problem in checks if not fine]


def _length_px(tube: Tube) -> float:
    return 2 * np.pi * tube.bend_radius_px if tube.shape == "ring" else tube.length_px


def _sharpest_px(tube: Tube) -> float:
    """Radius of curvature at the crest of a sine: 1 over its second derivative."""
    if not (tube.period_px > 0 and tube.amplitude_px > 0):
        return np.inf
    return float((tube.period_px / (2 * np.pi)) ** 2 / tube.amplitude_px)


def _reaches(tube: Tube, shape: tuple[int, int]) -> bool:
    """Whether some of the axis may lie in the picture; True where the tube is impossible for another reason."""
    possible = 1 < tube.length_px <= LONGEST_PX and 0 < tube.bend_radius_px <= LONGEST_PX
    if not (possible and tube.period_px > 0 and abs(tube.amplitude_px) <= MAX_SIDE_PX and tube.shape in TUBE_SHAPES):
        return True
    x, y = _axis(tube)
    return bool(np.any((x >= -0.5) & (x <= shape[1] - 0.5) & (y >= -0.5) & (y <= shape[0] - 0.5)))


def _size(shape: tuple[int, int]) -> str:
    return f"a picture of {shape[1]} x {shape[0]} px"


def tube_scene(tubes: Sequence[Tube], shape: tuple[int, int], rng: np.random.Generator | None = None) -> Scene:
    """Put tubes into a picture, each a vessel and a network of its own; where they overlap they cross.

    Parameters
    ----------
    shape : tuple[int, int]
        (height, width) of the picture in pixels.
    rng : Generator, optional
        Needed where a tube's radius varies at random.

    Raises
    ------
    RecipeError
        When a tube is impossible.
    """
    refuse([f"tube {i}: {problem}" for i, tube in enumerate(tubes, 1) for problem in tube_problems(tube, shape)])
    rng = np.random.default_rng(0) if rng is None else rng
    vessels: list[Vessel] = []
    node_x: list[float] = []
    node_y: list[float] = []
    for layer, tube in enumerate(tubes):
        x, y = _axis(tube)
        ends = (0,) if tube.shape == "ring" else (0, -1)
        first = len(node_x)
        node_x += [x[end] for end in ends]
        node_y += [y[end] for end in ends]
        vessels.append(
            Vessel(
                x_px=x,
                y_px=y,
                radius_px=_radius(tube, arc_length(x, y), rng),
                node_a=first,
                node_b=len(node_x) - 1,
                layer=layer,
                vessel_class=tube.vessel_class,
                gain=tube.gain,
            )
        )
    return Scene(shape, np.array(node_x, float), np.array(node_y, float), tuple(vessels))


def _axis(tube: Tube) -> Curve:
    chord = straight(tube.x_px, tube.y_px, tube.angle_deg, tube.length_px)
    if tube.shape == "straight":
        return chord
    if tube.shape == "sine":
        return sinusoid(chord, tube.amplitude_px, tube.period_px)
    turn = 360.0 if tube.shape == "ring" else np.rad2deg(tube.length_px / tube.bend_radius_px)
    start = tube.angle_deg - 0.5 * turn
    return resample(*arc(tube.x_px, tube.y_px, tube.bend_radius_px, (start, start + turn)))


def _radius(tube: Tube, s: FloatArray, rng: np.random.Generator) -> FloatArray:
    end = tube.radius_px if tube.radius_end_px is None else tube.radius_end_px
    radius = tube.radius_px + (end - tube.radius_px) * s / s[-1]
    if tube.variation_sd > 0:
        wave = process(len(s), s[-1] / (len(s) - 1), tube.variation_px, rng)
        radius = radius * np.exp(tube.variation_sd * wave)
    sigma = tube.narrowing_px / (2.0 * np.sqrt(2.0 * np.log(2.0)))
    narrowed: FloatArray = radius * (1.0 - tube.narrowing * np.exp(-0.5 * ((s - 0.5 * s[-1]) / sigma) ** 2))
    return narrowed
