"""The image sheet: one row an image, read strictly; and the terminals and edits files it names."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from vasohm.flow.terminals import TerminalPoint
from vasohm.image.calibrate import TypedScale
from vasohm.network.crossings import Edit


@dataclass(frozen=True, slots=True)
class Disc:
    """An optic disc told by the sheet, in pixels."""

    x_px: float
    y_px: float
    radius_px: float


@dataclass(frozen=True, slots=True)
class ImageSource:
    """One image of the sheet: where its files are and what a person said about it."""

    image_id: str
    file: Path
    scale: TypedScale
    mask_file: Path | None
    fov_file: Path | None
    class_file: Path | None
    terminals: tuple[TerminalPoint, ...]
    edits: tuple[Edit, ...]
    disc: Disc | None
    axial_length_mm: float | None
    hematocrit: float | None
    design: Mapping[str, str]  # subject, eye, group, condition, time and carried columns, in the sheet's order
