"""The page of a comparison: who was compared, what differs, what is doubtful, how it was done. Opens no file."""

import math
import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import pandas as pd

from vasohm.cohorts.doubts import MEANING
from vasohm.cohorts.family import Comparison
from vasohm.config.settings import CompareSettings
from vasohm.results.markup import (
    Html,
    heading,
    html,
    interval,
    link,
    listing,
    page,
    paragraph,
    picture,
    shown,
    table,
    terms,
)
from vasohm.results.pages import named
from vasohm.study.comparison_words import (
    FAMILY,
    REFERENCES,
    class_words,
    methods_paragraph,
    outcome_unit,
    outcome_words,
    p_words,
)
from vasohm.study.ending import CAUTION

_WHAT = ("outcome", "vessels")
_LEFT_OUT = re.compile(r"(\S+) \(([^)]*)\)")
OWN_CAUTIONS = (
    (
        "A difference between cohorts is not its cause: groups that were not drawn by lot may differ in more than "
        "what is compared."
    ),
    (
        "Networks that the field of view cuts have a resistance that depends on where it cuts: compare fields of the "
        "same place and size."
    ),
    "Ranges of calibre sort vessels by their measured radius: where a state changes radii, vessels change their range.",
)


def comparison_page(
    name: str,
    settings: CompareSettings,
    comparison: Comparison,
    cautions: Sequence[str],
    beside: Mapping[str, Sequence[str]],
    *,
    further: Sequence[Html] = (),
) -> str:
    """Build the page.

    Parameters
    ----------
    name : of the study.
    settings : what was asked.
    comparison : what was found.
    cautions : those of the measurement.
    beside : names of `pictures`, without their ending, and of `files` in the same folder.
    further : what stands before the cautions.
    """
    tables = comparison.tables
    contrasts = _rows(tables["comparison"])
    body = [heading(f"{name}: cohorts compared", 1), paragraph(_lead(settings, contrasts))]
    body += [heading("Who was compared", 2), _attrition(_rows(tables["attrition"]), settings.by)]
    body += [listing(comparison.notes)] if comparison.notes else []
    body += [heading("What differs", 2), _pictures("forest", "Ratios of all contrasts with their 95 % intervals")]
    body += [_contrasts(contrasts), heading("What the flags mean", 2), _flags(contrasts)]
    body.append(heading("Subjects", 2))
    shown_levels = [one for one in beside["pictures"] if one.startswith("levels")]
    body += [_pictures(one, "Values of subjects by level, mean and 95 % interval") for one in shown_levels]
    body += [heading("Where the spread comes from", 2), _variance(_rows(tables["variance"]))]
    if not tables["planning"].empty:
        body += [heading("How many subjects a next study needs", 2), _planning(_rows(tables["planning"]))]
    body += further
    body += [heading("Cautions", 2), listing([CAUTION, *OWN_CAUTIONS, *(one for one in cautions if one != CAUTION)])]
    body += [heading("Methods", 2), paragraph(methods_paragraph(settings, tables["comparison"]))]
    body += [heading("References", 2), listing(REFERENCES, numbered=True)]
    body += [heading("Files", 2), listing(link(one, one) for one in beside["files"])]
    return page(f"{name} compared - vasohm", body)


def _lead(settings: CompareSettings, contrasts: Sequence[Mapping[str, Any]]) -> str:
    called = sum(row["p_adjusted"] < 0.05 for row in contrasts)
    known = sum(not math.isnan(row["p"]) for row in contrasts)
    covariates = f" Accounted for: {', '.join(settings.covariates)}." if settings.covariates else ""
    return (
        f"Compared: {settings.by}, each level against {settings.reference}. {known} of {len(contrasts)} contrasts "
        f"could be made; {called} have an adjusted p below 0.05.{covariates} The subject is the unit. The family of "
        f"the adjustment is {FAMILY}."
    )


def _attrition(rows: Sequence[Mapping[str, Any]], by: str) -> Html:
    names = (
        "outcome",
        by,
        "subjects in the sheet",
        "with a value",
        "images in the sheet",
        "measured",
        "empty",
        "failed",
        "with a flag",
        "images with a value",
        "left out, and why",
    )
    counts = ("n_subjects_sheet", "n_subjects", "n_images_sheet", "n_measured", "n_empty", "n_failed", "n_flagged")
    alike: dict[tuple[str, ...], list[str]] = {}
    for row in rows:
        told = (
            row["level"] or "(none)",
            *(str(row[one]) for one in (*counts, "n_with_value")),
            _reasons(row["left_out"]),
        )
        alike.setdefault(told, []).append(", ".join(part for part in _what(row) if part != "all"))
    every = len({_what(row) for row in rows})
    lines = [["all" if len(what) == every else "; ".join(what), *told] for told, what in alike.items()]
    return table(names, lines, names[2:-1])


