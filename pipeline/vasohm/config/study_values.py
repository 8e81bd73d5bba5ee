"""Values of a study file that are more than a type: words, pairs, lists, and what they must obey."""

import math
from itertools import pairwise
from typing import Annotated

from pydantic import AfterValidator, Field
from pydantic_core import PydanticCustomError

from vasohm.config.names import nearest
from vasohm.results.columns_vessels import CLASSES


def _wrong(message: str) -> PydanticCustomError:
    return PydanticCustomError("vasohm", "{message}", {"message": message})


def one_of(value: object, words: tuple[str, ...], more: str = "") -> str:
    """Return `value` where it is one of the words; `more` says what else would do."""
    if isinstance(value, str) and value in words:
        return value
    like = nearest(value, words) if isinstance(value, str) else ""
    hint = f" Did you mean {like!r}?" if like else ""
    raise _wrong(f"must be one of {', '.join(map(repr, words))}{more}.{hint}")


def word_or_index(value: object, words: tuple[str, ...]) -> int | str:
    """Return `value` where it is one of the words or a number counted from 0."""
    if isinstance(value, int) and not isinstance(value, bool) and value >= 0:
        return value
    return one_of(value, words, " or a number counted from 0")


def blur(value: object) -> float | str:
    """Return `value` where it is "auto" or a positive number of pixels."""
    if isinstance(value, int | float) and not isinstance(value, bool) and 0 < value < math.inf:
        return float(value)
    return one_of(value, ("auto",), " or a number of pixels greater than 0")


def _radius_range(value: list[float]) -> list[float]:
    if not 0 < value[0] < value[1]:
        raise _wrong("must be two radii in um, the smaller first, both greater than 0.")
    return value


def _zone(value: list[float]) -> list[float]:
    if not 0 <= value[0] < value[1]:
        raise _wrong("must be two distances from the disc's margin in disc diameters, the smaller first, none below 0.")
    return value


def _limits(value: list[float]) -> list[float]:
    if not all(0 < low < high for low, high in pairwise([*value, math.inf])):
        raise _wrong("must be radii in um that rise, all greater than 0.")
    return value


def by_class(value: object) -> float | dict[str, float]:
    """One positive number for all vessels, or one a class."""
    given = value if isinstance(value, dict) else {"": value}
    numbers = [number for number in given.values() if isinstance(number, int | float) and not isinstance(number, bool)]
    words = ", ".join(CLASSES)
    if not numbers or len(numbers) < len(given) or not all(0 < number < math.inf for number in numbers):
        raise _wrong(f"must be a number greater than 0, or a table of them with keys among {words}.")
    if isinstance(value, dict):
        return {one_of(name, CLASSES): float(number) for name, number in value.items()}
    return float(numbers[0])


def _plain_name(value: str) -> str:
    if not value.strip() or not value.isprintable():
        raise _wrong("must be text that can be printed.")
    return value


def ratio_of_change(value: float) -> float:
    """Return `value` where it is a change."""
    if value == 1:
        raise _wrong("must differ from 1: a ratio of 1 is what the vessels have already.")
    return value


def ratio_of_effect(value: float) -> float:
    """Return `value` where it is an effect."""
    if value == 1:
        raise _wrong("must differ from 1: a ratio of 1 is no effect to plan for.")
    return value


Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
Name = Annotated[str, Field(min_length=1, max_length=200), AfterValidator(_plain_name)]
RadiusRange = Annotated[list[float], Field(min_length=2, max_length=2), AfterValidator(_radius_range)]
Zone = Annotated[list[float], Field(min_length=2, max_length=2), AfterValidator(_zone)]
Limits = Annotated[list[float], Field(min_length=1, max_length=20), AfterValidator(_limits)]
Names = Annotated[list[Name], Field(max_length=100)]
