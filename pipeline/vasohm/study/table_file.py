"""Tables of results read back from their files, with a fault told by file and with what to do."""

from collections.abc import Iterable
from pathlib import Path

import numpy as np
import pandas as pd

from vasohm.errors import Problem, RequestError
from vasohm.results.column import Column


def read_columns(path: Path, table: str, columns: Iterable[Column], again: str) -> pd.DataFrame:
    """Read columns of a table: numbers as float64, texts as they stand, empty for none; others are left out.

    Parameters
    ----------
    path : the CSV file.
    table : what it is called where it cannot be read.
    columns : those wanted; which of them the file lacks shows in what comes back.
    again : what to do where it cannot be read.

    Raises
    ------
    RequestError
        It is not there, or is no such table.
    """
    kinds = {column.name: column.type for column in columns}
    numbers = [name for name, kind in kinds.items() if kind in ("number", "integer")]
    texts = [name for name in kinds if name not in numbers]
    try:
        return pd.read_csv(
            path,
            usecols=lambda name: name in kinds,
            dtype=dict.fromkeys(texts, str) | dict.fromkeys(numbers, np.float64),
            keep_default_na=False,
            na_values={name: [""] for name in numbers},
        )
    except FileNotFoundError:
        raise RequestError([Problem(file=str(path), message=f"is not there. {again}")]) from None
    except (OSError, ValueError) as fault:
        reason = getattr(fault, "strerror", None) or " ".join(str(fault).split())
        message = f"cannot be read as a table of {table}: {reason}. {again}"
        raise RequestError([Problem(file=str(path), message=message)]) from None
