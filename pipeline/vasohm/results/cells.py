"""How a value stands in a text table: exact, without infinities, and safe in a spreadsheet."""

import re
from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd

from vasohm.errors import DomainError
from vasohm.results.column import Column

_FORMULA = re.compile(r"'*[=+\-@\t\r]")
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_TRUTH = {True: "true", False: "false"}


def guard_text(value: str) -> str:
    """Prefix with ' what a spreadsheet would run as a formula; numbers stay as they are."""
    return "'" + value if _FORMULA.match(value) and not _NUMBER.fullmatch(value) else value


def unguard_text(value: str) -> str:
    """Give back the text that `guard_text` was given."""
    return value[1:] if value.startswith("'") and _FORMULA.match(value) else value


def column_cells(values: "pd.Series[Any]", column: Column) -> list[str]:
    """Write one column's cells: floats that read back exactly, whole numbers without a point, empty where missing.

    Raises
    ------
    DomainError : an infinite value, which no quantity of ours can have.
    """
    if column.type == "boolean":
        missing = values.isna().tolist()
        return ["" if none else _TRUTH[bool(value)] for value, none in zip(values.tolist(), missing, strict=True)]
    if column.type in ("integer", "number"):
        numbers = values.to_numpy(dtype=np.float64, na_value=np.nan)
        if np.isinf(numbers).any():
            row = int(np.flatnonzero(np.isinf(numbers))[0])
            msg = f"column {column.name}, row {row + 1}: the value is infinite; a table holds finite numbers or none."
            raise DomainError(msg)
        if column.type == "integer":
            return ["" if value != value else str(int(value)) for value in numbers.tolist()]  # noqa: PLR0124 (NaN)
        return ["" if value != value else repr(value) for value in numbers.tolist()]  # noqa: PLR0124 (NaN)
    missing = values.isna().tolist()
    texts = ["" if none else str(value) for value, none in zip(values.tolist(), missing, strict=True)]
    safe = {value: guard_text(value) for value in set(texts)}
    return [safe[value] for value in texts]


def table_rows(frame: pd.DataFrame, columns: Sequence[Column]) -> list[tuple[str, ...]]:
    """Write all cells of a table, row by row, in the order of the columns."""
    return list(zip(*(column_cells(frame[column.name], column) for column in columns), strict=True))
