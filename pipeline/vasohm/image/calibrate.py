"""From a read file to a picture with a scale: pixel size, its uncertainty, and where it came from."""

from dataclasses import dataclass
from typing import Literal

from vasohm.flags import Flag
from vasohm.image.read import RawImage


@dataclass(frozen=True, slots=True)
class ScaleSettings:
    """What the study file says about scale, in micrometres; None where it says nothing."""

    pixel_size_um: float | None
    pixel_size_se_um: float | None
    scale_conflict: Literal["stop", "sheet"]


@dataclass(frozen=True, slots=True)
class TypedScale:
    """What the image sheet says about this image, in micrometres; None where the cell is empty."""

    pixel_size_um: float | None
    pixel_size_se_um: float | None


@dataclass(frozen=True, slots=True)
class ScaledImage:
    """A picture whose pixel edge is known: `pixel_size_se_um` is NaN where nobody told it."""

    raw: RawImage
    pixel_size_um: float
    pixel_size_se_um: float
    pixel_size_source: str  # sheet | study | ome | imagej | dicom
    flags: Flag
