"""Pixels: one picture written in many ways must come out as the same array, or be refused by name; never in part.

What each variant means stands in TIFF revision 6.0 (Adobe, 1992), the PNG specification (ISO/IEC 15948) and the
OME-TIFF specification. The files are written by tifffile and Pillow, whose writers share no code with the reader.
"""

import contextlib
import hashlib
import importlib.util
import os
import resource
import struct
import zlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import tifffile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from PIL import Image, ImageFile

from vasohm.errors import (
    InputMissingError,
    MaskError,
    NotAnImageError,
    ReadError,
    ScaleError,
    TooLargeError,
    TruncatedError,
    UnsupportedPixelsError,
    VasohmError,
)
from vasohm.flags import Flag
from vasohm.image.read import RawImage, ReadSettings, read_image, read_labels, read_mask

SETTINGS = ReadSettings(plane="max", max_megapixels=400.0, channel="luminance")
GREY = np.random.default_rng(0).integers(0, 256, (48, 40), dtype=np.uint8)
COLOUR = np.stack([GREY, np.roll(GREY, 5, axis=0), np.roll(GREY, 9, axis=1)], axis=-1)
STACK = np.stack([GREY // 2, GREY, GREY // 3, GREY // 4])  # plane 1 is the greatest everywhere
FEW = (GREY // 16).astype(np.uint8)  # sixteen levels
BLACK_AND_WHITE = GREY > 127
ORIENTATION_TAG = 274

Writer = Callable[[Path], Any]


def tiff(pixels: np.ndarray, **how: Any) -> Writer:
    return lambda path: tifffile.imwrite(path, pixels, **how)


def pillow(pixels: np.ndarray, **how: Any) -> Writer:
    return lambda path: Image.fromarray(pixels).save(path, **how)


def palette(pixels: np.ndarray) -> Writer:
    """Write a palette picture; its colours are exact, since there are no more than the palette holds."""
    colours, index = np.unique(pixels.reshape(-1, 3), axis=0, return_inverse=True)

    def write(path: Path) -> None:
        picture = Image.new("P", pixels.shape[1::-1])
        picture.putdata(index.ravel().tolist())
        picture.putpalette(colours.ravel().tolist())
        picture.save(path)

    return write


def as_colours(levels: np.ndarray) -> np.ndarray:
    return np.stack([levels * 17, 255 - levels * 10, levels * 3], axis=-1).astype(np.uint8)


GREY_VARIANTS = {
    "plain.tif": tiff(GREY),
    "pillow.tif": pillow(GREY),
    "bigtiff.tif": tiff(GREY, bigtiff=True),
    "bigtiff-big-endian.tif": tiff(GREY, bigtiff=True, byteorder=">"),
    "tiled.tif": tiff(GREY, tile=(16, 16)),
    "tiled-deflate.tif": tiff(GREY, tile=(16, 16), compression="zlib"),
    "predictor.tif": tiff(GREY, compression="zlib", predictor=True),
    "strips.tif": tiff(GREY, rowsperstrip=5),
    "packbits.tif": pillow(GREY, compression="packbits"),
    "white-is-zero.tif": tiff(255 - GREY, photometric="miniswhite"),
    "grey-and-alpha.tif": tiff(
        np.dstack([GREY, GREY]), photometric="minisblack", planarconfig="contig", extrasamples=["unassalpha"]
    ),
    "grey-palette.tif": lambda path: Image.fromarray(GREY).convert("P").save(path),
    "stack-of-3.tif": tiff(STACK[:3], photometric="minisblack"),
    "stack-of-4.tif": tiff(STACK, photometric="minisblack"),
    "stack-of-4-plain-pages.tif": tiff(STACK, photometric="minisblack", metadata=None),
    "stack-of-4-deflate.tif": tiff(STACK, photometric="minisblack", compression="zlib"),
    "stack-imagej.tif": tiff(STACK, imagej=True, metadata={"axes": "ZYX"}),
    "stack.ome.tif": tiff(STACK, ome=True, metadata={"axes": "TYX"}),
    "orientation.tif": tiff(GREY, extratags=[(ORIENTATION_TAG, 3, 1, 6, True)]),
    "plain.png": pillow(GREY),
    "grey-and-alpha.png": lambda path: Image.merge("LA", [Image.fromarray(GREY)] * 2).save(path),
    "grey-palette.png": lambda path: Image.fromarray(GREY).convert("P").save(path),
    "plain.bmp": pillow(GREY),
}
COLOUR_VARIANTS = {
    "plain.tif": tiff(COLOUR),
    "planar.tif": tiff(np.moveaxis(COLOUR, -1, 0), photometric="rgb", planarconfig="separate"),
    "tiled.tif": tiff(COLOUR, tile=(16, 16), compression="zlib", predictor=True),
    "alpha.tif": tiff(np.dstack([COLOUR, GREY]), photometric="rgb", extrasamples=["unassalpha"]),
    "stack-imagej.tif": tiff(np.stack([COLOUR, COLOUR]), imagej=True, metadata={"axes": "ZYXS"}),
    "colour.ome.tif": tiff(COLOUR, ome=True, photometric="rgb", metadata={"axes": "YXS"}),
    "plain.png": pillow(COLOUR),
    "alpha.png": pillow(np.dstack([COLOUR, GREY])),
    "plain.bmp": pillow(COLOUR),
}


def read_after(write: Writer, path: Path, how: ReadSettings = SETTINGS) -> RawImage:
    write(path)
    return read_image(path, how)


@pytest.mark.parametrize("name", GREY_VARIANTS)
def test_a_grey_picture_is_the_same_however_it_is_stored(name: str, tmp_path: Path) -> None:
    """Else polarity, brightness or place of the vessels would hang on the program that saved the file."""
    raw = read_after(GREY_VARIANTS[name], tmp_path / name)
    np.testing.assert_array_equal(raw.pixels, GREY)
    assert (raw.pixels.dtype, raw.white_level) == (np.uint8, 255)
    assert raw.sha256 == hashlib.sha256((tmp_path / name).read_bytes()).hexdigest()


@pytest.mark.parametrize("name", COLOUR_VARIANTS)
def test_a_colour_picture_is_the_same_however_it_is_stored(name: str, tmp_path: Path) -> None:
    """Else channels would be taken for rows or planes, or alpha for brightness."""
    np.testing.assert_array_equal(read_after(COLOUR_VARIANTS[name], tmp_path / name).pixels, COLOUR)


@pytest.mark.parametrize("kind", ["tif", "png"])
def test_palettes_are_expanded(kind: str, tmp_path: Path) -> None:
    """Palette indices are no brightness."""
    colours = as_colours(FEW)
    np.testing.assert_array_equal(read_after(palette(colours), tmp_path / f"p.{kind}").pixels, colours)


@pytest.mark.parametrize("kind", ["tif", "png"])
def test_one_bit_pictures_are_zero_and_one(kind: str, tmp_path: Path) -> None:
    raw = read_after(pillow(BLACK_AND_WHITE), tmp_path / f"b.{kind}")
    np.testing.assert_array_equal(raw.pixels, BLACK_AND_WHITE)
    assert raw.white_level == 1


SAMPLES = ("u1", "u2", "u4", "i1", "i2", "i4", "f4", "f8", ">u2", ">i4", ">f4", ">f8")


@pytest.mark.parametrize("sample", SAMPLES)
def test_sample_types_keep_their_values(sample: str, tmp_path: Path) -> None:
    """A wrapped sign or swapped bytes would still look like a picture."""
    values = (GREY.astype(float) - (100 if "i" in sample or "f" in sample else 0)) / (2 if "i1" in sample else 1)
    values = values.astype(sample)
    raw = read_after(tiff(values, byteorder=">" if ">" in sample else "<"), tmp_path / "s.tif")
    np.testing.assert_array_equal(raw.pixels, values)
    assert raw.pixels.dtype.isnative
    assert (raw.white_level is None) == ("f" in sample)


def test_negatives_of_signed_samples_with_white_as_zero(tmp_path: Path) -> None:
    """TIFF 6.0, PhotometricInterpretation 0: the ends of the range change places."""
    signed = GREY.astype(np.int16) * 100 - 12000
    raw = read_after(tiff(~signed, photometric="miniswhite"), tmp_path / "w.tif")
    np.testing.assert_array_equal(raw.pixels, signed)


@pytest.mark.parametrize(("top", "white"), [(200, 255), (1000, 1023), (4095, 4095), (4096, 16383), (60000, 65535)])
def test_full_scale_is_that_of_the_camera(top: int, white: int, tmp_path: Path) -> None:
    """Twelve bits in sixteen must be known as clipped at 4095, not at 65535 (common practice of cameras, no source)."""
    pixels = np.linspace(0, top, GREY.size).reshape(GREY.shape).round().astype(np.uint16)
    assert read_after(tiff(pixels), tmp_path / "c.tif").white_level == white
    assert read_after(pillow(pixels), tmp_path / "c.png").white_level == white


@pytest.mark.parametrize("kind", ["tif", "jpg", "png"])
def test_pictures_are_never_turned(kind: str, tmp_path: Path) -> None:
    """A mask made elsewhere lies on the stored array; a reader that turns the picture puts the vessels elsewhere."""
    exif = Image.Exif()
    exif[ORIENTATION_TAG] = 6
    how = {"tif": tiff(GREY, extratags=[(ORIENTATION_TAG, 3, 1, 6, True)])}.get(kind, pillow(GREY, exif=exif))
    raw = read_after(how, tmp_path / f"o.{kind}")
    assert raw.pixels.shape == GREY.shape
    assert raw.flags == Flag.ORIENTATION_TAG
    assert any("orientation tag 6" in note for note in raw.notes)


def test_plane_of_a_stack(tmp_path: Path) -> None:
    """A stack needs one plane; a number beyond its end must not become another plane."""
    write = tiff(STACK, photometric="minisblack")
    np.testing.assert_array_equal(read_after(write, tmp_path / "z.tif", ReadSettings(3, 400, "green")).pixels, STACK[3])
    mean = read_after(write, tmp_path / "z.tif", ReadSettings("mean", 400, "green"))
    np.testing.assert_allclose(mean.pixels, STACK.sum(axis=0) / 4, rtol=1e-15)
    assert mean.notes == ("plane: mean of 4",)
    with pytest.raises(ReadError, match=r"z\.tif: plane = 4, but the file has 4 planes"):
        read_after(write, tmp_path / "z.tif", ReadSettings(4, 400, "green"))


def test_channels_that_are_no_colours_need_a_number(tmp_path: Path) -> None:
    """Three dyes are not red, green and blue: a luminance of them would mean nothing."""
    write = tiff(STACK[:3], imagej=True, metadata={"axes": "CYX"})
    with pytest.raises(UnsupportedPixelsError, match="3 channels that are not red, green and blue"):
        read_after(write, tmp_path / "c.tif")
    raw = read_after(write, tmp_path / "c.tif", ReadSettings("max", 400, 1))
    np.testing.assert_array_equal(raw.pixels[..., 1], STACK[1])


UNSUPPORTED = {
    "float16.tif": (tiff(GREY.astype(np.float16)), "float16"),
    "int64.tif": (tiff(GREY.astype(np.int64)), "int64"),
    "complex.tif": (tiff(GREY.astype(np.complex64)), "complex64"),
    "cmyk.tif": (lambda path: Image.fromarray(COLOUR).convert("CMYK").save(path), "SEPARATED"),
    "cmyk.jpg": (lambda path: Image.fromarray(COLOUR).convert("CMYK").save(path), "CMYK"),
    "lab.tif": (lambda path: Image.fromarray(COLOUR).convert("LAB").save(path), "CIELAB"),
    "ycbcr.tif": (lambda path: Image.fromarray(COLOUR).convert("YCbCr").save(path), "YCBCR"),
    "white-is-zero-float.tif": (tiff(GREY.astype(np.float32), photometric="miniswhite"), "floats with white as zero"),
    "animated.png": (pillow(GREY, save_all=True, append_images=[Image.fromarray(255 - GREY)]), "animated"),
}


@pytest.mark.parametrize("name", UNSUPPORTED)
def test_sample_types_without_brightness_are_refused_by_name(name: str, tmp_path: Path) -> None:
    """A valid file that means something else than brightness must not be measured as if it did."""
    write, words = UNSUPPORTED[name]
    with pytest.raises(UnsupportedPixelsError, match=words):
        read_after(write, tmp_path / name)


def png_of(header: bytes, *chunks: tuple[bytes, bytes]) -> bytes:
    """Put a PNG together from its parts (ISO/IEC 15948, section 5)."""
    parts = [(b"IHDR", header), *chunks, (b"IEND", b"")]
    body = b"".join(struct.pack(">I", len(d)) + k + d + struct.pack(">I", zlib.crc32(k + d)) for k, d in parts)
    return b"\x89PNG\r\n\x1a\n" + body


def test_sixteen_bit_colour_png_is_not_cut_to_eight_bits(tmp_path: Path) -> None:
    """Pillow drops the lower eight bits of such files without a word."""
    row = b"\0" + GREY[0, :12].tobytes()
    data = png_of(struct.pack(">IIBBBBB", 2, 1, 16, 2, 0, 0, 0), (b"IDAT", zlib.compress(row)))
    (tmp_path / "rgb16.png").write_bytes(data)
    with pytest.raises(UnsupportedPixelsError, match="16-bit PNG"):
        read_image(tmp_path / "rgb16.png", SETTINGS)


def test_sizes_are_refused_before_decoding(tmp_path: Path) -> None:
    """A file of a few kilobytes can declare gigabytes; decoding it first would take the machine down."""
    side = 30_000
    zeros = zlib.compressobj(9)
    idat = b"".join(zeros.compress(bytes(side + 1)) for _ in range(300)) + zeros.flush()
    header = struct.pack(">IIBBBBB", side, side, 8, 0, 0, 0, 0)
    (tmp_path / "bomb.png").write_bytes(png_of(header, (b"IDAT", idat)))
    tiff(GREY, compression="zlib")(tmp_path / "bomb.tif")
    with tifffile.TiffFile(tmp_path / "bomb.tif", mode="r+") as tif:
        for tag in ("ImageLength", "ImageWidth"):
            tif.pages[0].tags[tag].overwrite(side)
    before_kib = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    for name in ("bomb.png", "bomb.tif"):
        with pytest.raises(TooLargeError, match=r"30000 x 30000 px = 900 megapixels, more than max_megapixels = 400"):
            read_image(tmp_path / name, SETTINGS)
    grown_kib = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before_kib
    assert grown_kib < 100_000
    with pytest.raises(TooLargeError, match="40 x 48 px x 4 planes"):
        read_after(tiff(STACK, photometric="minisblack"), tmp_path / "z.tif", ReadSettings("max", 0.007, 0))
    (tmp_path / "long.tif").write_bytes(b"II*\0" + bytes(4_000_000))
    with pytest.raises(TooLargeError, match=r"long\.tif: has 4 MB"):
        read_image(tmp_path / "long.tif", ReadSettings("max", 0.001, 0))


NO_IMAGES = {
    "page.png": (b"<!DOCTYPE html><html>log in", "looks like text: '<!DOCTYPE html><html>log in'"),
    "empty.tif": (b"", r"empty \(0 bytes\)"),
    "noise.tif": (bytes(range(128, 200)), "begins with the bytes 80 81 82"),
    "scan.dcm": (bytes(128) + b"DICM" + bytes(64), "DICOM"),
    "moving.gif": (b"GIF89a" + bytes(20), "a GIF"),
    "none.tif": (b"II*\0\0\0\0\0", "TIFF without a page"),
}


@pytest.mark.parametrize("name", NO_IMAGES)
def test_what_is_no_image_is_told_by_its_first_bytes(name: str, tmp_path: Path) -> None:
    """A log-in page saved as .png is the commonest broken download."""
    data, words = NO_IMAGES[name]
    (tmp_path / name).write_bytes(data)
    with pytest.raises(NotAnImageError, match=f"^{name}: .*{words}"):
        read_image(tmp_path / name, SETTINGS)


@pytest.mark.timeout(5)
def test_entries_that_are_no_files_never_block(tmp_path: Path) -> None:
    """Opening a pipe waits for ever, a device never ends."""
    os.mkfifo(tmp_path / "pipe.tif")
    (tmp_path / "loop.tif").symlink_to(tmp_path / "loop.tif")
    (tmp_path / "device.tif").symlink_to("/dev/zero")
    (tmp_path / "folder.tif").mkdir()
    for name, words in (("pipe", "is a pipe"), ("device", "is a device"), ("folder", "is a folder")):
        with pytest.raises(NotAnImageError, match=words):
            read_image(tmp_path / f"{name}.tif", SETTINGS)
    with pytest.raises(ReadError, match="symbolic links"):
        read_image(tmp_path / "loop.tif", SETTINGS)
    for path in (tmp_path / "absent.tif", tmp_path / "absent" / "absent.tif"):
        with pytest.raises(InputMissingError, match=r"absent\.tif: no such file"):
            read_image(path, SETTINGS)


def test_names_are_shown_without_folder_and_escaped(tmp_path: Path) -> None:
    """A folder may name a patient; a line break in a name would forge a line of the log."""
    path = tmp_path / "a\n\x1b[31m\u202e.tif"
    path.write_bytes(b"")
    with pytest.raises(NotAnImageError) as caught:
        read_image(path, SETTINGS)
    message = str(caught.value)
    assert message.isprintable()
    assert str(tmp_path) not in message


CUT = {**GREY_VARIANTS, **{f"colour-{name}": write for name, write in COLOUR_VARIANTS.items()}} | {
    "photograph.jpg": pillow(COLOUR, quality=95),
    "progressive.jpg": pillow(COLOUR, quality=95, progressive=True),
    "sixteen.png": pillow(GREY.astype(np.uint16) * 16),
    "channels.ome.tif": tiff(STACK[:3], ome=True, photometric="minisblack", metadata={"axes": "CYX"}),
}


@pytest.mark.parametrize("name", CUT)
def test_a_cut_file_is_never_read_in_part(name: str, tmp_path: Path) -> None:
    """No number may come from a picture that was not fully read, nor a stack lose planes without a word."""
    path = tmp_path / name
    CUT[name](path)
    data = path.read_bytes()
    for share in (0.1, 0.3, 0.6, 0.9, 0.97):
        path.write_bytes(data[: int(len(data) * share)])
        with pytest.raises(TruncatedError, match=name):
            read_image(path, ReadSettings("max", 400, 0))


def test_a_strip_that_is_missing_is_not_filled_with_zeros(tmp_path: Path) -> None:
    """TIFF decoders fill strips of no bytes with zeros, as sparse files mean it: here that would be a dark band."""
    path = tmp_path / "sparse.tif"
    tiff(GREY, rowsperstrip=8, compression="zlib")(path)
    with tifffile.TiffFile(path, mode="r+") as tif:
        counts = list(tif.pages[0].databytecounts)
        tif.pages[0].tags["StripByteCounts"].overwrite([counts[0], 0, *counts[2:]])
    with pytest.raises(TruncatedError, match="strips or tiles of plane 0 are missing"):
        read_image(path, SETTINGS)


def test_one_file_of_a_set_is_not_taken_for_the_whole(tmp_path: Path) -> None:
    """OME-TIFF may spread planes over files; those elsewhere would be zeros."""
    path = tmp_path / "set.ome.tif"
    tiff(STACK, ome=True, photometric="minisblack", metadata={"axes": "ZYX"})(path)
    with tifffile.TiffFile(path) as tif:
        xml = tif.pages[0].description
    lost = xml.replace('<TiffData IFD="0" PlaneCount="4"/>', '<TiffData IFD="0" PlaneCount="2"/>')
    assert lost != xml
    tifffile.tiffcomment(path, lost.encode())
    with pytest.raises(TruncatedError, match="plane 2 is missing"):
        read_image(path, SETTINGS)


def test_a_host_that_lets_half_pictures_pass_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """With this switch of Pillow a cut file is grey where it ends."""
    monkeypatch.setattr(ImageFile, "LOAD_TRUNCATED_IMAGES", True)
    with pytest.raises(ReadError, match="LOAD_TRUNCATED_IMAGES"):
        read_after(pillow(GREY), tmp_path / "a.png")


LOSSLESS = ("tiled-deflate.tif", "stack-of-4-deflate.tif", "plain.png", "grey-and-alpha.png", "grey-palette.png")


@pytest.mark.parametrize("name", LOSSLESS)
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(place=st.floats(0, 1, exclude_max=True), bit=st.integers(0, 7))
def test_a_flipped_bit_is_found_or_harmless(name: str, place: float, bit: int, tmp_path: Path) -> None:
    """Formats with checksums must use them: bit rot that passes is a wrong picture. Headers of TIFF have none."""
    path = tmp_path / name
    GREY_VARIANTS[name](path)
    whole = read_image(path, SETTINGS).pixels
    data = bytearray(path.read_bytes())
    start = 512 if name.endswith("tif") else 0
    data[start + int(place * (len(data) - start))] ^= 1 << bit
    path.write_bytes(data)
    with contextlib.suppress(VasohmError):  # any other exception, or another picture, fails
        np.testing.assert_array_equal(read_image(path, SETTINGS).pixels, whole)


@pytest.mark.skipif(importlib.util.find_spec("imagecodecs") is not None, reason="all codecs are there")
def test_missing_codecs_are_told_with_what_to_install(tmp_path: Path) -> None:
    """LZW is common in TIFF: the way out must stand in the message."""
    with pytest.raises(UnsupportedPixelsError, match=r'lzw\.tif: .* pip install "vasohm\[codecs\]"'):
        read_after(pillow(GREY, compression="tiff_lzw"), tmp_path / "lzw.tif")


# ---- pixel sizes that files carry


def ome(x: object, y: object, unit: str | None = None) -> Writer:
    units = {} if unit is None else {"PhysicalSizeXUnit": unit, "PhysicalSizeYUnit": unit}
    return tiff(GREY, ome=True, metadata={"axes": "YX", "PhysicalSizeX": x, "PhysicalSizeY": y, **units})


def imagej(per_unit: float, unit: str, aspect: float = 1.0) -> Writer:
    return tiff(GREY, imagej=True, resolution=(per_unit, per_unit * aspect), metadata={"unit": unit})


CARRIERS = {
    "ome-default.tif": (ome(0.65, 0.65), 0.65, "ome"),  # OME schema 2016-06: the default unit is the micrometre
    "ome-nm.tif": (ome(650, 650, "nm"), 0.65, "ome"),
    "ome-mm.tif": (ome(0.00065, 0.00065, "mm"), 0.65, "ome"),
    "ome-pixel.tif": (ome(1, 1, "pixel"), None, ""),
    "ome-zero.tif": (ome(0, 0), None, ""),
    "imagej-um.tif": (imagej(2, "um"), 0.5, "imagej"),
    "imagej-escape.tif": (imagej(2, "\\u00B5m"), 0.5, "imagej"),
    "imagej-micron.tif": (imagej(2, "micron"), 0.5, "imagej"),
    "imagej-cm.tif": (imagej(20000, "cm"), 0.5, "imagej"),
    "imagej-nm.tif": (imagej(0.002, "nm"), 0.5, "imagej"),
    "imagej-pixel.tif": (imagej(2, "pixel"), None, ""),
    "imagej-inch.tif": (imagej(2, "inch"), None, ""),
    "dpi.tif": (tiff(GREY, resolution=(72, 72), resolutionunit="inch"), None, ""),
    "dpcm.tif": (tiff(GREY, resolution=(20000, 20000), resolutionunit="centimeter"), None, ""),
    "dpi.png": (pillow(GREY, dpi=(96, 96)), None, ""),
    "dpi.jpg": (pillow(GREY, dpi=(300, 300)), None, ""),
}


@pytest.mark.parametrize("name", CARRIERS)
def test_pixel_size_comes_from_carriers_that_mean_it(name: str, tmp_path: Path) -> None:
    """Dots per inch taken for a pixel size makes resistances wrong by many powers of ten."""
    write, size_um, source = CARRIERS[name]
    raw = read_after(write, tmp_path / name)
    assert raw.file_pixel_size_source == source
    rational_rounding = 1e-6  # TIFF stores the resolution as a ratio of two 32-bit integers
    assert raw.file_pixel_size_um == (None if size_um is None else pytest.approx(size_um, rel=rational_rounding))
    assert size_um is not None or any("ignored" in note for note in raw.notes)


def test_pixels_that_are_not_square_are_refused(tmp_path: Path) -> None:
    """A radius has no one length on such a grid. Within half a per cent the difference is rounding."""
    with pytest.raises(ScaleError, match=r"a\.tif: its pixels are not square \(ome: 0\.5 x 0\.52 um"):
        read_after(ome(0.5, 0.52), tmp_path / "a.tif")
    with pytest.raises(ScaleError, match="not square"):
        read_after(imagej(2, "um", aspect=1.01), tmp_path / "a.tif")
    assert read_after(ome(0.5, 0.501), tmp_path / "a.tif").file_pixel_size_um == pytest.approx(0.5005, rel=1e-6)


def test_entities_of_xml_are_never_expanded(tmp_path: Path) -> None:
    """A few lines of nested entities become gigabytes."""
    xml = '<?xml version="1.0"?><!DOCTYPE x [<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;">]><OME>&b;</OME>'
    with pytest.raises(ReadError, match="XML entities"):
        read_after(tiff(GREY, description=xml, metadata=None), tmp_path / "x.tif")


# ---- masks and classes


@pytest.mark.parametrize("kind", ["tif", "png", "bmp"])
@pytest.mark.parametrize(
    "values",
    [BLACK_AND_WHITE, BLACK_AND_WHITE.astype(np.uint8), BLACK_AND_WHITE * np.uint8(255)],
    ids=["bool", "0-1", "0-255"],
)
def test_masks_in_their_usual_forms(kind: str, values: np.ndarray, tmp_path: Path) -> None:
    pillow(values)(tmp_path / f"m.{kind}")
    mask = read_mask(tmp_path / f"m.{kind}", GREY.shape)
    assert mask.dtype == np.bool_
    np.testing.assert_array_equal(mask, BLACK_AND_WHITE)


@pytest.mark.parametrize("values", [BLACK_AND_WHITE, BLACK_AND_WHITE * np.uint8(255)], ids=["bool", "0-255"])
def test_masks_stored_with_white_as_zero_are_not_turned_inside_out(values: np.ndarray, tmp_path: Path) -> None:
    """Bool arrays are written so by tifffile, masks by others: what is stored as nonzero is inside all the same."""
    tifffile.imwrite(tmp_path / "m.tif", values, photometric="miniswhite")
    np.testing.assert_array_equal(read_mask(tmp_path / "m.tif", GREY.shape), BLACK_AND_WHITE)
    tifffile.imwrite(tmp_path / "m.tif", BLACK_AND_WHITE)
    np.testing.assert_array_equal(read_mask(tmp_path / "m.tif", GREY.shape), BLACK_AND_WHITE)


def test_labels_count_as_inside(tmp_path: Path) -> None:
    """A label image numbers its vessels: 1 is as much inside as 300."""
    labels = np.repeat(np.repeat(np.arange(30).reshape(6, 5), 8, axis=0), 8, axis=1)
    for top, sample in ((29, np.uint8), (300, np.uint16), (300, np.int32)):
        tiff((labels * top // 29).astype(sample))(tmp_path / "l.tif")
        np.testing.assert_array_equal(read_mask(tmp_path / "l.tif", labels.shape), labels > 0)


def test_grey_masks_are_refused_with_their_count(tmp_path: Path) -> None:
    """Between black and white somebody would have to choose a threshold, which moves every radius."""
    smooth = BLACK_AND_WHITE * np.uint8(255)
    smooth[3, 4:9] = 100
    n_between = 5
    pillow(smooth)(tmp_path / "g.png")
    with pytest.raises(MaskError, match=f"{n_between} of {smooth.size} pixels lie between"):
        read_mask(tmp_path / "g.png", smooth.shape)
    pillow(GREY // 2)(tmp_path / "g.png")  # a photograph is no label image, though it holds small whole numbers
    with pytest.raises(MaskError, match="lie between"):
        read_mask(tmp_path / "g.png", GREY.shape)
    tiff((smooth / 255).astype(np.float32))(tmp_path / "g.tif")
    with pytest.raises(MaskError, match=f"{n_between} of"):
        read_mask(tmp_path / "g.tif", smooth.shape)


def test_masks_that_do_not_fit_say_how(tmp_path: Path) -> None:
    """A mask that was saved turned lies beside every vessel."""
    pillow(BLACK_AND_WHITE.T)(tmp_path / "m.png")
    with pytest.raises(
        MaskError, match=r"is 48 x 40 px, but its image is 40 x 48 px as stored\. That equals the rotated size"
    ):
        read_mask(tmp_path / "m.png", GREY.shape)
    pillow(BLACK_AND_WHITE[:-1])(tmp_path / "m.png")
    with pytest.raises(MaskError, match=r"is 40 x 47 px, but its image is 40 x 48 px as stored\.$"):
        read_mask(tmp_path / "m.png", GREY.shape)
    pillow(np.zeros((480, 400), np.uint8))(tmp_path / "m.png")
    with pytest.raises(MaskError, match="more than 4 times as large as its image of 40 x 48 px"):
        read_mask(tmp_path / "m.png", GREY.shape)
    pillow(COLOUR)(tmp_path / "m.png")
    with pytest.raises(MaskError, match="colour picture"):
        read_mask(tmp_path / "m.png", GREY.shape)
    tiff(STACK, photometric="minisblack")(tmp_path / "m.tif")
    with pytest.raises(MaskError, match="stack of 4 planes"):
        read_mask(tmp_path / "m.tif", GREY.shape)
    with pytest.raises(InputMissingError, match=r"n\.png"):
        read_mask(tmp_path / "n.png", GREY.shape)


def test_class_files(tmp_path: Path) -> None:
    """Classes are 0 to 3; of a palette picture the indices count, whatever colours show them."""
    classes = (GREY % 4).astype(np.uint8)
    pillow(classes)(tmp_path / "c.png")
    tiff(classes.astype(np.float32))(tmp_path / "c.tif")
    palette(np.array([[0, 0, 0], [90, 0, 0], [91, 0, 200], [92, 200, 0]], np.uint8)[classes])(tmp_path / "p.png")
    for name in ("c.png", "c.tif", "p.png"):
        np.testing.assert_array_equal(read_labels(tmp_path / name, GREY.shape), classes)
    pillow(classes * 80)(tmp_path / "c.png")
    with pytest.raises(MaskError, match=r"values that are no class \(80, 160, 240"):
        read_labels(tmp_path / "c.png", GREY.shape)
