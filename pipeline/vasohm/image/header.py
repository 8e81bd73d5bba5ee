"""How large a picture is, from its header alone: nothing is decoded and hardly anything is read."""

import warnings
from dataclasses import dataclass
from pathlib import Path

from tifffile import TiffFile

from vasohm.image.decode_flat import READERS
from vasohm.image.read import DICOM_AT, DICOM_MAGIC, MAGIC


@dataclass(frozen=True, slots=True)
class Declared:
    """What a header says; `planes` counts frames and pages."""

    width_px: int
    height_px: int
    planes: int


def declared_size(path: Path) -> Declared | None:
    """Read the size of a picture from its header.

    Parameters
    ----------
    path : a file of any kind that `read_image` takes.

    Returns
    -------
    None where the header cannot be read: what is wrong with the file is then told by `read_image`.
    """
    if not path.is_file():
        return None
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # they may quote what the header holds
            return _declared(path)
    except Exception:  # noqa: BLE001  headers raise whatever they like, and the reader says so in words
        return None


def _declared(path: Path) -> Declared:
    with path.open("rb") as stream:
        head = stream.read(DICOM_AT + len(DICOM_MAGIC))
    if head[DICOM_AT:] == DICOM_MAGIC:
        return _of_dicom(path)
    kind = next((kind for magic, kind in MAGIC.items() if head.startswith(magic)), "")
    return _of_tiff(path) if kind == "TIFF" else _of_flat(path, kind)


def _of_flat(path: Path, kind: str) -> Declared:
    with path.open("rb") as stream:
        picture = READERS[kind](stream)
        return Declared(picture.width, picture.height, 1)


def _of_tiff(path: Path) -> Declared:
    with TiffFile(path) as tif:
        page = tif.pages.first
        return Declared(page.imagewidth, page.imagelength, max(1, len(tif.series[0].pages)))


def _of_dicom(path: Path) -> Declared:
    from pydicom import dcmread  # noqa: PLC0415  an optional dependency

    held = dcmread(path, stop_before_pixels=True, specific_tags=["Rows", "Columns", "NumberOfFrames"])
    return Declared(int(held.Columns), int(held.Rows), int(held.get("NumberOfFrames") or 1))
