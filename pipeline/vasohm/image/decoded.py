"""What a decoder hands to the reader: planes as stored, and what the file says about them."""

import math
from dataclasses import dataclass

import numpy as np

from vasohm.arrays import AnyArray
from vasohm.errors import TooLargeError
from vasohm.flags import Flag


@dataclass(frozen=True, slots=True)
class FileScale:
    """The pixel size that a file carries and means: None where it carries none."""

    pixel_size_um: float | None
    source: str  # ome | imagej | dicom | ""
    notes: tuple[str, ...]
    rel_se: float = math.nan  # relative standard uncertainty that such a carrier has; NaN where it is not known


@dataclass(frozen=True, slots=True)
class Subject:
    """What the file says about whom it shows, beyond the pixels; never a name."""

    side: str  # of the eye: left | right | ""
    axial_length_mm: float | None
    flags: Flag


NO_SUBJECT = Subject("", None, Flag.NONE)


@dataclass(frozen=True, slots=True, eq=False)
class Decoded:
    """A whole file: `planes` is (n, h, w) or (n, h, w, channels), bigger is brighter, as stored, never turned."""

    planes: AnyArray
    is_colour: bool  # the channels are red, green and blue
    bits: int | None  # of a sample, its sign apart; None for floats
    scale: FileScale
    oriented: bool  # a tag asks viewers to turn the picture
    notes: tuple[str, ...]
    inverted: bool = False  # the file stores white as zero
    subject: Subject = NO_SUBJECT


NO_SCALE = FileScale(None, "", ())


def invert(planes: AnyArray, bits: int) -> AnyArray:
    """Exchange black and white; what was exchanged comes back."""
    if planes.dtype.kind == "i":
        return ~planes  # the ends of a signed range change places
    return planes.dtype.type(2**bits - 1) - planes


def refuse_too_large(width: int, height: int, n_planes: int, limit_px: float) -> None:
    """Stop before decoding where a file declares more pixels than the study allows.

    Raises
    ------
    TooLargeError : width x height x planes is more than `limit_px`.
    """
    declared = width * height * n_planes
    if declared > limit_px:
        planes = f" x {n_planes} planes" if n_planes > 1 else ""
        msg = (
            f"declares {width} x {height} px{planes} = {declared / 1e6:.4g} megapixels, more than max_megapixels = "
            f"{limit_px / 1e6:.4g}. Raise max_megapixels in [image] if the picture is really that large."
        )
        raise TooLargeError(msg)


def expand_palette(indices: AnyArray, palette: AnyArray) -> tuple[AnyArray, bool]:
    """Replace palette indices by their colours.

    Parameters
    ----------
    indices : int, any shape.
    palette : (n, 3) red, green and blue of each index.

    Returns
    -------
    The picture, and whether it has colours: a palette of greys gives the shape of `indices`, any other one axis more.
    """
    used = palette[: int(indices.max(initial=0)) + 1]
    if np.all(used == used[:, :1]):
        return palette[:, 0][indices], False
    return palette[indices], True
