"""What a comparison says of itself: how it was done, the family of tests, sources, names of outcomes."""

from collections.abc import Sequence

import numpy as np
import pandas as pd

from vasohm.cohorts.contrast import DIFFERENCES, MIXED, REGRESSED_DIFFERENCES, REGRESSION, WELCH
from vasohm.config.settings import CompareSettings
from vasohm.results.schema import outcome_columns

LEAST_P = 0.001  # below which a p-value is not told exactly
FAMILY = "all rows of comparison.csv: every outcome, class, range of calibre and level of this comparison"

REFERENCES = (
    (
        "Benjamini Y, Hochberg Y. Controlling the false discovery rate: a practical and powerful approach to multiple "
        "testing. J R Stat Soc B 1995;57:289-300, doi:10.1111/j.2517-6161.1995.tb02031.x"
    ),
    (
        "Bland JM, Altman DG. Measuring agreement in method comparison studies. Stat Methods Med Res 1999;8:135-160, "
        "doi:10.1177/096228029900800204"
    ),
    (
        "Freedman D, Lane D. A nonstochastic interpretation of reported significance levels. J Bus Econ Stat "
        "1983;1:292-298, doi:10.1080/07350015.1983.10509354"
    ),
    (
        "Hedges LV. Distribution theory for Glass's estimator of effect size and related estimators. J Educ Stat "
        "1981;6:107-128, doi:10.3102/10769986006002107"
    ),
    (
        "Janssen A. Studentized permutation tests for non-i.i.d. hypotheses and the generalized Behrens-Fisher "
        "problem. Stat Probab Lett 1997;36:9-21, doi:10.1016/S0167-7152(97)00043-6"
    ),
    "Joint Committee for Guides in Metrology. Guide to the expression of uncertainty in measurement. JCGM 100:2008",
    "Laird NM, Ware JH. Random-effects models for longitudinal data. Biometrics 1982;38:963-974, doi:10.2307/2529876",
    (
        "Paule RC, Mandel J. Consensus values and weighting factors. J Res Natl Bur Stand 1982;87:377-385, "
        "doi:10.6028/jres.087.022"
    ),
    (
        "Welch BL. The generalization of 'Student's' problem when several different population variances are involved. "
        "Biometrika 1947;34:28-35, doi:10.1093/biomet/34.1-2.28"
    ),
)

_METHODS = {
    MIXED: "a linear mixed model with random effects of subjects and what is nested in them (restricted maximum "
    "likelihood; degrees of freedom: subjects less fixed effects)",
    WELCH: "Welch's t test on means of subjects",
    REGRESSION: "a regression of means of subjects on level and covariates",
    DIFFERENCES: "a t test on differences of subjects",
    REGRESSED_DIFFERENCES: "a regression of differences of subjects on those of the covariates",
}
_WORDS = {
    "networks.resistance_pa_s_m3": "resistance of networks",
    "segments.resistance_pa_s_m3": "resistance of segments",
    "segments.radius_hydraulic_um": "hydraulic radius",
    "image.length_density_per_mm": "length density",
    "image.crae_um": "arteriolar equivalent (CRAE)",
    "image.crve_um": "venular equivalent (CRVE)",
    "image.avr": "arteriole-to-venule ratio",
    "zone.resistance_pa_s_m3": "resistance of the zone around the disc",
    "zone.radius_um": "radius in the zone around the disc",
}
_UNITS = {"Pa.s/m3": "Pa·s/m³", "um": "µm", "um2": "µm²", "um3": "µm³", "1": "", "/mm": "mm⁻¹", "{pixel}": "px"}


def outcome_words(outcome: str) -> str:
    """Name an outcome as a person would; others as their column."""
    return _WORDS.get(outcome, outcome.partition(".")[2].replace("_", " "))


def outcome_unit(outcome: str) -> str:
    """Unit of an outcome as it is written; empty where it has none."""
    table, _, name = outcome.partition(".")
    unit = next(column.unit for column in outcome_columns(table) if column.name == name)
    return _UNITS.get(unit, unit)


def class_words(vessel_class: str, calibre_class: str) -> str:
    """Name class and range of calibre; empty for all vessels together."""
    low, _, high = calibre_class.partition("-")
    calibre = f"radius {low} to {high} µm" if high else f"radius from {low} µm" if low else ""
    return ", ".join(filter(None, (f"{vessel_class}s" if vessel_class else "", calibre)))


def methods_paragraph(settings: CompareSettings, comparison: pd.DataFrame) -> str:
    """Say what was done, for a paper's methods."""
    used = [words for method, words in _METHODS.items() if (comparison["method"] == method).any()]
    covariates = f", with {', '.join(settings.covariates)} accounted for" if settings.covariates else ""
    return (
        f"Levels of {settings.by} were held against {settings.reference!r}{covariates}. The subject is the unit: "
        "values are one an image and class (conductances of networks summed; segments as means weighted by length, of "
        "logarithms), and images of an eye, then eyes of a subject, are averaged or modelled as nested. Positive "
        "outcomes are compared as logarithms, as ratios of geometric means with 95 % intervals, by "
        f"{'; '.join(used) or 'no method: too few subjects'}. Stated random uncertainty of the measurements gives "
        "less weight to what is measured worse and bounds the variance from below (Paule and Mandel). Uncertainty of "
        "the pixel size cancels between levels that rest on the same calibration and is in the interval in full where "
        "they do not. A permutation test of subjects stands beside each p (studentised, or of residuals by Freedman "
        "and Lane). Hedges' g is in standard deviations between subjects. p is adjusted by Benjamini and Hochberg "
        f"over {FAMILY} ({len(comparison)} rows)."
    )


def p_words(p: float) -> str:
    """Write a p-value with two digits, and none below 0.001; empty where there is none."""
    if not np.isfinite(p):
        return ""
    return "p < 0.001" if p < LEAST_P else f"p = {p:.2g}"


def summary_lines(comparison: pd.DataFrame, notes: Sequence[str]) -> list[str]:
    """Say each contrast in a line, and what was left out."""
    lines = []
    for row in comparison.to_dict("records"):
        what = ", ".join(
            filter(None, (outcome_words(row["outcome"]), class_words(row["vessel_class"], row["calibre_class"])))
        )
        told = f"{row['ratio']:.3f} ({row['ratio_lo']:.3f} to {row['ratio_hi']:.3f}), {p_words(row['p'])}"
        told = told if np.isfinite(row["ratio"]) else f"no ratio, {p_words(row['p']) or 'no p'}"
        flags = f" [{row['flags']}]" if row["flags"] else ""
        told += f", adjusted {row['p_adjusted']:.2g}" if np.isfinite(row["p_adjusted"]) else ""
        lines.append(f"{what}: {row['level']} / {row['reference']} {told}{flags}")
    return [*lines, *notes]
