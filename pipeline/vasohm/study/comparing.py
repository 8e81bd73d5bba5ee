"""Cohorts of a measured study compared: results read, the design checked, tables, plots and page written."""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from vasohm.cohorts.family import (
    CALIBRATION,
    FINISHED,
    IS_FLAGGED,
    REASON,
    Comparison,
    Question,
    check_design,
    compare_all,
)
from vasohm.cohorts.outcomes import Outcome, columns_needed, image_values
from vasohm.config.settings import CompareSettings
from vasohm.config.study_file import Study
from vasohm.errors import CohortError, Problem, RequestError
from vasohm.results.columns_cohorts import COHORTS, ZONE
from vasohm.results.columns_pairs import PAIRED
from vasohm.results.encode import frame_bytes, json_bytes
from vasohm.results.schema import SCHEMA_VERSION
from vasohm.results.write import write_atomically
from vasohm.results.write_study import StudyTable, write_datapackage, write_references
from vasohm.study.appraise import few, finished_study
from vasohm.study.compared_tables import read_outcome_tables, read_zone
from vasohm.study.comparison_page import comparison_page
from vasohm.study.comparison_plots import draw_forest, draw_levels
from vasohm.study.comparison_words import FAMILY, REFERENCES, methods_paragraph
from vasohm.study.current import versions_used
from vasohm.study.folder import probe
from vasohm.study.outcome import PENDING
from vasohm.study.paired import compare_pairs
from vasohm.study.paired_page import paired_part
from vasohm.study.state import StudyState

SEED = 0
# What does not change the values that are compared.
OTHER_KEYS = ("study.", "output.", "run.", "scenario", "compare")
DESIGN = ("subject", "eye", "group", "condition", "time")


@dataclass(frozen=True, slots=True, eq=False)
class StudyComparison:
    """The cohorts of a study compared: settings, outcomes, tables, and what was measured with."""

    study: Study
    settings: CompareSettings
    outcomes: tuple[Outcome, ...]
    comparison: Comparison
    state: StudyState
    paired: Mapping[str, pd.DataFrame]  # two states of one bed, where conditions or times are compared
    zone: pd.DataFrame | None  # vessels around the optic disc, where an outcome is of them


def compare_study(study: Study, results_dir: Path) -> StudyComparison:
    """Compare the cohorts of a study as its table [compare] asks.

    Parameters
    ----------
    study : Study
        The study; its sheet tells the design as it is now, so that covariates may be added after measuring.
    results_dir : Path
        Folder that was `--out` of `measure`, all its images measured, empty or failed.

    Raises
    ------
    RequestError
        No [compare]; results of another study, of other settings, or not finished; a design that cannot be compared; an
        outcome of which there is no value.
    """
    settings = study.compare
    if settings is None:
        message = 'is missing. Say what is compared: by = "group" and reference = "control", as columns of the sheet.'
        raise RequestError([Problem(file=study.path.name, column="compare", message=message)])
    state = finished_study(results_dir)
    _check_results(study, state, results_dir)
    outcomes = _outcomes(study, settings)
    tables = read_outcome_tables(results_dir, columns_needed(outcomes))
    sheet = _sheet(study, settings, state, tables["image"])
    question = Question(
        settings.by,
        settings.reference,
        ("eye",) if "eye" in sheet else (),
        settings.covariates,
        settings.plan_ratio,
        SEED,
    )
    _check_design(study, sheet, question)
    compared = set(sheet.loc[sheet[settings.by] != "", "image_id"])
    held = {name: table[table["image_id"].isin(compared)] for name, table in tables.items()}
    if any(outcome.table == "zone" for outcome in outcomes):
        held["zone"] = read_zone(results_dir, held["image"])
    values = [image_values(outcome, held) for outcome in outcomes]
    _check_values(study, settings, outcomes, values)
    comparison = compare_all(outcomes, values, sheet, question)
    paired = compare_pairs(results_dir, sheet, settings, study.settings)
    return StudyComparison(study, settings, outcomes, comparison, state, paired, held.get("zone"))


