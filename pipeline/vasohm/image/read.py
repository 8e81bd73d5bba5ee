"""From a file to pixels. No science here."""

from dataclasses import dataclass
from pathlib import Path  # noqa: F401

from vasohm.arrays import AnyArray, freeze
from vasohm.flags import Flag


@dataclass(frozen=True, slots=True)
class ReadSettings:
    """How a file is decoded."""

    plane: int | str  # of a stack: "max", "mean" or a number counted from 0
    max_megapixels: float  # more declared pixels are refused before decoding


@dataclass(frozen=True, slots=True, eq=False)
class RawImage:
    """Pixels as stored, (h, w) or (h, w, 3), bigger is brighter, never turned.

    `white_level` is the greatest value that the file could hold (255, 4095, 65535), None for floats.
    """

    pixels: AnyArray
    white_level: float | None
    sha256: str
    file_pixel_size_um: float | None
    file_pixel_size_source: str  # ome | imagej | dicom | "" where the file says none
    notes: tuple[str, ...]  # facts for record.json: ignored dots per inch, orientation, plane taken
    flags: Flag

    def __post_init__(self) -> None:
        freeze(self)
