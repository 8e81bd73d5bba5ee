"""TIFF and OME-TIFF by tifffile, from bytes to whole planes or an error."""

import io
import logging
import math
import struct
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace

import numpy as np
from tifffile import PHOTOMETRIC, TiffFile, TiffPage, TiffPageSeries

from vasohm.arrays import AnyArray
from vasohm.errors import NotAnImageError, ReadError, TruncatedError, UnsupportedPixelsError
from vasohm.image.blocks import on_disk
from vasohm.image.decoded import NO_SCALE, Decoded, FileScale, expand_palette, invert, refuse_too_large
from vasohm.image.file_scale import imagej_scale, ome_scale, refuse_entities

DTYPES = frozenset({"bool", "uint8", "uint16", "uint32", "int8", "int16", "int32", "float32", "float64"})
PHOTOMETRIC_TAG, ORIENTATION_TAG, X_RESOLUTION_TAG, Y_RESOLUTION_TAG, RESOLUTION_UNIT_TAG = 262, 274, 282, 283, 296
DPI_PER_UNIT = {2: 1.0, 3: 2.54}  # inch, centimetre
ALPHA = {1, 2}  # values of ExtraSamples
COLOUR = {PHOTOMETRIC.RGB, PHOTOMETRIC.YCBCR}
JPEGS = {6, 7, 33007, 34892}  # compressions whose YCbCr tifffile turns into RGB
BRIGHTNESS = {PHOTOMETRIC.MINISWHITE, PHOTOMETRIC.MINISBLACK, PHOTOMETRIC.PALETTE} | COLOUR
TYPE_BYTES = {1: 1, 2: 1, 3: 2, 4: 4, 5: 8, 6: 1, 7: 1, 8: 2, 9: 4, 10: 8, 11: 4, 12: 8, 13: 4, 16: 8, 17: 8, 18: 8}
STEPS_OF_8_BITS = (257, 256)  # how writers spread 8-bit palettes over the 16 bits of a ColorMap


@dataclass(frozen=True, slots=True)
class _Layout:
    """Where rows, columns, samples and channels lie among the axes of a series; all other axes count planes."""

    y: int
    x: int
    samples: int | None
    channels: int | None
    shape: tuple[int, ...]

    @property
    def colours(self) -> int | None:
        return self.channels if self.samples is None else self.samples

    @property
    def n_planes(self) -> int:
        apart = {self.y, self.x, self.colours}
        return math.prod(size for axis, size in enumerate(self.shape) if axis not in apart)


def decode_tiff(data: bytes, limits_px: tuple[float, float], *, expand_palettes: bool) -> Decoded:
    """Decode the first image of a TIFF with all its planes.

    Parameters
    ----------
    data : the file.
    limits_px : more declared pixels, all planes together, than the first are refused before decoding; more than the
        second are decoded onto disk, one strip or tile after the other.
    expand_palettes : False keeps the indices of a palette, as label images mean them.

    Raises
    ------
    ReadError, ScaleError : or one of their kinds; tifffile's own exceptions pass through.
    """
    _check_directories(data)
    with _silence(), TiffFile(io.BytesIO(data)) as tif:
        first = tif.pages.first
        for text in (first.description, first.description1):
            if text.lstrip().startswith("<"):
                refuse_entities(text)
        series = tif.series[0]
        page = series.keyframe
        _check_samples(page)
        layout = _layout(series)
        refuse_too_large(layout.shape[layout.x], layout.shape[layout.y], layout.n_planes, limits_px[0])
        _check_segments(series, len(data))
        _check_planes(tif, series)
        is_large = layout.shape[layout.x] * layout.shape[layout.y] * layout.n_planes > limits_px[1]
        out = on_disk(series.shape, series.dtype) if is_large else None
        planes = _planes(series.asarray(maxworkers=1, out=out), layout)
        pixels, is_colour, bits, notes = _brightness(planes, page, layout, expand_palettes=expand_palettes)
        scale = _scale(tif, page)
        orientation = page.tags.valueof(ORIENTATION_TAG, 1)
        if orientation != 1:
            notes += (f"orientation tag {orientation}: the picture was not turned",)
        if len(tif.series) > 1:
            notes += (f"first of {len(tif.series)} images in the file; the others were left out",)
    inverted = page.photometric == PHOTOMETRIC.MINISWHITE and PHOTOMETRIC_TAG in page.tags
    return Decoded(pixels, is_colour, bits, scale, orientation != 1, notes, inverted)


