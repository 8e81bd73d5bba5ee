"""Columns of the tables that hold two states of one bed against each other."""

from collections.abc import Mapping

from vasohm.results.column import Column, count, number, text
from vasohm.results.columns_vessels import CLASSES, FLAGS

_SUBJECT = text("subject", "The subject that both images show, as named in the image sheet.")
_EYE = text("eye", "The eye, as named in the image sheet; empty where the sheet has none.")
_GROUP = text("group", "The group, as named in the image sheet; empty where the sheet has none.")
_STATES = (
    text("condition_a", "Condition or time that the other is held against: the reference of [compare]."),
    text("condition_b", "Condition or time that is held against it."),
)
_PAIR = (
    _SUBJECT,
    _EYE,
    *_STATES,
    text("image_id_a", "The image at condition_a."),
    text("image_id_b", "The image at condition_b."),
)
_CLASS = text("vessel_class", "Kind of vessel in image a, or in image b where a does not say it.", CLASSES)
_COMMON = number("common_length_um", "um", "Length in image a of the stretches that both images show.")
_RESISTANCE_LO = number("resistance_ratio_lo", "1", "Lower bound of the 95 % interval of the ratio of resistances.")
_RESISTANCE_HI = number("resistance_ratio_hi", "1", "Upper bound of the 95 % interval of the ratio of resistances.")
_RANDOM = number(
    "ln_ratio_random_se", "1", "Standard uncertainty of ln(resistance ratio) from noise in both images, of its own."
)
_SHARED = number(
    "ln_ratio_shared_se",
    "1",
    "Standard uncertainty of ln(resistance ratio) from what all vessels of the pair have in common: the optics of each "
    "image, by how much both pixel sizes disagree, and what of pixel size and hematocrit does not cancel.",
)

IMAGE_PAIRS: tuple[Column, ...] = (
    *_PAIR,
    _GROUP,
    text("status", "Whether the two images were laid on each other.", ("matched", "refused")),
    text("reason", "Why a pair is refused; empty where it is matched."),
    number("shift_x_um", "um", "How far the middle of image b lies to the right of the middle of image a."),
    number("shift_y_um", "um", "How far the middle of image b lies below the middle of image a."),
    number("turn_deg", "deg", "By how much image b is turned in image a, from the x axis towards the y axis."),
    number("scale", "1", "Length in image a over that in image b in um: 1 where both pixel sizes agree."),
    number(
        "overlap",
        "1",
        "Share of the centrelines within both fields of view that has a counterpart: twice the common length over the "
        "sum of both (Dice, Ecology 1945;26:297-302). Below 0.5 a pair is refused.",
    ),
    number("field_overlap", "1", "Share of the smaller field of view that lies within the other one."),
    number("rms_px", "{pixel}", "Root mean square distance between matched centrelines, in pixels of image a."),
    count("n_segments", "Number of rows in pairs.csv."),
    _COMMON,
    number("common_fraction", "1", "Common length over the length of a's vessels within both fields of view."),
    FLAGS,
)

PAIRS: tuple[Column, ...] = (
    *_PAIR,
    count("segment_id_a", "The segment in image a; one that is cut differently in b has a row for each part."),
    count("segment_id_b", "The segment in image b."),
    _CLASS,
    _COMMON,
    number("radius_a_um", "um", "Mean lumen radius of the segment in image a."),
    number("radius_ratio", "1", "Geometric mean over the common length of the ratio of local lumen radii, b over a."),
    number("radius_ratio_se", "1", "Standard uncertainty of the radius ratio, random and shared parts (k = 1)."),
    number(
        "resistance_ratio",
        "1",
        "Ratio of the resistances of the common stretch, b over a, each by its own state's radii and hematocrit.",
    ),
    _RESISTANCE_LO,
    _RESISTANCE_HI,
    _RANDOM,
    _SHARED,
    FLAGS,
)

NETWORK_PAIRS: tuple[Column, ...] = (
    *_PAIR,
    count("network_id_a", "The network in image a, whose graph, inlets and outlets hold for both states."),
    count("network_id_b", "The network in image b with which it has the greatest length in common."),
    _CLASS,
    count("n_segments", "Number of a's segments with half of their length or more in common: the common part."),
    _COMMON,
    number("common_fraction", "1", "Common length over the length of the network in image a."),
    number("resistance_a_pa_s_m3", "Pa.s/m3", "Resistance of the common part in image a."),
    number("resistance_b_pa_s_m3", "Pa.s/m3", "Resistance of the common part in image b."),
    number("resistance_ratio", "1", "Ratio of the resistances of the common part, b over a."),
    _RESISTANCE_LO,
    _RESISTANCE_HI,
    _RANDOM,
    _SHARED,
    FLAGS,
)

TONE: tuple[Column, ...] = (
    text("unit", "pair, two images of one subject; or group, all its subjects.", ("pair", "group")),
    _GROUP,
    text("subject", "The subject, as named in the image sheet; empty for a group."),
    _EYE,
    *_STATES,
    text("vessel_class", "Kind of vessel; empty for all together.", CLASSES),
    count("n_subjects", "Number of subjects; eyes of a subject are averaged first."),
    count("n_segments", "Number of matched segments, without stretches shorter than they are wide."),
    _COMMON,
    number(
        "radius_ratio",
        "1",
        "Geometric mean of the ratio of lumen radii, b over a: over the common length of a pair, over the subjects of "
        "a group.",
    ),
    number(
        "radius_ratio_lo",
        "1",
        "Lower bound of its 95 % interval: of a pair from the uncertainty of measurement, of a group from the spread "
        "between subjects (t with one degree of freedom less than subjects).",
    ),
    number("radius_ratio_hi", "1", "Upper bound of the 95 % interval of the radius ratio, by the same rule."),
    number("radius_p", "1", "Two-sided p of no change of radius in the group (t test of subjects' ln ratios)."),
    number(
        "resistance_ratio",
        "1",
        "Ratio of resistances, b over a, of all networks' common parts in parallel; of a group the geometric mean over "
        "its subjects.",
    ),
    _RESISTANCE_LO,
    _RESISTANCE_HI,
    number("resistance_p", "1", "Two-sided p of no change of resistance in the group (t test of subjects' ln ratios)."),
)

PAIRED: Mapping[str, tuple[Column, ...]] = {
    "image_pairs": IMAGE_PAIRS,
    "pairs": PAIRS,
    "network_pairs": NETWORK_PAIRS,
    "tone": TONE,
}

PAIRED_MEANING: Mapping[str, str] = {
    "image_pairs": "One row two images of one bed: how one lies on the other, or why that is refused.",
    "pairs": "One row a matched segment: how its radius and resistance changed.",
    "network_pairs": "One row a network: how its resistance changed on what both images show.",
    "tone": "One row a pair of images or a group, and a class of vessels: how much radius and resistance changed.",
}

_IMAGES = ("image_id_a", "image_id_b")
PAIRED_KEYS: Mapping[str, tuple[str, ...]] = {
    "pairs": (*_IMAGES, "segment_id_a", "segment_id_b"),
    "network_pairs": (*_IMAGES, "network_id_a"),
}
