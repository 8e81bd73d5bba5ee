"""DICOM by pydicom (extra `dicom`), from bytes to whole planes or an error; no tag beside a short list is ever read.

Headers hold names, dates and places of a patient in hundreds of tags, private ones among them. So the parser is told
which tags to keep (`TAGS`, all of them numbers or code words about pixels and optics), and of what it raises only the
kind is passed on. Tags and their meaning: DICOM PS3.3, C.7.6.3 (image pixel), C.8.17.2 (ophthalmic photography), 10.7
(pixel spacing and its calibration).
"""

import io
import logging
import math
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import numpy as np

from vasohm.arrays import AnyArray
from vasohm.errors import (
    NotAnImageError,
    ReadError,
    ScaleError,
    TruncatedError,
    UnsupportedPixelsError,
    VasohmError,
)
from vasohm.flags import Flag
from vasohm.image.decoded import NO_SCALE, Decoded, FileScale, Subject, invert, refuse_too_large
from vasohm.image.file_scale import SQUARE_WITHIN
from vasohm.units import UM_PER_MM

if TYPE_CHECKING:
    from pydicom import Dataset

TAGS = (
    "SamplesPerPixel",
    "PhotometricInterpretation",
    "PlanarConfiguration",
    "NumberOfFrames",
    "Rows",
    "Columns",
    "BitsAllocated",
    "BitsStored",
    "HighBit",
    "PixelRepresentation",
    "RescaleSlope",
    "RescaleIntercept",
    "ExtendedOffsetTable",
    "ExtendedOffsetTableLengths",
    "PixelData",
    "PixelSpacing",
    "PixelSpacingCalibrationType",
    "PixelAspectRatio",
    "HorizontalFieldOfView",
    "AxialLengthOfTheEye",
    "ImageLaterality",
    "Laterality",
    "BurnedInAnnotation",
)
DEFLATED = b"1.2.840.10008.1.2.1.99"  # a transfer syntax that inflates the whole file without bound
META_BYTES = 2000  # within which the transfer syntax stands
GREY = {"MONOCHROME1", "MONOCHROME2"}  # MONOCHROME1: white is zero
COLOUR = {"RGB", "YBR_FULL", "YBR_FULL_422", "YBR_ICT", "YBR_RCT"}
# Nominal: it holds at the centre of the field and for an average eye. Common practice, no source.
SPACING_REL_SE = 0.05
MM_PER_DEG = 0.29  # of the retina of an average eye near the axis
FIELD_WITHIN = 0.15  # between field of view and pixel spacing


def decode_dicom(data: bytes, limit_px: float) -> Decoded:
    """Decode all frames of a DICOM file.

    Parameters
    ----------
    data : the file.
    limit_px : more declared pixels, all frames together, are refused before decoding.

    Raises
    ------
    ReadError, ScaleError : or one of their kinds. What the parser itself raises is told by its kind only, since its
        words may hold a patient's.
    """
    try:
        from pydicom import dcmread  # noqa: PLC0415  an optional dependency
    except ImportError as error:
        msg = 'is a DICOM file, which needs one package more: pip install "vasohm[dicom]".'
        raise UnsupportedPixelsError(msg) from error
    if DEFLATED in data[:META_BYTES]:
        msg = "it is a deflated DICOM file. Save it without compression of the whole file."
        raise UnsupportedPixelsError(msg)
    with _silence():
        try:
            held = dcmread(io.BytesIO(data), specific_tags=list(TAGS))
            planes = _planes(held, len(data), limit_px)
            scale = _scale(held)
            subject, subject_notes = _subject(held, planes.shape[2], scale)
        except (VasohmError, MemoryError):
            raise
        except EOFError:
            msg = "the file ends before its pixels do."
            raise TruncatedError(msg) from None
        except Exception as error:  # noqa: BLE001  parsers raise whatever they like
            msg = f"the DICOM cannot be decoded ({type(error).__name__})."
            raise ReadError(msg) from None
        inverted = held.PhotometricInterpretation == "MONOCHROME1"
        bits = int(held.BitsStored) - int(held.get("PixelRepresentation", 0))
    notes = subject_notes
    if inverted:
        planes = invert(planes, bits)
        notes += ("stored with white as zero: inverted, so that bigger is brighter",)
    return Decoded(
        planes, planes.ndim == 4, bits, scale, oriented=False, notes=notes, inverted=inverted, subject=subject
    )