def _check_directories(data: bytes) -> None:
    """Follow the chain of directories and their values: a file cut behind its pixels would lose planes or scale."""
    order = "<" if data[:2] == b"II" else ">"
    is_big = data[2:4] in {b"+\0", b"\0+"}
    count, entry, link, at = ("Q", "HHQ8s", "Q", 8) if is_big else ("H", "HHI4s", "I", 4)
    entries = struct.Struct(order + entry)
    seen: set[int] = set()
    try:
        (offset,) = struct.unpack_from(order + link, data, at)
        while offset:
            if offset in seen:
                msg = "its directories form a ring: the file is damaged."
                raise ReadError(msg)
            seen.add(offset)
            (n_entries,) = struct.unpack_from(order + count, data, offset)
            start = offset + struct.calcsize(count)
            end = start + n_entries * entries.size
            (offset,) = struct.unpack_from(order + link, data, end)
            for tag, kind, n_values, value in entries.iter_unpack(data[start:end]):
                n_bytes = n_values * TYPE_BYTES.get(kind, 0)
                if n_bytes > len(value) and struct.unpack(order + link, value)[0] + n_bytes > len(data):
                    msg = f"the file ends at byte {len(data)}, before the value of its tag {tag}."
                    raise TruncatedError(msg)
    except struct.error as error:
        msg = f"the file ends at byte {len(data)}, before the directory of page {len(seen) or 1}."
        raise TruncatedError(msg) from error
    if not seen:
        msg = "it is a TIFF without a page."
        raise NotAnImageError(msg)


def _check_samples(page: TiffPage) -> None:
    kind = str(page.dtype)
    if kind not in DTYPES:
        msg = (
            f"its samples are {kind if page.dtype is not None else 'unknown'} (format {page.sampleformat}, "
            f"{page.bitspersample} bits). Save it as 8, 16 or 32-bit integers or 32 or 64-bit floats."
        )
        raise UnsupportedPixelsError(msg)
    is_raw_ycbcr = page.photometric == PHOTOMETRIC.YCBCR and page.compression not in JPEGS
    if PHOTOMETRIC_TAG in page.tags and (page.photometric not in BRIGHTNESS or is_raw_ycbcr):
        name = getattr(page.photometric, "name", page.photometric)
        msg = f"its colours are {name}, which have no one brightness. Save it as RGB or grey."
        raise UnsupportedPixelsError(msg)
    if not isinstance(page.bitspersample, int):
        msg = f"its channels have different depths ({page.bitspersample} bits). Save it as 8 or 16-bit RGB."
        raise UnsupportedPixelsError(msg)


def _layout(series: TiffPageSeries) -> _Layout:
    axes, shape = series.axes, tuple(series.shape)
    if axes.count("Y") != 1 or axes.count("X") != 1 or 0 in shape or len(axes) != len(shape):
        msg = f"its axes {axes!r} of lengths {shape} are no picture."
        raise NotAnImageError(msg)

    def found(letter: str) -> int | None:
        at = axes.find(letter)
        return at if at >= 0 and shape[at] > 1 else None

    layout = _Layout(axes.index("Y"), axes.index("X"), found("S"), found("C"), shape)
    if layout.samples is not None and layout.channels is not None:
        msg = f"it has {shape[layout.channels]} channels of {shape[layout.samples]} samples each. Save one channel."
        raise UnsupportedPixelsError(msg)
    return layout


def _check_segments(series: TiffPageSeries, n_bytes: int) -> None:
    """Every strip or tile must be there: the decoder would fill missing ones with zeros."""
    page = series.keyframe
    if series.dataoffset is not None:
        end = series.dataoffset + series.nbytes
        if end > n_bytes:
            msg = f"the file ends at byte {n_bytes}, but its pixels run to byte {end}."
            raise TruncatedError(msg)
        return
    expected = math.prod(page.chunked)
    for number, plane in enumerate(series.pages):
        if plane is None:
            msg = f"plane {number} is missing: it may lie in another file of a set. Save the set as one file."
            raise TruncatedError(msg)
        offsets, counts = plane.dataoffsets, plane.databytecounts
        sizes = (page.nbytes,) if page.is_contiguous else counts
        if len(offsets) < expected or len(counts) < expected or 0 in offsets or 0 in counts:
            msg = f"strips or tiles of plane {number} are missing ({expected} expected)."
            raise TruncatedError(msg)
        if any(offset + size > n_bytes for offset, size in zip(offsets, sizes, strict=False)):
            msg = f"the file ends at byte {n_bytes}, before the pixels of plane {number} do."
            raise TruncatedError(msg)


def _check_planes(tif: TiffFile, series: TiffPageSeries) -> None:
    """Compare with the number of planes that the writer's own description declares."""
    held = math.prod(series.shape)
    declared = held
    if tif.imagej_metadata is not None:
        page = series.keyframe
        images = tif.imagej_metadata.get("images", 1)
        samples = page.samplesperpixel if page.planarconfig == 1 else 1
        declared = int(images) * page.imagelength * page.imagewidth * samples
    elif tif.shaped_metadata:
        declared = math.prod(tif.shaped_metadata[0]["shape"])
    if declared > held:
        msg = f"its description declares {declared} samples, but the file holds {held}."
        raise TruncatedError(msg)