def write_comparison(found: StudyComparison, out_dir: Path) -> None:
    """Write the tables, plots, page, data package and references of a comparison.

    Raises
    ------
    RequestError
        When the folder cannot be written, or holds the results of `measure`.
    OSError
        When a file cannot be written.
    """
    if (out_dir / "study.json").exists():
        message = f"holds the results of measure. Give --out a folder of its own, as in {out_dir / 'compared'}."
        raise RequestError([Problem(file=str(out_dir), message=message)])
    probe(out_dir)
    written = []
    frames = {**found.comparison.tables, **found.paired} | ({} if found.zone is None else {"zone": found.zone})
    for name, columns in {**COHORTS, "zone": ZONE, **PAIRED}.items():
        frame = frames.get(name, pd.DataFrame())
        if frame.empty and (name == "planning" or name not in frames):
            (out_dir / f"{name}.csv").unlink(missing_ok=True)
            continue
        content = frame_bytes(frame, columns)
        write_atomically(out_dir / f"{name}.csv", content)
        digest = hashlib.sha256(content).hexdigest()
        written.append(StudyTable(f"{name}.csv", name, columns, len(content), digest))
    tables, by = found.comparison.tables, found.settings.by
    pictures = {"forest": draw_forest(tables["comparison"])}
    for number, outcome in enumerate(dict.fromkeys(one.name for one in found.outcomes), start=1):
        if (tables["levels"]["outcome"] == outcome).any():
            pictures[f"levels-{number}"] = draw_levels(tables, outcome, by, found.settings.reference)
    for stale in (*out_dir.glob("levels-*.svg"), *out_dir.glob("levels-*.png")):
        if stale.stem not in pictures:
            stale.unlink()
    for name, drawn in pictures.items():
        for kind, content in drawn.items():
            write_atomically(out_dir / f"{name}.{kind}", content)
    write_references(out_dir, REFERENCES)
    write_datapackage(out_dir, f"{found.study.name} compared", written, ())
    write_atomically(out_dir / "compare.json", json_bytes(_told(found)))
    files = [table.file for table in written]
    files += ["datapackage.json", "compare.json", "references.bib"]
    page = comparison_page(
        found.study.name,
        found.settings,
        found.comparison,
        found.state.methods.cautions,
        {"pictures": tuple(pictures), "files": tuple(files)},
        further=paired_part(found.paired),
    )
    write_atomically(out_dir / "index.html", page.encode())


def _told(found: StudyComparison) -> dict[str, Any]:
    settings = found.settings
    return {
        "schema_version": SCHEMA_VERSION,
        "study": found.study.name,
        "by": settings.by,
        "reference": settings.reference,
        "outcomes": [f"{one.name} {one.calibre_class}".strip() for one in found.outcomes],
        "covariates": list(settings.covariates),
        "plan_ratio": settings.plan_ratio,
        "seed": SEED,
        "family": FAMILY,
        "methods": methods_paragraph(settings, found.comparison.tables["comparison"]),
        "notes": list(found.comparison.notes),
        "versions": versions_used(found.study.settings) | {"statsmodels": version("statsmodels")},
        "measured_with": dict(found.state.versions),
    }


def _check_results(study: Study, state: StudyState, results_dir: Path) -> None:
    """Refuse results that are not those of the study, all of it, as it would be measured now."""
    place = str(results_dir)
    if state.study != study.name:
        message = f"holds the results of study {state.study!r}, not of {study.name!r}. Give the folder of this study."
        raise RequestError([Problem(file=place, message=message)])
    known = {image.image_id: image.status for image in state.images}
    absent = [source.image_id for source in study.images if known.get(source.image_id, PENDING) == PENDING]
    if absent:
        message = f"lacks {few(absent)} of {len(study.images)} images of the sheet. Run measure to its end first."
        raise RequestError([Problem(file=place, message=message)])
    now = json.loads(json.dumps({key: entry["value"] for key, entry in study.resolved.items()}))
    for key, value in now.items():
        entry = state.configuration.get(key)
        then = entry.get("value") if isinstance(entry, Mapping) else None
        if not key.startswith(OTHER_KEYS) and then != value:
            message = f"was measured with {key} = {then!r}; the study now says {value!r}. Measure again."
            raise RequestError([Problem(file=place, message=message, column=key)])


