"""Columns of the tables that sum up: image, networks, scenarios, failures."""

from vasohm.results.column import Column, count, number, text, truth
from vasohm.results.columns_shape import AVASCULAR, CURVATURE, DENSITY, DIMENSION, EQUIVALENTS, INDEX, TISSUE
from vasohm.results.columns_vessels import CLASSES, FLAGS, IMAGE_ID, LN_RANDOM_SE, LN_SHARED_SE, NETWORK_ID

IMAGE: tuple[Column, ...] = (
    IMAGE_ID,
    text(
        "status",
        "measured; or empty, where no vessel was found. Failed images stand in failures.csv.",
        ("measured", "empty"),
    ),
    count("width_px", "Columns of the stored picture.", "{pixel}"),
    count("height_px", "Rows of the stored picture.", "{pixel}"),
    number("pixel_size_um", "um", "Edge of a pixel."),
    number(
        "pixel_size_se_um",
        "um",
        "Standard uncertainty of the pixel size (k = 1), with the part of the eye or the optic disc that it was fitted "
        "by; empty where nothing is known of it.",
    ),
    text(
        "pixel_size_source",
        "Where the pixel size comes from: the sheet, the study, a carrier in the file, the camera factor, or the optic "
        "disc's declared diameter.",
    ),
    text(
        "magnification",
        "Rule by which the pixel size was fitted to this eye; empty where it was not.",
        ("bennett", "bengtsson-length", "bengtsson-refraction"),
    ),
    number(
        "pixel_size_before_um",
        "um",
        "Pixel size as typed or as the file tells it, before it was fitted to this eye; empty where it was not, or "
        "where nobody told one.",
    ),
    number("fov_area_um2", "um2", "Area of the field of view."),
    number("vessel_area_um2", "um2", "Area of the vessel mask inside the field of view."),
    number("vessel_area_fraction", "1", "Vessel area over the area of the field of view (Chu et al. 2016)."),
    number("length_um", "um", "Length of all segments together."),
    DENSITY,
    INDEX,
    count("n_segments", "Number of vessel segments in the image."),
    count("n_branchings", "Number of nodes in the image where vessels branch."),
    count("n_ends", "Number of vessel ends inside the field of view; those cut by its rim are not counted."),
    count("n_networks", "Number of connected networks in the image."),
    number("radius_mean_um", "um", "Mean lumen radius over all segments, weighted by length."),
    number("tortuosity_mean", "1", "Mean tortuosity over all segments, weighted by length (Hart et al. 1999)."),
    *CURVATURE,
    *TISSUE,
    *AVASCULAR,
    *DIMENSION,
    text("profile", "How tubes are imaged here: slab, cylinder or absorber; empty without vessels."),
    number(
        "blur_px",
        "{pixel}",
        "Standard deviation of the Gaussian blur of the picture, as its vessels tell it; empty without vessels and "
        "where it was typed or assumed.",
    ),
    number(
        "blur_se_px",
        "{pixel}",
        "Standard uncertainty of blur_px, from noise, the scatter between vessels, and the doubt of the profile.",
    ),
    number("noise", "{signal}", "Median standard deviation of a pixel's noise, in the units of contrast."),
    number(
        "contrast", "{signal}", "Typical strength with which the image's vessels stand out, in the units of points.csv."
    ),
    number(
        "saturated_fraction",
        "1",
        "Share of the field of view at the limit of the file's scale: at its top, for dark vessels also at its bottom.",
    ),
    number("invalid_fraction", "1", "Share of the picture that is not finite or touches what is not."),
    truth(
        "focus_ok",
        "The blur is at most 1.5 px, as in any well sampled sharp picture, or at most the smallest radius asked for: "
        "of a tube thinner than the blur only radius times contrast is seen, not the radius. Empty where blur_px is.",
    ),
    truth(
        "exposure_ok",
        "saturated_fraction is at most 0.01, and the picture is not blank. Vessels cover about a tenth of a field, so "
        "that 1 % may be a tenth of them.",
    ),
    FLAGS,
)

