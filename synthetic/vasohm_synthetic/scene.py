"""What is in the picture: vessels with their exact axis and radius, nodes, field of view and optic disc."""

from dataclasses import dataclass

import numpy as np

from vasohm_synthetic.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm_synthetic.errors import refuse

AXIS_STEP_PX = 0.25  # a chord of this length lies within 0.001 px of a bend of 10 px radius
CLASSES = ("", "arteriole", "venule", "capillary")
MAX_LN_SD = 1.0  # of the logarithm of a radius or a contrast: a factor of 7 within two of them
MAX_SIDE_PX = 30_000


@dataclass(frozen=True, slots=True, eq=False)
class Vessel:
    """One vessel between two nodes; its axis runs with the flow where a direction is known.

    Lengths are in pixels, pixel centres on whole numbers. The lumen is round everywhere: `radius_px` belongs to
    the cross-section at right angles to the axis.
    """

    x_px: FloatArray  # (n,) axis, steps of at most `AXIS_STEP_PX`
    y_px: FloatArray
    radius_px: FloatArray  # (n,) lumen radius
    node_a: int  # index of the node at the first point
    node_b: int
    layer: int  # lumens of one layer join; those of different layers cross without touching
    vessel_class: str = ""
    gain: float = 1.0  # factor on the contrast of this vessel

    def __post_init__(self) -> None:
        freeze(self)

    @property
    def s_px(self) -> FloatArray:
        """Arc length from the first point, (n,)."""
        steps = np.hypot(np.diff(self.x_px), np.diff(self.y_px))
        return np.concatenate(([0.0], np.cumsum(steps)))


@dataclass(frozen=True, slots=True)
class Circle:
    """A circle in pixels."""

    x_px: float
    y_px: float
    radius_px: float

    def holds(self, x_px: FloatArray, y_px: FloatArray) -> BoolArray:
        """Whether points lie within the circle."""
        inside: BoolArray = np.hypot(x_px - self.x_px, y_px - self.y_px) <= self.radius_px
        return inside


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """All vessels of one picture. Every node joins one, three or more vessel ends, or is the seam of a ring."""

    shape: tuple[int, int]  # (h, w)
    node_x_px: FloatArray
    node_y_px: FloatArray
    vessels: tuple[Vessel, ...]
    fov: Circle | None = None  # outside it the picture is black; None: the whole picture
    disc: Circle | None = None
    centre: Circle | None = None  # the dark centre of a fundus

    def __post_init__(self) -> None:
        freeze(self)
        height, width = self.shape
        problems = []
        if height < 8 or width < 8:
            problems.append(f"shape: {self.shape} is smaller than 8 x 8 px")
        for index, vessel in enumerate(self.vessels):
            if len(vessel.x_px) < 2 or not np.isfinite(vessel.x_px + vessel.y_px + vessel.radius_px).all():
                problems.append(f"vessel {index}: needs two or more finite axis points")
            elif vessel.radius_px.min() <= 0:
                problems.append(f"vessel {index}: radius {vessel.radius_px.min():g} px is not positive")
            elif vessel.radius_px.max() > max(height, width):
                problems.append(f"vessel {index}: radius {vessel.radius_px.max():g} px is larger than the picture")
            if vessel.vessel_class not in CLASSES:
                problems.append(f"vessel {index}: class {vessel.vessel_class!r} is none of {CLASSES}")
        refuse(problems)

    @property
    def degree(self) -> IntArray:
        """How many vessel ends meet at each node, (n_nodes,)."""
        ends = [n for vessel in self.vessels for n in (vessel.node_a, vessel.node_b)]
        return np.bincount(np.array(ends, np.int64), minlength=len(self.node_x_px)).astype(np.int64)

    def visible(self, x_px: FloatArray, y_px: FloatArray) -> BoolArray:
        """Whether points lie in the picture and its field of view."""
        height, width = self.shape
        inside: BoolArray = (x_px >= -0.5) & (x_px <= width - 0.5) & (y_px >= -0.5) & (y_px <= height - 0.5)
        return inside if self.fov is None else inside & self.fov.holds(x_px, y_px)
