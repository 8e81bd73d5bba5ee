"""Pixel size from the carriers that mean it: OME-XML and the ImageJ description of a TIFF.

Dots per inch of screens and scanners are no pixel size of a specimen and never used.
"""

import math
import re
from xml.etree import ElementTree as ET

from vasohm.errors import ReadError, ScaleError
from vasohm.image.decoded import FileScale

UM_PER_UNIT = {"pm": 1e-6, "Å": 1e-4, "nm": 1e-3, "µm": 1.0, "mm": 1e3, "cm": 1e4, "m": 1e6}
MICROMETRE = re.compile(r"(µm|μm|\\u00[bB]5m|um|microns?|micromet(er|re)s?)")  # micro sign, Greek mu, escape, words
SQUARE_WITHIN = 0.005  # X and Y that differ by less are rounding


def ome_scale(xml: str) -> FileScale:
    """Read `PhysicalSizeX` and `PhysicalSizeY` of the first image of an OME-XML text; their default unit is µm.

    Raises
    ------
    ReadError : the text declares entities, or is no XML.
    ScaleError : the pixels are not square.
    """
    refuse_entities(xml)
    try:
        root = ET.fromstring(xml)  # noqa: S314 - without declarations there is nothing to expand
    except ET.ParseError as error:
        msg = f"its OME-XML cannot be parsed: {error}."
        raise ReadError(msg) from error
    pixels = next((e for e in root.iter() if e.tag.rpartition("}")[2] == "Pixels"), None)
    if pixels is None:
        return FileScale(None, "", ())
    x, y = (pixels.get(f"PhysicalSize{axis}") for axis in "XY")
    if x is None and y is None:
        return FileScale(None, "", ())
    unit_x, unit_y = (pixels.get(f"PhysicalSize{axis}Unit", "µm") for axis in "XY")
    return _from_edges("ome", (_number(x), unit_x), (_number(y), unit_y))


def imagej_scale(description: str, x_per_unit: float, y_per_unit: float) -> FileScale:
    """Combine the unit of an ImageJ description with the pixels per unit of the resolution tags.

    Parameters
    ----------
    description : the text that begins with `ImageJ=`.
    x_per_unit, y_per_unit : XResolution and YResolution, NaN where a tag is missing.

    Raises
    ------
    ScaleError : the pixels are not square.
    """
    said = dict(line.partition("=")[::2] for line in description.splitlines() if "=" in line)
    unit = said.get("unit", "").strip()
    if not unit:
        return FileScale(None, "", ())
    unit_y = said.get("yunit", unit).strip()
    return _from_edges("imagej", (_inverse(x_per_unit), unit), (_inverse(y_per_unit), unit_y))


def refuse_entities(xml: str) -> None:
    """Stop at XML that declares a document type or entities; no writer of images does.

    Raises
    ------
    ReadError : it does.
    """
    if re.search(r"<!\s*(DOCTYPE|ENTITY)", xml, re.IGNORECASE):
        msg = "its description declares XML entities, which could expand without bound."
        raise ReadError(msg)


def _from_edges(source: str, x: tuple[float, str], y: tuple[float, str]) -> FileScale:
    edges_um = [value * _um_per_unit(unit) for value, unit in (x, y)]
    if not all(math.isfinite(edge) and edge > 0 for edge in edges_um):
        said = f"{x[0]:.6g} {x[1]} x {y[0]:.6g} {y[1]}"
        return FileScale(None, "", (f"pixel size of the file ({source}: {said}) is not a positive length: ignored",))
    if abs(edges_um[0] / edges_um[1] - 1) > SQUARE_WITHIN:
        msg = (
            f"its pixels are not square ({source}: {edges_um[0]:.6g} x {edges_um[1]:.6g} um, anisotropic). "
            "Resample the picture to square pixels."
        )
        raise ScaleError(msg)
    return FileScale(math.sqrt(edges_um[0] * edges_um[1]), source, ())


def _um_per_unit(unit: str) -> float:
    return 1.0 if MICROMETRE.fullmatch(unit) else UM_PER_UNIT.get(unit, math.nan)


def _number(text: str | None) -> float:
    try:
        return float(text or "")
    except ValueError:
        return math.nan


def _inverse(value: float) -> float:
    return 1 / value if value > 0 else math.nan
