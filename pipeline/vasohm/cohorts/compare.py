"""Groups, or states of the same subjects, compared in one outcome of a table of observations."""

import zlib
from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd

from vasohm.cohorts import doubts
from vasohm.cohorts.contrast import Contrast, contrast
from vasohm.cohorts.effects import adjusted
from vasohm.cohorts.observations import Names, Observations, named, observe
from vasohm.errors import CohortError
from vasohm.results.columns_cohorts import COMPARISON


def compare_groups(  # noqa: PLR0913  every column of the table that takes part has a name of its own
    table: pd.DataFrame,
    *,
    outcome: str,
    by: str,
    reference: str,
    subject: str = "subject",
    within: Sequence[str] = ("eye",),
    covariates: Sequence[str] = (),
    outcome_rel_se: str | None = None,
    outcome_shared_rel_se: str | None = None,
    calibration: str | None = None,
    seed: int = 0,
) -> pd.DataFrame:
    """Compare groups of subjects, or states of the same subjects, in one outcome.

    Parameters
    ----------
    table : DataFrame
        One row an observation: a vessel, an image, an eye. Rows without a level of `by` are left out.
    outcome : str
        Column of numbers. Where all are above 0 they are compared as logarithms.
    by : str
        Column of levels. Where at least half of the subjects have both levels, differences of subjects are compared.
    reference : str
        The level that each other one is held against.
    subject : str
        Column that names the subject: the unit of the comparison.
    within : sequence of str
        Columns that name units within subjects, the widest first, such as eye, image; absent ones are left out.
    covariates : sequence of str
        Columns of numbers or of few words that are accounted for, linearly.
    outcome_rel_se : str, optional
        Column with the relative standard uncertainty of each value (k = 1) from causes of its own.
    outcome_shared_rel_se : str, optional
        Column with the relative standard uncertainty that all values of one calibration share.
    calibration : str, optional
        Column that names the calibration, such as the camera; all rows rest on one where it is not given.
    seed : int
        Of the permutation tests that cannot try all ways.

    Returns
    -------
    DataFrame
        The columns of comparison.csv, one row a level: `ratio` of geometric means, level over reference, with its 95 %
        interval; p adjusted over these rows (Benjamini and Hochberg 1995).

    Raises
    ------
    CohortError
        A column is missing or empty, there is one level or one subject only, the reference is not there, a covariate
        tells the same as the levels, an uncertainty or the seed is below 0.

    Notes
    -----
    Observations within a subject are not independent: with a design effect 1 + (m - 1) rho of 1.84, as of two eyes, a
    test that takes them so calls 15 % of nothing at 5 % (Rosner B. Biometrics 1982;38:105-114). Which method was used
    stands in `method`; see `vasohm.cohorts.contrast`. The uncertainty of the measurements is part of the scatter of
    subjects; stated, it gives less weight to what is measured worse and bounds the variance from below. What a
    calibration shares cancels between levels that have it in common and enters in full where they do not.
    """
    if seed < 0:
        raise CohortError(f"seed {seed} is below 0.")
    names = Names(
        outcome, by, subject, tuple(within), tuple(covariates), outcome_rel_se, outcome_shared_rel_se, calibration
    )
    observed = observe(table, names)
    others = other_levels(observed, names, reference)
    contrasts = [contrast(observed, level, reference, by, row_generator(seed, outcome, level)) for level in others]
    rows = [row_of(one, by, reference) | {"outcome": outcome} for one in contrasts]
    return comparison_frame(rows)


def other_levels(observed: Observations, names: Names, reference: str) -> list[str]:
    """Levels to be held against the reference, in their order; refuse where there is nothing to compare.

    Raises
    ------
    CohortError
        One level, one subject, no reference, or no level with two subjects on either side.
    """
    by, levels = names.by, observed.levels
    if len(levels) == 1:
        message = (
            f"all {len(observed.value)} rows with {names.outcome!r} have {by} {levels[0]!r}: nothing to compare with."
        )
        raise CohortError(message)
    if reference not in levels:
        raise CohortError(f"reference {reference!r} is no {by} with {names.outcome!r}; there are {named(levels)}.")
    if len(observed.subjects) == 1:
        message = (
            f"all {len(observed.value)} rows with {names.outcome!r} are of one subject, {observed.subjects[0]!r}: the "
            "subject is the unit, and one has no scatter."
        )
        raise CohortError(message)
    counts = {level: len(np.unique(observed.subject[observed.level == code])) for code, level in enumerate(levels)}
    others = [level for level in levels if level != reference]
    if counts[reference] < 2 or all(counts[level] < 2 for level in others):
        told = ", ".join(f"{level!r} has {count}" for level, count in counts.items())
        message = f"{names.outcome!r}: two subjects on either side are the least that can be compared; {told}."
        raise CohortError(message)
    return others


def row_generator(seed: int, *words: str) -> np.random.Generator:
    """Random numbers of one row: the same whatever other rows there are."""
    return np.random.default_rng([seed, *(zlib.crc32(word.encode()) for word in words)])


def row_of(one: Contrast, by: str, reference: str) -> dict[str, Any]:
    """Lay out a contrast as a row of comparison.csv."""
    ratio = [np.exp(value) if one.is_ln else np.nan for value in (one.effect, one.low, one.high)]
    flags = one.flags if one.is_ln else one.flags | {doubts.NOT_POSITIVE}
    return {
        "vessel_class": "",
        "calibre_class": "",
        "by": by,
        "level": one.level,
        "reference": reference,
        "n_subjects": one.n_subjects,
        "n_subjects_reference": one.n_subjects_reference,
        "n_observations": one.n_observations,
        "ratio": ratio[0],
        "ratio_lo": ratio[1],
        "ratio_hi": ratio[2],
        "hedges_g": one.hedges_g,
        "p": one.p,
        "p_permutation": one.p_permutation,
        "method": one.method,
        "flags": doubts.joined(set(flags)),
    }


def comparison_frame(rows: Sequence[dict[str, Any]]) -> pd.DataFrame:
    """Join rows of one family, with p adjusted over all of them."""
    frame = pd.DataFrame(list(rows), columns=[column.name for column in COMPARISON])
    frame["p_adjusted"] = adjusted(frame["p"].to_numpy(np.float64))
    return frame
