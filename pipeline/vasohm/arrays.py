"""Array types shared by all rooms, and the one rule about them: a noun's arrays are read-only."""

from dataclasses import fields
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

# The names tell the reader the dtype; numpy's operators lose it too often for a checker to hold it.
FloatArray: TypeAlias = NDArray[Any]
Float32Array: TypeAlias = NDArray[Any]
IntArray: TypeAlias = NDArray[Any]
BoolArray: TypeAlias = NDArray[Any]
AnyArray: TypeAlias = NDArray[Any]


def freeze(noun: Any) -> None:
    """Make every array held by a dataclass read-only; `frozen=True` alone does not reach into them."""
    for field in fields(noun):
        value = getattr(noun, field.name)
        if isinstance(value, np.ndarray):
            value.flags.writeable = False
