"""Array types shared by all rooms, and the one rule about them: a noun's arrays are read-only."""

from dataclasses import fields
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

FloatArray: TypeAlias = NDArray[np.float64]
Float32Array: TypeAlias = NDArray[np.float32]
IntArray: TypeAlias = NDArray[np.int64]
BoolArray: TypeAlias = NDArray[np.bool_]
AnyArray: TypeAlias = NDArray[Any]


def freeze(noun: Any) -> None:
    """Make every array held by a dataclass read-only; `frozen=True` alone does not reach into them."""
    for field in fields(noun):
        value = getattr(noun, field.name)
        if isinstance(value, np.ndarray):
            value.flags.writeable = False