def _planes(held: "Dataset", n_bytes: int, limit_px: float) -> AnyArray:
    from pydicom.pixels.decoders.base import get_decoder  # noqa: PLC0415

    if "PixelData" not in held or not all(name in held for name in ("Rows", "Columns", "BitsAllocated", "BitsStored")):
        msg = "it is a DICOM file without a picture."
        raise NotAnImageError(msg)
    rows, columns, n_frames = int(held.Rows), int(held.Columns), int(held.get("NumberOfFrames") or 1)
    samples = int(held.get("SamplesPerPixel", 1))
    refuse_too_large(columns, rows, n_frames, limit_px)
    _check_samples(held, samples)
    syntax = held.file_meta.TransferSyntaxUID
    if not syntax.is_encapsulated:
        stored = 2 if held.PhotometricInterpretation == "YBR_FULL_422" else samples
        needed = rows * columns * n_frames * stored * int(held.BitsAllocated) // 8
        if len(held.PixelData) < needed:
            msg = f"the file ends at byte {n_bytes}: it holds {len(held.PixelData)} of {needed} bytes of pixels."
            raise TruncatedError(msg)
    decoder = get_decoder(syntax)
    if not decoder.is_available:
        msg = f"its compression ({syntax.name}) needs a decoder that is not here. Save it without compression."
        raise UnsupportedPixelsError(msg)
    pixels, facts = decoder.as_array(held)  # with colours as red, green and blue, whatever they were stored as
    if samples == 3 and facts["photometric_interpretation"] != "RGB":
        msg = f"its colours came out as {facts['photometric_interpretation']}. Save it as RGB."
        raise UnsupportedPixelsError(msg)
    shape = (n_frames, rows, columns, *((3,) if samples == 3 else ()))
    if math.prod(shape) != pixels.size:
        msg = f"its pixels are {pixels.shape} where {shape} were declared: the file is damaged or cut short."
        raise TruncatedError(msg)
    pixels = np.array(pixels, dtype=pixels.dtype.newbyteorder("=")).reshape(shape)
    bits = int(held.BitsStored)
    if pixels.dtype.kind == "u" and bits < int(held.BitsAllocated):
        pixels &= pixels.dtype.type(2**bits - 1)  # older writers keep overlays in the bits above
    return pixels


def _check_samples(held: "Dataset", samples: int) -> None:
    colours = held.get("PhotometricInterpretation", "")
    if (samples, True) not in {(1, colours in GREY), (3, colours in COLOUR)}:
        known = colours if isinstance(colours, str) and colours in {"PALETTE COLOR", *COLOUR, *GREY} else "unknown"
        msg = f"its colours are {known} with {samples} sample(s) a pixel. Save it as RGB or grey."
        raise UnsupportedPixelsError(msg)
    if int(held.BitsAllocated) not in {8, 16, 32} or not 1 <= int(held.BitsStored) <= int(held.BitsAllocated):
        msg = f"its samples have {held.BitsStored} of {held.BitsAllocated} bits. Save it with 8, 16 or 32 bits."
        raise UnsupportedPixelsError(msg)
    if float(held.get("RescaleSlope") or 1) != 1 or float(held.get("RescaleIntercept") or 0) != 0:
        msg = "its stored numbers are no brightness (a rescale slope or intercept). Save it with plain pixels."
        raise UnsupportedPixelsError(msg)


def _scale(held: "Dataset") -> FileScale:
    """Pixel Spacing is row then column, in mm; spacings of the detector or of a scanned film are never read."""
    spacing = _numbers(held, "PixelSpacing")
    if not spacing:
        aspect = _numbers(held, "PixelAspectRatio")
        if len(aspect) == 2 and aspect[0] != aspect[1]:
            msg = (
                f"its pixels are not square (dicom: aspect {aspect[0]:g} to {aspect[1]:g}). Resample to square pixels."
            )
            raise ScaleError(msg)
        return NO_SCALE
    row_um, column_um = (value * UM_PER_MM for value in spacing) if len(spacing) == 2 else (math.nan, math.nan)
    if not (0 < row_um < math.inf and 0 < column_um < math.inf):
        return FileScale(None, "", ("pixel size of the file (dicom) is not two positive lengths: ignored",))
    if abs(row_um / column_um - 1) > SQUARE_WITHIN:
        msg = (
            f"its pixels are not square (dicom: {column_um:.6g} x {row_um:.6g} um, anisotropic). Resample the picture "
            "to square pixels."
        )
        raise ScaleError(msg)
    kind = held.get("PixelSpacingCalibrationType", "")
    how = {"GEOMETRY": "by the geometry of the device", "FIDUCIAL": "by an object of known size"}
    note = f"pixel spacing of the file (dicom) calibrated {how.get(str(kind), 'in a way that the file does not tell')}"
    return FileScale(math.sqrt(row_um * column_um), "dicom", (note,), SPACING_REL_SE)


def _subject(held: "Dataset", width_px: int, scale: FileScale) -> tuple[Subject, tuple[str, ...]]:
    """What the file says about the eye, and whether text is drawn into the picture."""
    flags = Flag.NONE
    notes: tuple[str, ...] = ()
    side = {"L": "left", "R": "right"}.get(str(held.get("ImageLaterality") or held.get("Laterality") or ""), "")
    length_mm = next(iter(_numbers(held, "AxialLengthOfTheEye")), None)
    if str(held.get("BurnedInAnnotation", "")) == "YES":
        flags |= Flag.BURNED_IN
    field_deg = next(iter(_numbers(held, "HorizontalFieldOfView")), 0.0)
    if scale.pixel_size_um and field_deg > 0:
        told_mm = width_px * scale.pixel_size_um / UM_PER_MM
        if abs(told_mm / (field_deg * MM_PER_DEG) - 1) > FIELD_WITHIN:
            flags |= Flag.FIELD_ANGLE
            notes = (f"a field of {field_deg:g} degrees does not fit {told_mm:.4g} mm of retina across the picture",)
    if length_mm is not None:
        notes += (f"axial length of the file (dicom): {length_mm:g} mm",)
    return Subject(side, length_mm, flags), notes


def _numbers(held: "Dataset", name: str) -> list[float]:
    value: Any = held.get(name)
    if value is None or value == "":
        return []
    return [float(one) for one in ([value] if isinstance(value, int | float) else value)]


@contextmanager
def _silence() -> Iterator[None]:
    """Keep the parser's log, which quotes values, away from ours."""
    log = logging.getLogger("pydicom")
    before = log.disabled
    log.disabled = True
    try:
        yield
    finally:
        log.disabled = before
