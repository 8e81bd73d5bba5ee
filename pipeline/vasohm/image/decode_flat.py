"""PNG, JPEG and BMP by Pillow, from bytes to a whole picture or an error."""

import io
import struct
import zlib
from collections.abc import Callable, Mapping
from typing import IO

import numpy as np
from PIL import Image, ImageFile
from PIL.BmpImagePlugin import BmpImageFile
from PIL.JpegImagePlugin import JpegImageFile
from PIL.PngImagePlugin import PngImageFile

from vasohm.arrays import AnyArray
from vasohm.errors import ReadError, TruncatedError, UnsupportedPixelsError
from vasohm.image.decoded import NO_SCALE, Decoded, expand_palette, refuse_too_large

# The formats' own classes, since Image.open has a pixel limit of its own that is not the study's.
READERS: Mapping[str, Callable[[IO[bytes]], ImageFile.ImageFile]] = {
    "PNG": PngImageFile,
    "JPEG": JpegImageFile,
    "BMP": BmpImageFile,
}
MODES = {"1": 1, "L": 8, "I;16": 16, "I": 16, "P": 8, "RGB": 8, "LA": 8, "RGBA": 8}  # mode -> bits of a sample
ORIENTATION = 0x0112
PNG_SIGNATURE_BYTES = 8
GREY = 0  # PNG colour type


def decode_flat(data: bytes, kind: str, limit_px: float, *, expand_palettes: bool) -> Decoded:
    """Decode one picture.

    Parameters
    ----------
    data : the file.
    kind : PNG, JPEG or BMP.
    limit_px : more declared pixels are refused before decoding.
    expand_palettes : False keeps the indices of a palette, as label images mean them.

    Raises
    ------
    ReadError : or one of its kinds; Pillow's own exceptions pass through.
    """
    if ImageFile.LOAD_TRUNCATED_IMAGES:
        msg = "PIL.ImageFile.LOAD_TRUNCATED_IMAGES is set, which lets half pictures pass. Set it to False."
        raise ReadError(msg)
    if kind == "PNG":
        _check_png(data)
    picture = READERS[kind](io.BytesIO(data))
    refuse_too_large(picture.width, picture.height, 1, limit_px)
    if picture.mode not in MODES:
        msg = f"its pixels are {picture.mode}, which have no one brightness. Save it as RGB or grey."
        raise UnsupportedPixelsError(msg)
    n_frames = getattr(picture, "n_frames", 1)
    if n_frames > 1:
        msg = f"it is animated ({n_frames} frames). Save the frames as a TIFF stack."
        raise UnsupportedPixelsError(msg)
    picture.load()
    notes = _dpi_notes(picture)
    oriented, orientation_notes = _orientation(picture)
    pixels, is_colour, colour_notes = _colours(picture, expand_palettes=expand_palettes)
    return Decoded(
        planes=pixels[np.newaxis],
        is_colour=is_colour,
        bits=MODES[picture.mode],
        scale=NO_SCALE,
        oriented=oriented,
        notes=notes + orientation_notes + colour_notes,
    )


def _colours(picture: Image.Image, *, expand_palettes: bool) -> tuple[AnyArray, bool, tuple[str, ...]]:
    stored = np.asarray(picture)
    if picture.mode == "1":
        return stored.astype(np.uint8), False, ()
    if picture.mode == "I":  # how Pillow before 11 names 16-bit grey
        return stored.astype(np.uint16), False, ()
    if picture.mode == "P":
        if not expand_palettes:
            return stored, False, ("palette indices taken as labels",)
        palette = np.array(picture.getpalette("RGB"), dtype=np.uint8).reshape(-1, 3)
        pixels, is_colour = expand_palette(stored, palette)
        return pixels, is_colour, ()
    if picture.mode in {"LA", "RGBA"}:
        opaque = float(np.mean(stored[..., -1] == 255))
        note = f"alpha channel dropped ({opaque:.1%} of the pixels are opaque)"
        return (stored[..., 0] if picture.mode == "LA" else stored[..., :3]), picture.mode == "RGBA", (note,)
    return stored, picture.mode == "RGB", ()


def _check_png(data: bytes) -> None:
    """Walk the chunks: Pillow does not verify the checksums of the pixels, nor miss the end of the file."""
    at, kind = PNG_SIGNATURE_BYTES, b""
    while kind != b"IEND":
        if at + 12 > len(data):
            msg = f"the file ends at byte {len(data)}, before its last chunk."
            raise TruncatedError(msg)
        (length,) = struct.unpack_from(">I", data, at)
        kind, end = data[at + 4 : at + 8], at + 12 + length
        if end > len(data):
            msg = f"the file ends at byte {len(data)}, but its chunk {kind!r} runs to byte {end}."
            raise TruncatedError(msg)
        is_needed = not kind[0] & 0x20  # upper case: a chunk that no decoder may skip
        if is_needed and zlib.crc32(data[at + 4 : end - 4]) != struct.unpack_from(">I", data, end - 4)[0]:
            msg = f"the checksum of its chunk {kind!r} at byte {at} is wrong: the file is damaged."
            raise ReadError(msg)
        if kind == b"IHDR" and data[at + 16] == 16 and data[at + 17] != GREY:
            msg = "it is a 16-bit PNG with colours or alpha, which would be cut to 8 bits. Save it as TIFF."
            raise UnsupportedPixelsError(msg)
        at = end


def _orientation(picture: Image.Image) -> tuple[bool, tuple[str, ...]]:
    try:
        tag = picture.getexif().get(ORIENTATION, 1)
    except Exception:  # noqa: BLE001 - broken metadata beside a sound picture is no reason to lose the picture
        return False, ("EXIF metadata cannot be parsed: whether the picture has an orientation tag is not known",)
    return tag != 1, ((f"orientation tag {tag}: the picture was not turned",) if tag != 1 else ())


def _dpi_notes(picture: Image.Image) -> tuple[str, ...]:
    dpi = picture.info.get("dpi") if picture.info.get("jfif_unit", 1) else None  # 0: an aspect ratio only
    return (f"file says {float(dpi[0]):.4g} dpi: ignored, screens and scanners write it",) if dpi else ()
