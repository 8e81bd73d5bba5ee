"""The optic disc of a fundus photograph, as whoever told it or found it says."""

from dataclasses import dataclass

import numpy as np

from vasohm.errors import ImageError


@dataclass(frozen=True, slots=True)
class OpticDisc:
    """A disc as a circle in pixels.

    `source` says who told it: sheet, or image where it was found there. `confidence` is the probability that it lies
    where it is said to; 1 for a disc that a person told.
    """

    x_px: float
    y_px: float
    radius_px: float
    source: str
    confidence: float


def check_disc(disc: OpticDisc, shape: tuple[int, int]) -> None:
    """Refuse a told disc that no part of a picture of `shape` (h, w) shows: such places are slips of typing.

    Raises
    ------
    ImageError : the circle lies wholly outside the picture, or one of its numbers is not finite.
    """
    height, width = shape
    nearest_x = min(max(disc.x_px, -0.5), width - 0.5)
    nearest_y = min(max(disc.y_px, -0.5), height - 0.5)
    if not np.hypot(disc.x_px - nearest_x, disc.y_px - nearest_y) < disc.radius_px < np.inf:
        msg = (
            f"the optic disc told, at x {disc.x_px:g}, y {disc.y_px:g} with a radius of {disc.radius_px:g} px, lies "
            f"outside the picture of {width} x {height} px. Correct disc_x_px, disc_y_px, disc_radius_px: pixels from "
            "the upper left corner, to the right and downwards."
        )
        raise ImageError(msg)
