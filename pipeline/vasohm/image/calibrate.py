"""From a read file to a picture with a scale: pixel size, its uncertainty, and where it came from."""

import math
from dataclasses import dataclass
from typing import Literal

from vasohm.errors import ScaleError
from vasohm.flags import Flag
from vasohm.image.read import RawImage

LEAST_UM, MOST_UM = 1e-3, 1e3  # edges of pixels of vessel images, with room: 10 nm to 0.1 mm occur
CONTRADICTION = 0.02  # relative difference above which file and person do not mean the same pixel
SOURCES = "the image sheet, [scale] of the study, OME-XML and ImageJ description of the file"


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
    """A picture whose pixel edge is known: `pixel_size_se_um` is NaN where nobody told it.

    `flags` are those of the scale; those of the file stay with `raw`.
    """

    raw: RawImage
    pixel_size_um: float
    pixel_size_se_um: float
    pixel_size_source: str  # sheet | study | ome | imagej
    flags: Flag


def calibrate(raw: RawImage, typed: TypedScale, settings: ScaleSettings) -> ScaledImage:
    """Settle the pixel size: what a person typed wins, the sheet over the study, both over the file.

    Parameters
    ----------
    raw : the read file, with the pixel size that it carries, if any.
    typed : what the image sheet says.
    settings : what the study says.

    Raises
    ------
    ScaleError : no pixel size anywhere; one outside 0.001 to 1000 um; a file that contradicts the typed one by more
        than 2 %, unless `scale_conflict` is "sheet"; an uncertainty that is negative or not below the pixel size.
    """
    if typed.pixel_size_um is not None:
        pixel_size_um, source = typed.pixel_size_um, "sheet"
    elif settings.pixel_size_um is not None:
        pixel_size_um, source = settings.pixel_size_um, "study"
    elif raw.file_pixel_size_um is not None:
        pixel_size_um, source = raw.file_pixel_size_um, raw.file_pixel_size_source
    else:
        ignored = "".join(f"; {note}" for note in raw.notes if "ignored" in note)
        msg = (
            f"no pixel size found (looked in {SOURCES}{ignored}). Give pixel_size_um in the image sheet or in [scale], "
            "or --pixel-size where images are named on the command line."
        )
        raise ScaleError(msg)
    _check_range(pixel_size_um, source)
    flags = _contradiction(raw, pixel_size_um, source, settings)
    se_um = _uncertainty(typed, settings, source)
    if math.isnan(se_um):
        flags |= Flag.PIXEL_SIZE_SE_UNKNOWN
    elif not 0 <= se_um < pixel_size_um:
        msg = f"pixel_size_se_um = {se_um:g} is not between 0 and the pixel size of {pixel_size_um:g} um ({source})."
        raise ScaleError(msg)
    return ScaledImage(raw, pixel_size_um, se_um, source, flags)


def _check_range(pixel_size_um: float, source: str) -> None:
    if not LEAST_UM <= pixel_size_um <= MOST_UM:
        msg = (
            f"pixel size {pixel_size_um:g} um ({source}) is outside {LEAST_UM:g} to {MOST_UM:g} um. Usual causes: "
            "millimetres or nanometres taken for micrometres, dots per inch, binning that was left out."
        )
        raise ScaleError(msg)


def _contradiction(raw: RawImage, pixel_size_um: float, source: str, settings: ScaleSettings) -> Flag:
    said_um = raw.file_pixel_size_um
    if said_um is None or abs(said_um / pixel_size_um - 1) <= CONTRADICTION:
        return Flag.NONE
    if settings.scale_conflict == "sheet":
        return Flag.SCALE_CONFLICT
    msg = (
        f"the {source} says pixel_size_um = {pixel_size_um:g}, the file itself says {said_um:g} um "
        f"({raw.file_pixel_size_source}): more than {CONTRADICTION:.0%} apart. Correct the wrong one, or set "
        'scale_conflict = "sheet" in [scale] to use the typed one.'
    )
    raise ScaleError(msg)


def _uncertainty(typed: TypedScale, settings: ScaleSettings, source: str) -> float:
    """Return the uncertainty told for this value; one that the study tells for a size of its own is only its own."""
    if typed.pixel_size_se_um is not None:
        return typed.pixel_size_se_um
    is_for_it = source == "study" or settings.pixel_size_um is None
    return settings.pixel_size_se_um if settings.pixel_size_se_um is not None and is_for_it else math.nan
