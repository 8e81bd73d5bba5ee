"""All outcomes of a study compared: one family of contrasts, and the tables that go with it."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy import stats

from vasohm.cohorts import doubts
from vasohm.cohorts.compare import comparison_frame, other_levels, row_generator, row_of
from vasohm.cohorts.contrast import Contrast, contrast, level_mean, nothing
from vasohm.cohorts.observations import Names, Observations, combined, observe
from vasohm.cohorts.outcomes import REL_SE, SHARED_REL_SE, VALUE, Outcome
from vasohm.cohorts.planning import ALPHA, POWER, subjects_needed, upper_sd
from vasohm.cohorts.units import subject_means
from vasohm.cohorts.variance import spread
from vasohm.errors import CohortError
from vasohm.results.columns_cohorts import COHORTS

CALIBRATION, REASON, IS_FLAGGED = "its calibration", "its reason", "is flagged"  # beside columns of the sheet
UNEQUAL_P = 0.05
FINISHED = ("measured", "empty")


@dataclass(frozen=True, slots=True)
class Question:
    """What is asked of a study: the levels of `by`, each against `reference`."""

    by: str
    reference: str
    within: tuple[str, ...]
    covariates: tuple[str, ...]
    plan_ratio: float | None
    seed: int

    def names(self, outcome: str = VALUE) -> Names:
        """Columns of the table that is compared."""
        return Names(outcome, self.by, "subject", self.within, self.covariates, REL_SE, SHARED_REL_SE, CALIBRATION)


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """The tables of `vasohm.results.columns_cohorts.COHORTS`, and what is said beside them."""

    tables: Mapping[str, pd.DataFrame]
    notes: tuple[str, ...]


def check_design(sheet: pd.DataFrame, question: Question) -> None:
    """Refuse what no outcome could be compared with.

    Parameters
    ----------
    sheet : one row an image that has tables, with the columns of the design and CALIBRATION.
    question : what is asked.

    Raises
    ------
    CohortError
        One level, one subject, subjects not named, neither groups nor pairs, or a covariate that tells the same as the
        levels.
    """
    rows = sheet.assign(**{"a value": 1.0, REL_SE: 0.0, SHARED_REL_SE: 0.0})
    names = question.names("a value")
    observed = observe(rows, names)
    for level in other_levels(observed, names, question.reference):
        contrast(observed, level, question.reference, question.by, row_generator(0))


def compare_all(
    outcomes: Sequence[Outcome], values: Sequence[pd.DataFrame], sheet: pd.DataFrame, question: Question
) -> Comparison:
    """Compare every outcome by class.

    Parameters
    ----------
    outcomes : what is compared.
    values : of each outcome, one row an image and class, as from `vasohm.cohorts.outcomes.image_values`.
    sheet : one row an image, with `image_id, status`, CALIBRATION, REASON, IS_FLAGGED and the columns of the design;
        images without a level of `by` have an empty cell there.
    question : what is asked.

    Returns
    -------
    Comparison
        p is adjusted over all rows of the table `comparison`: the declared family.
    """
    rows: dict[str, list[dict[str, Any]]] = {table: [] for table in COHORTS}
    notes = []
    for outcome, found in zip(outcomes, values, strict=True):
        for vessel_class in sorted(found["vessel_class"].unique()):
            of_what = {"outcome": outcome.name, "vessel_class": vessel_class, "calibre_class": outcome.calibre_class}
            held = found[found["vessel_class"] == vessel_class].drop(columns="vessel_class")
            table = sheet.merge(held, on="image_id", how="left")
            try:
                observed = observe(table[table["status"].isin(FINISHED)], question.names())
            except CohortError as nothing_left:
                notes.append(f"{'/'.join(filter(None, of_what.values()))}: left out: {nothing_left}")
                continue
            _add(rows, of_what, table, observed, question)
        if found.empty:
            words = f" of {outcome.calibre_class} µm" if outcome.calibre_class else ""
            notes.append(f"{outcome.name}{words}: no image that is compared has a value; left out.")
    comparison = comparison_frame(rows["comparison"])
    tables = {
        name: comparison
        if name == "comparison"
        else pd.DataFrame(rows[name], columns=[column.name for column in columns])
        for name, columns in COHORTS.items()
    }
    return Comparison(tables, tuple(notes))


def _add(
    rows: dict[str, list[dict[str, Any]]],
    of_what: dict[str, str],
    table: pd.DataFrame,
    observed: Observations,
    question: Question,
) -> None:
    """Add the rows of one outcome and class to every table."""
    lost = _attrition(table, question)
    rows["attrition"] += [of_what | one for one in lost]
    levels = [one["level"] for one in lost if one["level"] not in ("", question.reference)]
    for level in levels:
        found = _contrast(observed, level, question, "/".join(of_what.values()))
        row = row_of(found, question.by, question.reference)
        if _is_unequal(lost, level, question.reference):
            row["flags"] = doubts.joined({*filter(None, row["flags"].split(";")), doubts.UNEQUAL_LOSS})
        rows["comparison"].append(row | of_what)
        if question.plan_ratio is not None and found.is_ln:
            rows["planning"].append(of_what | _plan(found, question.reference, question.plan_ratio))
    for code, level in enumerate(observed.levels):
        mean, of_subjects = _level(observed, code)
        rows["levels"].append(of_what | {"level": level} | mean)
        rows["subjects"] += [of_what | {"level": level} | one for one in of_subjects]
    rows["variance"].append(of_what | _variance(observed, table, question))


def _contrast(observed: Observations, level: str, question: Question, what: str) -> Contrast:
    rng = row_generator(question.seed, what, level)
    try:
        return contrast(observed, level, question.reference, question.by, rng)
    except CohortError:  # the design as a whole was found sound: it is what is left of it
        codes = [observed.levels.index(one) for one in (level, question.reference)]
        sizes = [len(np.unique(observed.subject[observed.level == code])) for code in codes]
        return nothing(observed, level, sizes, {doubts.COVARIATE_COLLINEAR}, paired=False)


def _level(observed: Observations, code: int) -> tuple[dict[str, Any], list[dict[str, Any]]]:
    held = observed.some(observed.level == code)
    subjects, value, variance, shared = subject_means(held)
    back = np.exp if held.is_ln else np.asarray
    mean, low, high = (float(back(one)) for one in level_mean(value, variance, shared))
    counts = np.bincount(held.subject)[subjects]
    row = {
        "scale": "ln" if held.is_ln else "linear",
        "n_subjects": len(subjects),
        "n_observations": len(held.value),
        "mean": mean,
        "mean_lo": low,
        "mean_hi": high,
    }
    of_subjects = [
        {"subject": held.subjects[subject], "n_observations": int(count), "value": float(back(one))}
        for subject, count, one in zip(subjects, counts, value, strict=True)
    ]
    return row, of_subjects


def _variance(observed: Observations, table: pd.DataFrame, question: Question) -> dict[str, Any]:
    usable = table[table["status"].isin(FINISHED) & (table[question.by] != "")]
    usable = usable[np.isfinite(usable[VALUE].to_numpy(np.float64))]
    for name in question.covariates:
        usable = usable[usable[name] != ""]
    occasion = [column for column in ("eye", "group", "condition", "time", question.by) if column in usable]
    codes = [np.unique(usable[column].astype(str), return_inverse=True)[1] for column in occasion]
    found = spread(observed, combined(observed.subject, *codes))
    coefficient = found.repeatability_coefficient
    return {
        "scale": "ln" if observed.is_ln else "linear",
        "n_subjects": len(np.unique(observed.subject)),
        "n_observations": len(observed.value),
        "between_subjects_sd": found.between_subjects_sd,
        "between_eyes_sd": found.between_eyes_sd,
        "between_images_sd": found.between_images_sd,
        "measurement_sd": found.measurement_sd,
        "calibration_sd": found.calibration_sd,
        "repeats_df": found.repeats_df,
        "repeat_sd": found.repeat_sd,
        "repeatability_coefficient": coefficient,
        "minimum_detectable_ratio": np.exp(coefficient) if observed.is_ln else np.nan,
    }


def _plan(found: Contrast, reference: str, plan_ratio: float) -> dict[str, Any]:
    effect, sd = float(np.log(plan_ratio)), found.subject_sd
    return {
        "level": found.level,
        "reference": reference,
        "design": "pairs" if found.paired else "groups",
        "subject_sd": sd,
        "subject_df": found.subject_df,
        "plan_ratio": plan_ratio,
        "power": POWER,
        "alpha": ALPHA,
        "n_needed": subjects_needed(effect, sd, paired=found.paired),
        "n_careful": subjects_needed(effect, upper_sd(sd, found.subject_df), paired=found.paired),
    }


def _attrition(table: pd.DataFrame, question: Question) -> list[dict[str, Any]]:
    """Which images of each level gave no value, and why; those without a level last."""
    rows = []
    lacking = [(name, table[name].astype(str) == "") for name in question.covariates]
    finished = table["status"].isin(FINISHED)
    has_value = finished & np.isfinite(table[VALUE].to_numpy(np.float64))
    used = has_value.copy()
    for _, is_empty in lacking:
        used &= ~is_empty
    names = sorted(set(table[question.by]), key=lambda level: (level == "", level != question.reference, level))
    for level in names:
        here = table[question.by] == level
        held = table[here]
        left_out = []
        for place, image in held[~used[here]].iterrows():
            reason = image[REASON] or ("no value" if not has_value[place] else "")
            reason = reason or "no " + ", ".join(name for name, is_empty in lacking if is_empty[place])
            left_out.append(f"{image['image_id']} ({reason})")
        counts = held["status"].value_counts()
        rows.append(
            {
                "level": level,
                "n_subjects_sheet": held["subject"].nunique(),
                "n_subjects": held.loc[used[here], "subject"].nunique() if level else 0,
                "n_images_sheet": len(held),
                "n_measured": int(counts.get("measured", 0)),
                "n_empty": int(counts.get("empty", 0)),
                "n_failed": int(counts.get("failed", 0)),
                "n_flagged": int(held[IS_FLAGGED].sum()),
                "n_with_value": int(used[here].sum()) if level else 0,
                "left_out": "; ".join(left_out) if level else "; ".join(held["image_id"] + f" (no {question.by})"),
            }
        )
    return rows


def _is_unequal(lost: Sequence[Mapping[str, Any]], level: str, reference: str) -> bool:
    """Tell whether the two levels lost images unequally often (Fisher's exact test)."""
    sides = {one["level"]: (one["n_with_value"], one["n_images_sheet"] - one["n_with_value"]) for one in lost}
    if level not in sides or reference not in sides:
        return False
    return float(stats.fisher_exact(np.array([sides[level], sides[reference]]))[1]) < UNEQUAL_P
