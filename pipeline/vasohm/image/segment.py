"""From a prepared picture to a vessel mask, by a registered method."""

from collections.abc import Mapping
from dataclasses import dataclass

from vasohm.arrays import BoolArray, freeze


@dataclass(frozen=True, slots=True)
class SegmentSettings:
    """Which method looks for vessels, of which radii, how strictly."""

    method: str
    radius_um: tuple[float, float]
    false_alarms_per_mpx: float  # pixels of false centreline that noise alone may give in a megapixel
    parameters: Mapping[str, float]  # a plug-in's own; empty for ours


@dataclass(frozen=True, slots=True, eq=False)
class VesselMask:
    """Where vessels are: bool (h, w)."""

    pixels: BoolArray
    source: str  # the method's name, or "mask_file"

    def __post_init__(self) -> None:
        freeze(self)