def _planes(stored: AnyArray, layout: _Layout) -> AnyArray:
    """Bring the axes to (plane, y, x) or (plane, y, x, colour)."""
    last = [layout.y, layout.x] + ([layout.colours] if layout.colours is not None else [])
    moved = np.moveaxis(stored.reshape(layout.shape), last, range(-len(last), 0))
    return moved.reshape(-1, *moved.shape[-len(last) :])


def _brightness(
    planes: AnyArray, page: TiffPage, layout: _Layout, *, expand_palettes: bool
) -> tuple[AnyArray, bool, int | None, tuple[str, ...]]:
    """Make bigger brighter, expand palettes and part colours from extra samples."""
    photometric = page.photometric
    notes: tuple[str, ...] = ()
    if PHOTOMETRIC_TAG not in page.tags:
        photometric = PHOTOMETRIC.RGB if page.samplesperpixel in {3, 4} else PHOTOMETRIC.MINISBLACK
        notes = (f"no photometric tag: taken for {photometric.name}",)
    if planes.dtype == np.bool_:
        planes = planes.astype(np.uint8)
    bits = _bits(planes, page)
    is_colour = photometric in COLOUR
    if layout.samples is not None:
        n_extra = planes.shape[-1] - (3 if is_colour else 1)
        is_alpha = n_extra > 0 and (
            is_colour or (len(page.extrasamples) == n_extra and set(page.extrasamples) <= ALPHA)
        )
        if is_alpha:
            planes = planes[..., :3] if is_colour else planes[..., 0]
            notes += (f"{n_extra} extra sample(s) of each pixel (alpha) dropped",)
    if is_colour and (layout.samples is None or planes.shape[-1] != 3):
        msg = f"it says RGB, but has {page.samplesperpixel} samples a pixel."
        raise UnsupportedPixelsError(msg)
    if photometric == PHOTOMETRIC.MINISWHITE:
        if bits is None:
            msg = "its samples are floats with white as zero, whose black is not defined. Save it with black as zero."
            raise UnsupportedPixelsError(msg)
        planes = invert(planes, bits)
        notes += ("stored with white as zero: inverted, so that bigger is brighter",)
    if photometric == PHOTOMETRIC.PALETTE:
        if not expand_palettes:
            return planes, False, bits, (*notes, "palette indices taken as labels")
        palette, bits = _palette(page)
        planes, is_colour = expand_palette(planes, palette)
    return planes, is_colour, bits, notes


def _bits(planes: AnyArray, page: TiffPage) -> int | None:
    if planes.dtype.kind == "f":
        return None
    return int(page.bitspersample) - (planes.dtype.kind == "i")


def _palette(page: TiffPage) -> tuple[AnyArray, int]:
    if page.colormap is None:
        msg = "it says palette, but holds none."
        raise UnsupportedPixelsError(msg)
    palette = np.asarray(page.colormap, dtype=np.uint16).T
    for step in STEPS_OF_8_BITS:
        if not np.any(palette % step):
            return (palette // step).astype(np.uint8), 8
    return palette, 16


def _scale(tif: TiffFile, page: TiffPage) -> FileScale:
    x_per_unit, y_per_unit = (_ratio(page, tag) for tag in (X_RESOLUTION_TAG, Y_RESOLUTION_TAG))
    if tif.is_imagej and not tif.is_ome:
        return imagej_scale(tif.pages.first.imagej_description or "", x_per_unit, y_per_unit)
    scale = ome_scale(tif.ome_metadata) if tif.ome_metadata else NO_SCALE
    unit = page.tags.valueof(RESOLUTION_UNIT_TAG, 2)
    if unit in DPI_PER_UNIT and x_per_unit > 0:
        note = f"file says {x_per_unit * DPI_PER_UNIT[unit]:.4g} dpi: ignored, screens and scanners write it"
        return replace(scale, notes=(*scale.notes, note))
    return scale


def _ratio(page: TiffPage, tag: int) -> float:
    value = page.tags.valueof(tag)
    return value[0] / value[1] if isinstance(value, tuple) and len(value) == 2 and value[1] else math.nan


@contextmanager
def _silence() -> Iterator[None]:
    """Keep tifffile's log off the terminal; what it complains about is checked here."""
    logger = logging.getLogger("tifffile")

    def drop(_: logging.LogRecord) -> bool:
        return False

    logger.addFilter(drop)
    try:
        yield
    finally:
        logger.removeFilter(drop)