def _outcomes(study: Study, settings: CompareSettings) -> tuple[Outcome, ...]:
    """Each outcome; those of segments once a class of calibre."""
    ranges: tuple[tuple[float, float], ...] = settings.radius_um
    if not ranges and not settings.outcomes_named:
        limits = study.settings.shape.calibre_um
        ranges = tuple(zip((0.0, *limits), (*limits, np.inf), strict=True))
    outcomes = []
    for name in settings.outcomes:
        if ranges and name.startswith("segments."):
            outcomes += [Outcome(name, one) for one in ranges]
        else:
            outcomes.append(Outcome(name))
    return tuple(outcomes)


def _sheet(study: Study, settings: CompareSettings, state: StudyState, images: pd.DataFrame) -> pd.DataFrame:
    """One row an image of the sheet: its design, what became of it, and on which calibration it rests."""
    first = study.images[0].design
    if "subject" not in first:
        message = (
            "has no column subject: two of its images could be one subject's. Name the subject of each image; where "
            "each is another one, give each its own name."
        )
        raise RequestError([Problem(file=study.sheet, column="subject", message=message)])
    ends = {image.image_id: image for image in state.images}
    wanted = dict.fromkeys([*(name for name in DESIGN if name in first), settings.by, *settings.covariates])
    rows = []
    for source in study.images:
        end = ends[source.image_id]
        reason = f"failed: {end.failure.error}" if end.failure is not None else ""
        row = {"image_id": source.image_id, "status": end.status, REASON: reason}
        rows.append(row | {name: source.design[name] for name in wanted})
    typed = [source.design.get("calibration", "") for source in study.images]
    scales = images.set_index("image_id")
    told = scales[["pixel_size_source", "pixel_size_um", "pixel_size_se_um"]].astype(str).agg(" ".join, axis=1)
    sheet = pd.DataFrame(rows)
    own = sheet["image_id"].map(told).fillna("")
    sheet[CALIBRATION] = [said or scale for said, scale in zip(typed, own, strict=True)]
    sheet[IS_FLAGGED] = sheet["image_id"].map(scales["flags"] != "").eq(other=True)
    return sheet


def _check_design(study: Study, sheet: pd.DataFrame, question: Question) -> None:
    finished = sheet[sheet["status"].isin(FINISHED)]
    if finished.empty:
        message = f"none of its {len(sheet)} images was measured."
        raise RequestError([Problem(file=study.sheet, column="compare", message=message)])
    try:
        check_design(finished, question)
    except CohortError as fault:
        raise RequestError([Problem(file=study.sheet, column="compare", message=str(fault))]) from None


def _check_values(
    study: Study, settings: CompareSettings, outcomes: tuple[Outcome, ...], values: list[pd.DataFrame]
) -> None:
    """Refuse an outcome that the study names and no image has."""
    problems = []
    for name in settings.outcomes:
        if settings.outcomes_named and all(
            v.empty for one, v in zip(outcomes, values, strict=True) if one.name == name
        ):
            hint = "It needs an optic disc; look" if name.startswith("zone.") else "Look"
            message = (
                f"{name!r} has no value in any image that is compared. {hint} at the flags of the results, or leave "
                "it out."
            )
            problems.append(Problem(study.path.name, message, column="compare.outcomes", value=name))
    if problems or all(found.empty for found in values):
        message = f"no image that is compared has a value of {few(list(settings.outcomes))}."
        raise RequestError(problems or [Problem(study.path.name, message, column="compare.outcomes")])
