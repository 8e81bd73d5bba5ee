"""Where vessels merely cross; a person's edits applied."""

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True, slots=True)
class CrossingSettings:
    """Probability from which a place counts as a crossing."""

    threshold: float


@dataclass(frozen=True, slots=True)
class Edit:
    """One row of an edits file."""

    x_px: float
    y_px: float
    edit: Literal["drop", "keep", "class", "crossing", "branching"]
    value: str
