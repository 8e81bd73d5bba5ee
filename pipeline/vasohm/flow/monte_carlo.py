"""Intervals of resistances from random draws of all that is uncertain."""

from dataclasses import dataclass
from typing import Literal

LEAST_DRAWS = 200  # fewer leave 5 values or less beyond each bound of a 95 % interval


@dataclass(frozen=True, slots=True)
class IntervalSettings:
    """How intervals are found: to first order, from draws, or from draws where first order is not good enough."""

    method: Literal["auto", "delta", "monte-carlo"]
    draws: int
    seed: int
