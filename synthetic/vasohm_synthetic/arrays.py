"""Names of array types, and what makes a frozen noun's arrays read-only."""

from dataclasses import fields
from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
AnyIntImage = npt.NDArray[np.uint8] | npt.NDArray[np.uint16]


def freeze(noun: Any) -> None:
    """Make every array of a frozen dataclass read-only, because `frozen` does not reach into arrays."""
    for field in fields(noun):
        value = getattr(noun, field.name)
        if isinstance(value, np.ndarray):
            value.flags.writeable = False
