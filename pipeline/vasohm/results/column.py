"""What an output column is."""

from dataclasses import dataclass
from typing import Literal, TypeAlias

ColumnType: TypeAlias = Literal["string", "integer", "number", "boolean", "list"]


@dataclass(frozen=True, slots=True)
class Column:
    """One column: `unit` is UCUM (`1` for ratios and counts, empty for text); `words` are all that it may hold."""

    name: str
    type: ColumnType
    unit: str
    meaning: str
    words: tuple[str, ...] = ()


def text(name: str, meaning: str, words: tuple[str, ...] = ()) -> Column:
    """Column of text."""
    return Column(name, "string", "", meaning, words)


def count(name: str, meaning: str, unit: str = "1") -> Column:
    """Column of whole numbers."""
    return Column(name, "integer", unit, meaning)


def number(name: str, unit: str, meaning: str) -> Column:
    """Column of real numbers."""
    return Column(name, "number", unit, meaning)


def truth(name: str, meaning: str) -> Column:
    """Column of true or false."""
    return Column(name, "boolean", "", meaning)
