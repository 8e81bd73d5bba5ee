"""Columns of the tables that hold measured vessels against true ones."""

from collections.abc import Mapping

from vasohm.results.column import Column, count, number, text, truth
from vasohm.results.columns_vessels import FLAGS, IMAGE_ID, NETWORK_ID, SEGMENT_ID

VERDICTS = ("resolved", "biased", "uncertain", "too few")
REASONS = ("match", "resistance", "viscosity")

_LENGTHS: tuple[Column, ...] = (
    number("length_true_um", "um", "True length of the vessels in the picture."),
    number("length_found_um", "um", "True length along which a measured centreline runs."),
    number("length_stray_um", "um", "Measured length beside which there is no true vessel, by its measured radius."),
    number("length_doubled_um", "um", "True length that was measured more than once, counted for each further time."),
)
_RADII: tuple[Column, ...] = (
    count("n_points", "Number of measured centreline points whose true radius is known."),
    number("centreline_rms_px", "{pixel}", "Root mean square distance of measured points from the true centreline."),
    number("ln_radius_bias", "1", "Median of ln(measured over true local radius): 0.01 is 1 % too wide."),
    number(
        "ln_radius_scatter",
        "1",
        "Spread of ln(measured over true local radius) about its median: 1.4826 times the median absolute deviation.",
    ),
    number("ln_radius_rmse", "1", "Root mean square of ln(measured over true local radius), outliers included."),
    number("ln_radius_se", "1", "Median of the standard uncertainty that is stated for ln(local radius)."),
    number(
        "ln_radius_rms_z", "1", "Root mean square of error over stated standard uncertainty, local radius; 1 is right."
    ),
    number(
        "radius_coverage_95",
        "1",
        "Share of points whose true radius lies within 1.96 stated standard uncertainties; 0.95 is right.",
    ),
    number(
        "ln_radius_rms_z_exact_scale",
        "1",
        "As ln_radius_rms_z, with the pixel size's part taken out of the stated uncertainty where the pixel size is "
        "exactly the true one.",
    ),
    number(
        "radius_coverage_95_exact_scale",
        "1",
        "As radius_coverage_95, with the pixel size's part taken out of the stated uncertainty where the pixel size is "
        "exactly the true one.",
    ),
)
_RESISTANCES: tuple[Column, ...] = (
    count("n_segments_compared", "Number of measured segments whose resistance is held against the true one."),
    number("ln_resistance_bias", "1", "Median of ln(measured over true resistance) of segments."),
    number(
        "ln_resistance_scatter",
        "1",
        "Spread of ln(measured over true resistance) of segments about its median: 1.4826 times the median absolute "
        "deviation.",
    ),
    number(
        "ln_resistance_se", "1", "Median of the standard uncertainty that is stated for ln(resistance) of a segment."
    ),
    number(
        "ln_resistance_rms_z",
        "1",
        "Root mean square of error over stated standard uncertainty, ln(resistance) of segments; 1 is right.",
    ),
    number(
        "resistance_coverage_95",
        "1",
        "Share of segments whose true resistance lies within the stated 95 % interval; 0.95 is right.",
    ),
    number(
        "resistance_coverage_95_exact_scale",
        "1",
        "As resistance_coverage_95, with the pixel size's part taken out of the interval where the pixel size is "
        "exactly the true one.",
    ),
)

APPRAISAL_RADIUS: tuple[Column, ...] = (
    number("radius_from_px", "{pixel}", "Least true radius of the class."),
    number("radius_to_px", "{pixel}", "True radius below which the class ends; empty where it has no end."),
    number("radius_from_um", "um", "Least true radius of the class; empty where pixel sizes differ between images."),
    number("radius_to_um", "um", "True radius below which the class ends; empty as for the bounds in pixels."),
    *_LENGTHS,
    *_RADII,
    *_RESISTANCES,
    text(
        "verdict",
        "resolved; biased, where the median error of the radius is larger than 1.96 stated standard uncertainties; "
        "uncertain, where the stated standard uncertainty is above 25 %; or too few points to tell.",
        VERDICTS,
    ),
)

APPRAISAL_SEGMENTS: tuple[Column, ...] = (
    IMAGE_ID,
    SEGMENT_ID,
    number("length_um", "um", "Measured length of the segment."),
    number("matched_fraction", "1", "Share of the measured length along which there is a true vessel."),
    number("length_ratio", "1", "Measured over true length, where there is a true vessel."),
    number("radius_true_px", "{pixel}", "Hydraulic radius of the true vessel along the segment, in pixels."),
    number("radius_hydraulic_um", "um", "Measured hydraulic radius of the segment."),
    number("radius_hydraulic_true_um", "um", "Hydraulic radius of the true vessel along the segment."),
    number("radius_hydraulic_ratio", "1", "Measured over true hydraulic radius."),
    number("resistance_pa_s_m3", "Pa.s/m3", "Measured resistance of the segment."),
    number(
        "resistance_true_pa_s_m3",
        "Pa.s/m3",
        "Resistance of the true vessel along the segment, by the law, the viscosity and the hematocrit of the "
        "measurement; where part of the segment has no true vessel, in proportion to the measured length.",
    ),
    number("resistance_ratio", "1", "Measured over true resistance of the segment."),
    number("ln_resistance_se", "1", "Stated standard uncertainty of ln(resistance) of the segment, in total."),
    number("z", "1", "Error of ln(resistance) of the segment over its stated standard uncertainty."),
    truth("inside_95", "The true resistance of the segment lies within the stated 95 % interval."),
    number(
        "ln_resistance_se_exact_scale",
        "1",
        "Stated standard uncertainty of ln(resistance) of the segment without the pixel size's part, where the pixel "
        "size is exactly the true one.",
    ),
    text(
        "left_out",
        "Why the segment is not compared: match, along less than 80 % of it there is a true vessel; or resistance, "
        "one of both has none. Empty where it is compared.",
        REASONS[:2],
    ),
    FLAGS,
)

