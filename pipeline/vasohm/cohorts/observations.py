"""From a table of observations to arrays: the scale of comparison, covariates, what is known of each value's doubt."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.errors import CohortError

MOST_NAMED = 5
MOST_WORDS = 20  # values of a covariate of texts


@dataclass(frozen=True, slots=True)
class Names:
    """Columns of the table that is compared."""

    outcome: str
    by: str
    subject: str
    within: tuple[str, ...]
    covariates: tuple[str, ...]
    outcome_rel_se: str | None
    outcome_shared_rel_se: str | None
    calibration: str | None


@dataclass(frozen=True, slots=True, eq=False)
class Observations:
    """What is compared: one entry an observation that has a value, all its covariates and a level."""

    value: FloatArray  # (n,) as logarithms where `is_ln`
    is_ln: bool
    variance: FloatArray  # (n,) of the measurement, own to each
    shared_se: FloatArray  # (n,) of what all of one calibration have in common
    calibration: IntArray  # (n,)
    level: IntArray  # (n,) index into `levels`
    levels: tuple[str, ...]
    subject: IntArray  # (n,) index into `subjects`
    subjects: tuple[str, ...]
    within: tuple[IntArray, ...]  # (n,) each; each entry is nested in the one before, the first in the subject
    covariates: FloatArray  # (n, k)
    covariate_names: tuple[str, ...]  # (k,)
    n_without: int  # rows with a level that lack a value or a covariate

    def __post_init__(self) -> None:
        freeze(self)

    def some(self, chosen: BoolArray) -> "Observations":
        """Keep the chosen observations."""
        return Observations(
            self.value[chosen],
            self.is_ln,
            self.variance[chosen],
            self.shared_se[chosen],
            self.calibration[chosen],
            self.level[chosen],
            self.levels,
            self.subject[chosen],
            self.subjects,
            tuple(codes[chosen] for codes in self.within),
            self.covariates[chosen],
            self.covariate_names,
            self.n_without,
        )


def observe(table: pd.DataFrame, names: Names) -> Observations:
    """Take from a table what is compared.

    Parameters
    ----------
    table : one row an observation.
    names : its columns; those of `within` that are not there are left out.

    Returns
    -------
    Observations
        On a logarithmic scale where every value is above 0.

    Raises
    ------
    CohortError
        A column is missing, a covariate is neither of numbers nor of few words, rows have no subject, no row has a
        value.
    """
    _need(table, [names.outcome, names.by, names.subject, *names.covariates])
    _need(table, [n for n in (names.outcome_rel_se, names.outcome_shared_rel_se, names.calibration) if n is not None])
    levels = _words(table[names.by])
    table, levels = table[levels != ""], levels[levels != ""]
    if table.empty:
        raise CohortError(f"column {names.by!r} is empty in every row. Say there which level each row belongs to.")
    subjects = _words(table[names.subject])
    if (bare := np.flatnonzero(subjects == "")).size:
        message = (
            f"column {names.subject!r} is empty in {bare.size} of {len(table)} rows that have a {names.by}: two of "
            "them could be one subject's. Name the subject of each row; where each is another one, give each its own "
            "name."
        )
        raise CohortError(message)
    value = _numbers(table[names.outcome], names.outcome)
    covariates, covariate_names = _covariates(table, names.covariates)
    usable = np.isfinite(value) & np.isfinite(covariates).all(axis=1)
    if not usable.any():
        missing = "no value" if not np.isfinite(value).any() else "no value together with all covariates"
        raise CohortError(f"outcome {names.outcome!r} has {missing} in any of {len(table)} rows.")
    kept = table[usable]
    is_ln = bool((value[usable] > 0).all())
    scale = np.ones(int(usable.sum())) if is_ln else np.abs(value[usable])
    own_se = _doubt(kept, names.outcome_rel_se) * scale
    shared_se = _doubt(kept, names.outcome_shared_rel_se) * scale
    level_codes, level_names = _codes(levels[usable])
    subject_codes, subject_names = _codes(subjects[usable])
    calibration = _codes(_words(kept[names.calibration]))[0] if names.calibration else np.zeros(len(kept), np.int64)
    return Observations(
        value=np.log(value[usable]) if is_ln else value[usable],
        is_ln=is_ln,
        variance=np.square(own_se),
        shared_se=shared_se,
        calibration=calibration,
        level=level_codes,
        levels=level_names,
        subject=subject_codes,
        subjects=subject_names,
        within=_nested(kept, subject_codes, names.within),
        covariates=covariates[usable],
        covariate_names=covariate_names,
        n_without=int(np.sum(~usable)),
    )


def named(names: Sequence[str]) -> str:
    """Name the first few of many things."""
    rest = f" and {len(names) - MOST_NAMED} more" if len(names) > MOST_NAMED else ""
    return ", ".join(map(repr, names[:MOST_NAMED])) + rest


def combined(*codes: IntArray) -> IntArray:
    """Number the combinations of several codes, in their order."""
    return np.unique(np.column_stack(codes), axis=0, return_inverse=True)[1].reshape(-1)


def _need(table: pd.DataFrame, names: Sequence[str]) -> None:
    absent = [name for name in names if name not in table.columns]
    if absent:
        raise CohortError(f"the table has no column {named(absent)}; it has {named(list(map(str, table.columns)))}.")


def _words(column: "pd.Series[Any]") -> Any:
    return column.astype(object).where(column.notna(), "").astype(str).to_numpy(dtype=object)


def _numbers(column: "pd.Series[Any]", name: str) -> FloatArray:
    numbers = pd.to_numeric(column.replace("", np.nan), errors="coerce").to_numpy(np.float64, na_value=np.nan)
    words = _words(column)
    wrong = np.isnan(numbers) & (words != "") & (words != "nan")
    if wrong.any():
        raise CohortError(f"column {name!r} holds {words[wrong][0]!r} where numbers are wanted.")
    return numbers


def _doubt(table: pd.DataFrame, name: str | None) -> FloatArray:
    """Relative standard uncertainty; where it is not told, that of the others, and none where nobody tells it."""
    if name is None:
        return np.zeros(len(table))
    told = _numbers(table[name], name)
    if (told < 0).any():
        raise CohortError(f"column {name!r} holds {told[told < 0][0]:g}; an uncertainty is not below 0.")
    known = told[np.isfinite(told)]
    return np.where(np.isfinite(told), told, np.median(known) if known.size else 0.0)


def _codes(words: Any) -> tuple[IntArray, tuple[str, ...]]:
    names, codes = np.unique(words.astype(str), return_inverse=True)
    return codes.reshape(-1), tuple(map(str, names))


def _nested(table: pd.DataFrame, subject: IntArray, within: Sequence[str]) -> tuple[IntArray, ...]:
    nested = []
    above = subject
    for name in within:
        if name in table.columns:
            above = combined(above, _codes(_words(table[name]))[0])
            nested.append(above)
    return tuple(nested)


def _covariates(table: pd.DataFrame, names: Sequence[str]) -> tuple[FloatArray, tuple[str, ...]]:
    """Numbers as they are, about their mean; words as one column of 0 and 1 for each word after the first."""
    columns: list[FloatArray] = []
    labels: list[str] = []
    for name in names:
        words = _words(table[name])
        numbers = pd.to_numeric(pd.Series(words).replace({"": None, "nan": None}), errors="coerce").to_numpy(np.float64)
        said = ~np.isin(words, ("", "nan"))
        if not said.any():
            raise CohortError(f"covariate {name!r} is empty in every row.")
        if np.isfinite(numbers[said]).all():
            columns.append(numbers - np.nanmean(numbers))
            labels.append(name)
            continue
        if np.isfinite(numbers[said]).any():
            word = words[said & ~np.isfinite(numbers)][0]
            raise CohortError(f"covariate {name!r} holds numbers and also {word!r}. Give it numbers or words only.")
        kinds = sorted(set(words[said]))
        if len(kinds) > MOST_WORDS:
            message = f"covariate {name!r} holds {len(kinds)} different words; at most {MOST_WORDS} can be told apart."
            raise CohortError(message)
        for kind in kinds[1:]:
            columns.append(np.where(said, (words == kind).astype(np.float64), np.nan))
            labels.append(f"{name} {kind}")
        if len(kinds) == 1:
            raise CohortError(f"covariate {name!r} is {kinds[0]!r} in every row: it cannot explain anything.")
    if not columns:
        return np.zeros((len(table), 0)), ()
    return np.column_stack(columns), tuple(labels)