DISC: tuple[Column, ...] = (
    number("disc_x_px", "{pixel}", "Centre of the optic disc, to the right."),
    number("disc_y_px", "{pixel}", "Centre of the optic disc, downwards."),
    number("disc_radius_px", "{pixel}", "Radius of the optic disc."),
    text(
        "disc_source",
        "Where the optic disc comes from: the sheet, or the image in which it was found.",
        ("sheet", "image"),
    ),
    number(
        "disc_confidence", "1", "Probability that the optic disc lies where it was found; 1 where the sheet tells it."
    ),
    number("zone_inner_px", "{pixel}", "Inner radius, from the disc's centre, of the zone of the calibre equivalents."),
    number("zone_outer_px", "{pixel}", "Outer radius of that zone."),
    *EQUIVALENTS,
)

NETWORKS: tuple[Column, ...] = (
    IMAGE_ID,
    NETWORK_ID,
    text("vessel_class", "Class that holds more than half of the network's length; empty where none does.", CLASSES),
    number(
        "class_probability", "1", "Mean probability, weighted by length, that segments of the network's class have it."
    ),
    count("n_segments", "Number of segments of the network."),
    count("n_branchings", "Number of nodes of the network where vessels branch."),
    count("n_inlets", "Number of nodes of the network where blood enters."),
    count("n_outlets", "Number of nodes of the network where blood leaves."),
    text(
        "terminals",
        "How inlets and outlets are known: file, from the terminals file; auto, from the network's class, its shape "
        "and where the optic disc lies; estimated; or none, and then there is no resistance.",
        ("file", "auto", "none", "estimated"),
    ),
    number("length_um", "um", "Length of the network's segments together."),
    number("area_um2", "um2", "Area of the network in the picture: twice the radius, integrated over length."),
    number("volume_um3", "um3", "Lumen volume of the network: pi times the squared radius, integrated over length."),
    count("loops", "Number of independent closed loops: segments - nodes + 1."),
    number(
        "resistance_pa_s_m3",
        "Pa.s/m3",
        "Resistance of the network: pressure at the joined inlets minus that at the joined outlets, over total flow; "
        "with unequal terminals, dissipated power over squared total inflow. It is the median of what its segments' "
        "doubt allows, which lies off that of segments at their medians.",
    ),
    number("resistance_lo_pa_s_m3", "Pa.s/m3", "Lower bound of the 95 % interval of the network's resistance."),
    number("resistance_hi_pa_s_m3", "Pa.s/m3", "Upper bound of the 95 % interval of the network's resistance."),
    LN_RANDOM_SE,
    LN_SHARED_SE,
    count(
        "n_half_resistance",
        "Fewest segments that together hold half of the network's resistance, by their shares; empty without one.",
    ),
    number(
        "flow_nl_min",
        "nL/min",
        "Total flow that enters the network: at the pressures that its terminals give or else the study asks for, as "
        "median like the resistance; or the flow that the terminals give.",
    ),
    number(
        "hematocrit_turns",
        "1",
        "Turns after which the parted hematocrit and the flow agreed; empty where cells are not parted at "
        "branchings, or came to no state.",
    ),
    FLAGS,
)

SCENARIOS: tuple[Column, ...] = (
    IMAGE_ID,
    NETWORK_ID,
    text("scenario", "Name of the scenario in the study file."),
    count("n_segments_changed", "Number of segments of the network whose radius the scenario changes."),
    number(
        "radius_factor",
        "1",
        "Factor on the radii of those segments: the study file's, or the one that brings about its wanted ratio; empty "
        "where none does.",
    ),
    number("resistance_before_pa_s_m3", "Pa.s/m3", "Resistance of the network as measured."),
    number("resistance_after_pa_s_m3", "Pa.s/m3", "Resistance of the network with the changed radii."),
    number("ratio", "1", "Resistance after the change over that before."),
    number("ratio_lo", "1", "Lower bound of the 95 % interval of the ratio."),
    number("ratio_hi", "1", "Upper bound of the 95 % interval of the ratio."),
    FLAGS,
)

FAILURES: tuple[Column, ...] = (
    IMAGE_ID,
    text("stage", "Stage of the measurement that did not come to an end."),
    text("error", "Code of the error; stable between versions."),
    text("message", "What was wrong, which value, and what to do about it."),
)