APPRAISAL_NETWORKS: tuple[Column, ...] = (
    IMAGE_ID,
    NETWORK_ID,
    count("network_id_true", "The true network with which the measured one has most length in common."),
    number("found_fraction", "1", "Share of the true network's length that the measured one holds."),
    number("matched_fraction", "1", "Share of the measured network's length that belongs to the true one."),
    number("resistance_pa_s_m3", "Pa.s/m3", "Measured resistance of the network."),
    number("resistance_true_pa_s_m3", "Pa.s/m3", "True resistance of the network."),
    number("resistance_ratio", "1", "Measured over true resistance of the network."),
    number("ln_resistance_se", "1", "Stated standard uncertainty of ln(resistance) of the network, in total."),
    number("z", "1", "Error of ln(resistance) of the network over its stated standard uncertainty."),
    truth("inside_95", "The true resistance of the network lies within the stated 95 % interval."),
    number(
        "ln_resistance_se_exact_scale",
        "1",
        "Stated standard uncertainty of ln(resistance) of the network without the pixel size's part, where the pixel "
        "size is exactly the true one.",
    ),
    text(
        "left_out",
        "Why the network is not compared: match, less than 80 % of its length is in common; resistance, one of both "
        "has none; or viscosity, the truth was made for blood of another viscosity. Empty where it is compared.",
        REASONS,
    ),
    FLAGS,
)


def _places(name: str, what: str) -> tuple[Column, ...]:
    return (
        count(f"{name}_true", f"Number of true {what}."),
        count(f"{name}_measured", f"Number of measured {what}."),
        count(f"{name}_found", f"Number of true {what} with a measured one of its own within 5 px."),
        number(f"{name}_recall", "1", f"Found over true {what}."),
        number(f"{name}_precision", "1", f"Found over measured {what}."),
        number(f"{name}_f1", "1", f"Harmonic mean of recall and precision of {what}."),
    )


APPRAISAL_IMAGES: tuple[Column, ...] = (
    IMAGE_ID,
    number("pixel_size_um", "um", "Edge of a pixel as measured."),
    *_LENGTHS,
    *_RADII,
    *_RESISTANCES,
    *_places("branchings", "branchings"),
    *_places("crossings", "crossings"),
    number("class_said_fraction", "1", "Share of the length found of vessels of known class that was given a class."),
    number("class_right_fraction", "1", "Share of the length given a class where it is the true one."),
    count("loops_true", "Number of independent closed loops of the true networks."),
    count("loops_measured", "Number of independent closed loops of the measured networks."),
    count("networks_true", "Number of true networks."),
    count("networks_measured", "Number of measured networks."),
)

APPRAISAL_MASKS: tuple[Column, ...] = (
    text("image_id", "Name of the image in the sheet; empty for all images together."),
    count("n_view_px", "Pixels of the field of view.", "{pixel}"),
    count("n_drawn_px", "Pixels that a person drew as vessel.", "{pixel}"),
    count("n_measured_px", "Pixels of the measured vessel mask.", "{pixel}"),
    count("n_both_px", "Pixels that are vessel in both.", "{pixel}"),
    number("dice", "1", "Twice the common pixels over the sum of drawn and measured vessel pixels."),
    number(
        "centreline_dice",
        "1",
        "clDice: harmonic mean of centreline_precision and centreline_sensitivity; does not ask for equal widths.",
    ),
    number("centreline_precision", "1", "Share of the measured mask's centreline that lies in the drawn vessels."),
    number("centreline_sensitivity", "1", "Share of the drawn vessels' centreline that lies in the measured mask."),
    number("sensitivity", "1", "Share of the drawn vessel pixels that were measured as vessel."),
    number("specificity", "1", "Share of the pixels drawn as background that were not measured as vessel."),
    number("matthews_correlation", "1", "Correlation of the two masks; 0 for chance, whatever the share of vessels."),
    number(
        "length_recall",
        "1",
        "Share of the drawn centreline's length with a measured centreline within 2 px or 0.75 of the drawn radius.",
    ),
    number(
        "length_precision", "1", "Share of the measured centreline's length that runs within 2 px of a drawn vessel."
    ),
)

APPRAISAL: Mapping[str, tuple[Column, ...]] = {
    "appraisal_radius": APPRAISAL_RADIUS,
    "appraisal_segments": APPRAISAL_SEGMENTS,
    "appraisal_networks": APPRAISAL_NETWORKS,
    "appraisal_images": APPRAISAL_IMAGES,
    "appraisal_masks": APPRAISAL_MASKS,
}
