"""The optic disc of a fundus photograph, as whoever told it or found it says."""

from dataclasses import dataclass


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
