"""Columns of the tables that `compare` writes."""

from collections.abc import Mapping

from vasohm.results.column import Column, count, number, text
from vasohm.results.columns_vessels import CLASSES, IMAGE_ID

OUTCOME = text("outcome", "What is compared: table and column of the results; one value an image and class.")
VESSEL_CLASS = text("vessel_class", "Class of the vessels or networks; empty for all together.", CLASSES)
CALIBRE_CLASS = text(
    "calibre_class", "Range of the mean lumen radius in um, from-to, of the segments; empty for all together."
)
BY = text("by", "Column of the image sheet whose levels are compared.")
OF_WHAT = (OUTCOME, VESSEL_CLASS, CALIBRE_CLASS)

COMPARISON: tuple[Column, ...] = (
    *OF_WHAT,
    BY,
    text("level", "Level that is held against the reference."),
    text("reference", "Level that the others are held against."),
    count("n_subjects", "Number of subjects with a value at the level."),
    count("n_subjects_reference", "Number of subjects with a value at the reference."),
    count("n_observations", "Number of values, one an image and class, of both levels together."),
    number("ratio", "1", "Ratio of geometric means, level over reference; empty where values are not all above 0."),
    number("ratio_lo", "1", "Lower bound of the 95 % interval of the ratio of geometric means."),
    number("ratio_hi", "1", "Upper bound of the 95 % interval of the ratio of geometric means."),
    number(
        "hedges_g",
        "1",
        "Difference in standard deviations between subjects, without the bias of small samples (Hedges, J Educ Stat "
        "1981;6:107-128); of logarithms where there is a ratio. For pairs the yardstick is the mean of both variances "
        "(Lakens, Front Psychol 2013;4:863, eq. 10).",
    ),
    number("p", "1", "Two-sided p of no difference, by the method named."),
    number("p_permutation", "1", "Two-sided p by rearranging subjects: all ways where few, else 9999 seeded draws."),
    number(
        "p_adjusted",
        "1",
        "p adjusted for the share of false discoveries over all rows of the table (Benjamini and Hochberg, J R Stat "
        "Soc B 1995;57:289-300).",
    ),
    text(
        "method",
        "mixed model, with subjects and what is nested in them as random effects; welch, on means of subjects; "
        "regression of subject means; differences of subjects; regression of differences; none, where subjects are "
        "too few.",
        (
            "mixed model",
            "welch",
            "regression of subject means",
            "differences of subjects",
            "regression of differences",
            "none",
        ),
    ),
    Column("flags", "list", "", "Codes of what is doubtful about the comparison, joined by semicolons; see the page."),
)

LEVELS: tuple[Column, ...] = (
    *OF_WHAT,
    text("level", "Level of the column that is compared."),
    text("scale", "ln, where the mean is geometric; linear, where it is arithmetic.", ("ln", "linear")),
    count("n_subjects", "Number of subjects with a value at this level."),
    count("n_observations", "Number of values at this level, one an image and class."),
    number("mean", "{outcome}", "Mean over subjects at this level, in the unit of the outcome."),
    number("mean_lo", "{outcome}", "Lower bound of the 95 % interval of the mean, shared uncertainty in full."),
    number("mean_hi", "{outcome}", "Upper bound of the 95 % interval of the mean, shared uncertainty in full."),
)

SUBJECTS: tuple[Column, ...] = (
    *OF_WHAT,
    text("level", "Level at which the subject was seen."),
    text("subject", "The subject, as named in the image sheet."),
    count("n_observations", "Number of the subject's values at this level."),
    number("value", "{outcome}", "Mean of the subject's values, those of an eye first; geometric where scale is ln."),
)

_SCALE_NOTE = "on the scale of comparison: of ln(value), a relative one, where scale is ln"
VARIANCE: tuple[Column, ...] = (
    *OF_WHAT,
    text("scale", "ln, where standard deviations are of logarithms; linear, where of values.", ("ln", "linear")),
    count("n_subjects", "Number of subjects with a value at any level."),
    count("n_observations", "Number of values at all levels, one an image and class."),
    number(
        "between_subjects_sd",
        "{outcome}",
        f"Standard deviation between subjects, {_SCALE_NOTE}. With one image a subject, that between images is in it.",
    ),
    number("between_eyes_sd", "{outcome}", f"Standard deviation between eyes of a subject, {_SCALE_NOTE}."),
    number(
        "between_images_sd",
        "{outcome}",
        f"Standard deviation between images of an eye without the measurement's own, {_SCALE_NOTE}; where subjects "
        "were seen at several levels, also between their responses. Empty where no eye has several images.",
    ),
    number(
        "measurement_sd", "{outcome}", f"Root mean square of the stated uncertainty of a value's own, {_SCALE_NOTE}."
    ),
    number(
        "calibration_sd",
        "{outcome}",
        f"Root mean square of the stated uncertainty from the pixel size, {_SCALE_NOTE}. Common to all images of a "
        "calibration, so that it is not in the other spreads.",
    ),
    count("repeats_df", "Degrees of freedom of repeated images of a subject and eye at the same level and occasion."),
    number("repeat_sd", "{outcome}", f"Standard deviation of such repeats, {_SCALE_NOTE}."),
    number(
        "repeatability_coefficient",
        "{outcome}",
        "Two repeats differ by less with a probability of 95 %: 1.96 times the root of 2 times repeat_sd, "
        f"{_SCALE_NOTE} (Bland and Altman, Stat Methods Med Res 1999;8:135-160).",
    ),
    number(
        "minimum_detectable_ratio",
        "1",
        "Least ratio of two single images of one subject that is more than repeatability: exp of the coefficient; "
        "empty where scale is linear or nothing was repeated.",
    ),
)