def _reasons(left_out: str) -> str:
    """Say each reason once, with how many images and the first of them by name."""
    by_reason: dict[str, list[str]] = {}
    for image_id, reason in _LEFT_OUT.findall(left_out):
        by_reason.setdefault(reason, []).append(image_id)
    return "; ".join(f"{len(ids)} {reason} ({named(ids)})" for reason, ids in by_reason.items())


def _contrasts(rows: Sequence[Mapping[str, Any]]) -> Html:
    numbers = ("subjects", "images", "ratio, 95 % interval", "Hedges' g", "p", "p by permutation", "p adjusted")
    names = (*_WHAT, "level / reference", *numbers, "method", "flags")
    lines = [
        [
            *_what(row),
            f"{row['level']} / {row['reference']}",
            f"{row['n_subjects']} / {row['n_subjects_reference']}",
            str(row["n_observations"]),
            interval(row["ratio"], row["ratio_lo"], row["ratio_hi"]) if not math.isnan(row["ratio"]) else "none",
            shown(row["hedges_g"], 2),
            *(
                p_words(row[one]).removeprefix("p = ").removeprefix("p ")
                for one in ("p", "p_permutation", "p_adjusted")
            ),
            row["method"],
            _flag_links(row["flags"]),
        ]
        for row in rows
    ]
    return table(names, lines, numbers)


def _variance(rows: Sequence[Mapping[str, Any]]) -> Html:
    numbers = (
        "between subjects",
        "between eyes",
        "between images",
        "measurement",
        "pixel size",
        "repeats (degrees of freedom)",
        "repeatability coefficient",
        "minimum detectable ratio",
    )
    keys = (
        "between_subjects_sd",
        "between_eyes_sd",
        "between_images_sd",
        "measurement_sd",
        "calibration_sd",
        "repeats_df",
        "repeatability_coefficient",
        "minimum_detectable_ratio",
    )
    lines = [[*_what(row), row["scale"], *(shown(float(row[key]), 3) for key in keys)] for row in rows]
    told = table((*_WHAT, "scale", *numbers), lines, numbers)
    lead = paragraph(
        "Standard deviations; on the scale ln they are those of logarithms, so that 0.1 is about 10 %. The "
        "repeatability coefficient and the minimum detectable ratio are of two single images of one subject and eye."
    )
    return Html(lead.source + told.source)


def _planning(rows: Sequence[Mapping[str, Any]]) -> Html:
    numbers = ("SD of ln between subjects", "ratio to see", "subjects needed", "careful number")
    names = (*_WHAT, "level / reference", "design", *numbers)
    lines = [
        [
            *_what(row),
            f"{row['level']} / {row['reference']}",
            "a group" if row["design"] == "groups" else "pairs",
            shown(row["subject_sd"]),
            shown(row["plan_ratio"]),
            *(_whole(row[one]) for one in ("n_needed", "n_careful")),
        ]
        for row in rows
    ]
    lead = paragraph(
        "For a power of 80 % at a two-sided 5 %, by the t test, with as many images a subject as here. The careful "
        "number is for a scatter that the true one lies below with a probability of 80 %: few subjects do not know it "
        "well."
    )
    return Html(lead.source + table(names, lines, numbers).source)


def _whole(value: float) -> str:
    return "" if math.isnan(value) else f"{value:.0f}"


def _what(row: Mapping[str, Any]) -> tuple[str, str]:
    unit = outcome_unit(row["outcome"])
    words = f"{outcome_words(row['outcome'])}{f' ({unit})' if unit else ''}"
    return words, class_words(row["vessel_class"], row["calibre_class"]) or "all"


def _pictures(name: str, alternative: str) -> Html:
    svg = picture(f"{name}.svg", alternative)
    both = Html(f"{link(f'{name}.svg', 'SVG').source}, {link(f'{name}.png', 'PNG').source}")
    return Html(f"<figure>{svg.source}<figcaption>{html(alternative)} ({both.source})</figcaption></figure>")


def _flag_links(flags: str) -> Html:
    return Html(", ".join(f'<a href="#flag-{html(one)}">{html(one)}</a>' for one in flags.split(";") if one))


def _flags(rows: Iterable[Mapping[str, Any]]) -> Html:
    found = {one for row in rows for one in row["flags"].split(";") if one}
    if not found:
        return paragraph("No doubt is marked.")
    return terms(
        (Html(f'<span id="flag-{code}">{code}</span>'), words) for code, words in MEANING.items() if code in found
    )


def _rows(frame: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(key): value for key, value in row.items()} for row in frame.to_dict("records")]
