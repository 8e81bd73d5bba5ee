"""From a file to pixels. No science here."""

import hashlib
import math
import re
import stat
import warnings
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from vasohm.arrays import AnyArray, BoolArray, IntArray, freeze
from vasohm.errors import (
    InputMissingError,
    MaskError,
    MemoryLimitError,
    NotAnImageError,
    ReadError,
    TooLargeError,
    TruncatedError,
    UnsupportedPixelsError,
    VasohmError,
)
from vasohm.flags import Flag
from vasohm.image.blocks import is_on_disk, kept_on_disk, release
from vasohm.image.decode_dicom import decode_dicom
from vasohm.image.decode_flat import decode_flat
from vasohm.image.decode_tiff import decode_tiff
from vasohm.image.decoded import NO_SUBJECT, Decoded, Subject, invert

MAGIC = {
    b"II*\0": "TIFF",
    b"MM\0*": "TIFF",
    b"II+\0": "TIFF",  # BigTIFF
    b"MM\0+": "TIFF",
    b"\x89PNG\r\n\x1a\n": "PNG",
    b"\xff\xd8\xff": "JPEG",
    b"BM": "BMP",
}
OTHER_MAGIC = {
    b"GIF8": "a GIF",
    b"RIFF": "a WebP or another RIFF file",
    b"\0\0\0\x0cjP  ": "a JPEG 2000",
    b"\x89HDF": "an HDF5 file",
    b"%PDF": "a PDF",
    b"PK\x03\x04": "a ZIP archive",
    b"\x1f\x8b": "a gzip archive",
}
DICOM_AT, DICOM_MAGIC = 128, b"DICM"
BYTES_PER_PIXEL = 32  # the most that a readable file needs: four samples of 64 bits
HEADER_BYTES = 1_000_000
USUAL_BITS = (8, 10, 12, 14, 16, 24, 32)  # of cameras and files
MASK_LIMIT = 4  # a mask of more than so many times the image's pixels is refused before decoding
LABEL_NEIGHBOURS = 0.3  # in label images fewer neighbouring pixels than this share differ, in photographs more
MOST_LABEL = 3
MESSAGE_CHARS = 200
COPY_AGAIN = " It is cut short: copy it again from where it came."
CUT_WORDS = re.compile("truncated|incomplete|ended before|failed to read|premature|unexpected end", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class ReadSettings:
    """How a file is decoded."""

    plane: int | str  # of a stack: "max", "mean" or a number counted from 0
    max_megapixels: float  # more declared pixels are refused before decoding
    channel: int | str  # files whose channels are not red, green and blue need a number
    block_megapixels: float = math.inf  # larger pictures lie on disk and are worked on in blocks of so many


@dataclass(frozen=True, slots=True, eq=False)
class RawImage:
    """Pixels as stored, (h, w), (h, w, 3) or (h, w, channels), bigger is brighter, never turned.

    `white_level` is the greatest value that the file could hold (255, 4095, 65535), None for floats.
    """

    pixels: AnyArray
    white_level: float | None
    sha256: str
    file_pixel_size_um: float | None
    file_pixel_size_source: str  # ome | imagej | dicom | "" where the file says none
    notes: tuple[str, ...]  # facts for record.json: ignored dots per inch, orientation, plane taken
    flags: Flag
    is_maximum: bool = False  # each pixel is the brightest of several planes
    block_px: int = 0  # edge of the blocks that a large picture is worked on in; 0: in one piece
    file_pixel_size_rel_se: float = math.nan  # NaN where such a file tells none
    subject: Subject = NO_SUBJECT

    def __post_init__(self) -> None:
        freeze(self)


def read_image(path: Path, settings: ReadSettings) -> RawImage:
    """Read an image file: TIFF and OME-TIFF, PNG, JPEG, BMP or DICOM, told by its first bytes.

    Parameters
    ----------
    path : the file; its bytes are read once, and the hash is of the bytes that were decoded.
    settings : plane of a stack, size limit, channel.

    Returns
    -------
    The whole picture as stored: never turned, alpha dropped, palettes expanded, one plane.

    Raises
    ------
    InputMissingError, NotAnImageError, TruncatedError, TooLargeError, UnsupportedPixelsError, ReadError : the file is
        missing, no image, cut short, larger than `max_megapixels`, of a sample type without brightness, or damaged.
    ScaleError : the file says that its pixels are not square.
    """
    limit_px = settings.max_megapixels * 1e6
    data = _file_bytes(path, HEADER_BYTES + BYTES_PER_PIXEL * limit_px)
    memory_px = settings.block_megapixels * 1e6
    decoded = _decode(path, data, (limit_px, memory_px), expand_palettes=True)
    _check_channels(path, decoded, settings.channel)
    pixels, plane_notes = _one_plane(path, decoded.planes, settings.plane)
    raw = RawImage(
        pixels=pixels,
        white_level=_white_level(decoded),
        sha256=hashlib.sha256(data).hexdigest(),
        file_pixel_size_um=decoded.scale.pixel_size_um,
        file_pixel_size_source=decoded.scale.source,
        notes=decoded.notes + decoded.scale.notes + plane_notes,
        flags=(Flag.ORIENTATION_TAG if decoded.oriented else Flag.NONE) | decoded.subject.flags,
        is_maximum=settings.plane == "max" and len(decoded.planes) > 1,
        file_pixel_size_rel_se=decoded.scale.rel_se,
        subject=decoded.subject,
    )
    return in_blocks(raw, settings.block_megapixels)


def in_blocks(raw: RawImage, block_megapixels: float) -> RawImage:
    """Lay a picture of more than so many megapixels on disk, to be worked on in blocks; a smaller one stays as it is.

    Raises
    ------
    ImageError : the disk for temporary files has not room enough.
    """
    if raw.pixels.shape[0] * raw.pixels.shape[1] <= block_megapixels * 1e6:
        return raw
    pixels = raw.pixels if is_on_disk(raw.pixels) else kept_on_disk(raw.pixels)
    release(pixels)
    return replace(raw, pixels=pixels, block_px=int(np.sqrt(block_megapixels * 1e6)))


def read_mask(path: Path, shape: tuple[int, int]) -> BoolArray:
    """Read a vessel or field-of-view mask made elsewhere: bool, 0 and one other value, or labels; nonzero is inside.

    Parameters
    ----------
    path : the file, in any format that an image may have.
    shape : (h, w) of the image's stored array, which the mask must have.

    Raises
    ------
    MaskError : another size, a colour picture, a stack, or greys between black and white.
    ReadError : or one of its kinds, as `read_image`.
    """
    values = _read_single(path, shape, expand_palettes=True)
    inside = values != 0
    n_between = _n_between(values, inside)
    if n_between:
        msg = (
            f"{shown(path)}: {n_between} of {values.size} pixels lie between black and white; a mask is bool, 0 and 1, "
            "0 and 255, or labels. Save it without smoothing and without lossy compression."
        )
        raise MaskError(msg)
    return np.asarray(inside, dtype=np.bool_)


def read_labels(path: Path, shape: tuple[int, int]) -> IntArray:
    """Read a class file: 1 arteriole, 2 venule, 3 capillary, 0 not said; of a palette image the indices count.

    Parameters
    ----------
    path : the file, in any format that an image may have.
    shape : (h, w) of the image's stored array, which the labels must have.

    Raises
    ------
    MaskError : another size, a colour picture, a stack, or values other than 0 to 3.
    ReadError : or one of its kinds, as `read_image`.
    """
    values = _read_single(path, shape, expand_palettes=False)
    wrong = ~np.isin(values, range(MOST_LABEL + 1))
    if wrong.any():
        found = ", ".join(f"{value:g}" for value in np.unique(values[wrong])[:5])
        msg = (
            f"{shown(path)}: {int(wrong.sum())} pixels have values that are no class ({found}, ...). "
            "Use 0 not said, 1 arteriole, 2 venule, 3 capillary."
        )
        raise MaskError(msg)
    return values.astype(np.int64)


def shown(path: Path) -> str:
    """Name of a file for messages: without its folder, control characters and undecodable bytes escaped."""
    return "".join(c if c.isprintable() else ascii(c)[1:-1] for c in path.name)


def _file_bytes(path: Path, most_bytes: float) -> bytes:
    name = shown(path)
    try:
        status = path.stat()
        if not stat.S_ISREG(status.st_mode):
            msg = f"{name}: is a {_kind_of_entry(status.st_mode)}, not a file."
            raise NotAnImageError(msg)
        if status.st_size > most_bytes:
            msg = (
                f"{name}: has {status.st_size / 1e6:.0f} MB, more than any picture within max_megapixels needs. "
                "Raise max_megapixels in [image] if the picture is really that large."
            )
            raise TooLargeError(msg)
        data = path.read_bytes()
    except (FileNotFoundError, NotADirectoryError) as error:
        msg = f"{name}: no such file. Check its name and folder in the image sheet."
        raise InputMissingError(msg) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        msg = f"{name}: cannot be read: {reason}."
        raise ReadError(msg) from error
    if not data:
        msg = f"{name}: is empty (0 bytes)."
        raise NotAnImageError(msg)
    return data


def _kind_of_entry(mode: int) -> str:
    kinds = {stat.S_IFDIR: "folder", stat.S_IFIFO: "pipe", stat.S_IFSOCK: "socket"}
    return kinds.get(stat.S_IFMT(mode), "device")


def _decode(path: Path, data: bytes, limits_px: tuple[float, float], *, expand_palettes: bool) -> Decoded:
    """Turn bytes into planes; whatever a decoder raises becomes one line that names the file.

    `limits_px`: more pixels are refused, and more are decoded onto disk where the format allows it.
    """
    name = shown(path)
    kind = next((kind for magic, kind in MAGIC.items() if data.startswith(magic)), None)
    if data[DICOM_AT : DICOM_AT + len(DICOM_MAGIC)] == DICOM_MAGIC:
        kind = "DICOM"  # what stands before its mark is anything: files that are a TIFF too are allowed
    if kind is None:
        msg = f"{name}: {_guess(data)}. Images are read from TIFF, PNG, JPEG, BMP and DICOM."
        raise NotAnImageError(msg)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            if kind == "DICOM":
                return decode_dicom(data, limits_px[0])
            if kind == "TIFF":
                return decode_tiff(data, limits_px, expand_palettes=expand_palettes)
            return decode_flat(data, kind, limits_px[0], expand_palettes=expand_palettes)
    except VasohmError as error:
        msg = f"{name}: {error}{COPY_AGAIN if isinstance(error, TruncatedError) else ''}"
        raise type(error)(msg) from error
    except MemoryError as error:
        msg = f"{name}: there is not enough memory to decode it. Use fewer workers or a machine with more memory."
        raise MemoryLimitError(msg) from error
    except Exception as error:
        text = re.sub(r"\s+", " ", str(error)).strip()[:MESSAGE_CHARS] or type(error).__name__
        if "imagecodecs" in text:
            text = re.sub(r"<\w+\.(\w+): \d+>", r"\1", text)
            msg = f'{name}: its compression needs more decoders ({text}): pip install "vasohm[codecs]".'
            raise UnsupportedPixelsError(msg) from error
        is_cut = CUT_WORDS.search(text)
        msg = f"{name}: the {kind} cannot be decoded: {text}.{COPY_AGAIN if is_cut else ''}"
        raise (TruncatedError if is_cut else ReadError)(msg) from error


def _guess(data: bytes) -> str:
    other = next((kind for magic, kind in OTHER_MAGIC.items() if data.startswith(magic)), None)
    if other is not None:
        return f"is {other}"
    head = data[:40]
    looks_like_text = all(32 <= byte < 127 or byte in b"\t\r\n" for byte in head)
    return (
        f"looks like text: {head.decode('ascii')!r}"
        if looks_like_text
        else f"begins with the bytes {head[:8].hex(' ')}"
    )


def _check_channels(path: Path, decoded: Decoded, channel: int | str) -> None:
    if decoded.planes.ndim == 3 or decoded.is_colour:
        return
    n = decoded.planes.shape[3]
    if not isinstance(channel, int) or channel >= n:
        msg = (
            f"{shown(path)}: has {n} channels that are not red, green and blue; channel = {channel!r} names none of "
            f"them. Set channel in [image] to a number from 0 to {n - 1}."
        )
        raise UnsupportedPixelsError(msg)


def _one_plane(path: Path, planes: AnyArray, plane: int | str) -> tuple[AnyArray, tuple[str, ...]]:
    n = len(planes)
    if isinstance(plane, int):
        if plane >= n:
            msg = f"{shown(path)}: plane = {plane}, but the file has {n} planes, counted from 0. Change [image] plane."
            raise ReadError(msg)
        taken = planes[plane]
    elif n == 1:
        return planes[0] if is_on_disk(planes) else np.ascontiguousarray(planes[0]), ()
    else:
        taken = planes.max(axis=0) if plane == "max" else planes.mean(axis=0, dtype=np.float64)
    return np.ascontiguousarray(taken), (f"plane: {plane} of {n}",)


def _white_level(decoded: Decoded) -> float | None:
    """Full scale of the camera: the smallest usual depth that holds all values, since 12 bits often lie in 16."""
    if decoded.bits is None:
        return None
    depths = [bits for bits in USUAL_BITS if bits < decoded.bits] if decoded.bits > USUAL_BITS[0] else []
    greatest = int(decoded.planes.max(initial=0))
    return float(next((2**bits - 1 for bits in depths if greatest < 2**bits), 2**decoded.bits - 1))


def _read_single(path: Path, shape: tuple[int, int], *, expand_palettes: bool) -> AnyArray:
    """Read one grey plane of the asked shape, with the numbers that the file stores."""
    limit_px = float(MASK_LIMIT * shape[0] * shape[1])
    try:
        data = _file_bytes(path, HEADER_BYTES + BYTES_PER_PIXEL * limit_px)
        decoded = _decode(path, data, (limit_px, limit_px), expand_palettes=expand_palettes)
    except TooLargeError as error:
        msg = f"{shown(path)}: is more than {MASK_LIMIT} times as large as its image of {_size(shape)}."
        raise MaskError(msg) from error
    if len(decoded.planes) != 1:
        msg = f"{shown(path)}: is a stack of {len(decoded.planes)} planes; save the one that belongs to the image."
        raise MaskError(msg)
    values = decoded.planes[0]
    if values.ndim == 3:
        if not np.all(values == values[..., :1]):
            msg = f"{shown(path)}: is a colour picture; save it as grey, with numbers instead of colours."
            raise MaskError(msg)
        values = values[..., 0]
    values = np.asarray(values)
    if decoded.inverted and decoded.bits is not None:
        values = invert(values, decoded.bits)  # a mask is numbers: 1 is inside, however viewers show it
    if values.shape != shape:
        turned = " That equals the rotated size: was it saved turned?" if values.shape == shape[::-1] else ""
        msg = f"{shown(path)}: is {_size(values.shape)}, but its image is {_size(shape)} as stored.{turned}"
        raise MaskError(msg)
    return values


def _size(shape: tuple[int, ...]) -> str:
    return f"{shape[1]} x {shape[0]} px"


def _n_between(values: AnyArray, inside: BoolArray) -> int:
    """Count the pixels that are neither background nor full, where `values` are no labels; else 0."""
    if values.dtype.kind == "f" and not np.all(np.isfinite(values)):
        return int(np.sum(~np.isfinite(values)))
    full = values.max(initial=0)
    n_between = int(np.sum(inside & (values != full)))
    if values.dtype.kind == "f" or full in {255, 65535} or n_between == 0 or values.min() < 0:
        return n_between
    both = inside[:, 1:] & inside[:, :-1]
    differ = (values[:, 1:] != values[:, :-1]) & both
    return n_between if differ.sum() > LABEL_NEIGHBOURS * both.sum() else 0