PLANNING: tuple[Column, ...] = (
    *OF_WHAT,
    text("level", "Level of the contrast that is planned for."),
    text("reference", "Reference of the contrast that is planned for."),
    text("design", "groups of different subjects, or pairs of the same subjects.", ("groups", "pairs")),
    number("subject_sd", "1", "Standard deviation of ln(value) between subjects of a group, or of pairs' differences."),
    count("subject_df", "Degrees of freedom of subject_sd."),
    number("plan_ratio", "1", "Ratio that the next study should see."),
    number("power", "1", "Probability with which it sees that ratio."),
    number("alpha", "1", "Two-sided level of the test."),
    count("n_needed", "Subjects needed a group, or pairs, with as many images each (t test, noncentral t)."),
    count(
        "n_careful",
        "The same for the upper 80 % limit of subject_sd, which few subjects do not know well (Browne, Stat Med "
        "1995;14:1933-1940).",
    ),
)

ATTRITION: tuple[Column, ...] = (
    *OF_WHAT,
    text("level", "Level of the column that is compared; empty for images without one, which are not compared."),
    count("n_subjects_sheet", "Number of subjects in the image sheet at this level."),
    count("n_subjects", "Number of subjects with a value."),
    count("n_images_sheet", "Number of images in the image sheet at this level."),
    count("n_measured", "Number of these images that were measured."),
    count("n_empty", "Number of these images in which no vessel was found."),
    count("n_failed", "Number of these images that could not be measured."),
    count("n_flagged", "Number of these measured images that carry a flag of doubt."),
    count("n_with_value", "Number of these images that give a value of this outcome and class, and all covariates."),
    text("left_out", "The other images by name, each with the reason."),
)

ZONE: tuple[Column, ...] = (
    IMAGE_ID,
    text("vessel_class", "Class of the vessels inside the zone; empty for those of which none is said.", CLASSES),
    count("n_segments", "Number of segments with a part inside the zone."),
    number("length_um", "um", "Length of vessels inside the zone."),
    number("radius_um", "um", "Geometric mean of the local lumen radius inside the zone, weighted by length."),
    number(
        "resistance_pa_s_m3",
        "Pa.s/m3",
        "Resistance of the zone from its inner to its outer edge: vessels side by side in each of ten rings, the "
        "rings in series; empty where a ring holds none. It does not depend on where the picture ends outside the "
        "zone.",
    ),
    number("ln_resistance_random_se", "1", "Standard uncertainty of ln(resistance of the zone) from noise (k = 1)."),
    number(
        "ln_resistance_shared_se",
        "1",
        "Standard uncertainty of ln(resistance of the zone) from what the whole image has in common (k = 1).",
    ),
)

COHORTS: Mapping[str, tuple[Column, ...]] = {
    "comparison": COMPARISON,
    "levels": LEVELS,
    "subjects": SUBJECTS,
    "variance": VARIANCE,
    "planning": PLANNING,
    "attrition": ATTRITION,
}

COHORTS_MEANING: Mapping[str, str] = {
    "comparison": "One row an outcome, class and level: how it differs from the reference.",
    "levels": "One row an outcome, class and level: its mean over subjects.",
    "subjects": "One row an outcome, class, level and subject: the values that are compared.",
    "variance": "One row an outcome and class: where its spread comes from.",
    "planning": "One row a contrast: how many subjects a next study needs.",
    "attrition": "One row an outcome, class and level: which images of the sheet gave no value, and why.",
    "zone": "One row an image and class: vessels inside the zone around the optic disc.",
}

_KEY = ("outcome", "vessel_class", "calibre_class")
COHORTS_KEYS: Mapping[str, tuple[str, ...]] = {
    "comparison": (*_KEY, "level"),
    "levels": (*_KEY, "level"),
    "subjects": (*_KEY, "level", "subject"),
    "variance": _KEY,
    "planning": (*_KEY, "level"),
    "attrition": (*_KEY, "level"),
    "zone": ("image_id", "vessel_class"),
}
