"""From a vessel mask to centre lines one pixel wide."""

from dataclasses import dataclass

from vasohm.arrays import BoolArray, Float32Array, freeze


@dataclass(frozen=True, slots=True)
class SkeletonizeSettings:
    """Dead ends shorter than `spur_radii` x local radius + `spur_px` are taken for noise of the outline."""

    spur_radii: float
    spur_px: float


@dataclass(frozen=True, slots=True, eq=False)
class Skeleton:
    """Centre lines (h, w) bool and the distance from each pixel to the mask's outline (h, w)."""

    pixels: BoolArray
    distance_px: Float32Array
    fov: BoolArray

    def __post_init__(self) -> None:
        freeze(self)
