"""Columns of the tables that hold the vessels: segments, points, nodes, crossings."""

from vasohm.results.column import Column, count, number, text

CLASSES = ("arteriole", "venule", "capillary")

IMAGE_ID = text("image_id", "The image, as named in the image sheet.")
NETWORK_ID = count("network_id", "The connected network, numbered from 1 in the order of its first segment.")
SEGMENT_ID = count("segment_id", "The vessel segment between two nodes, numbered from 1 within the image.")
NODE_ID = count("node_id", "The node, numbered from 1 within the image.")
X = number("x_px", "{pixel}", "Position to the right; centre of the first pixel is 0.")
Y = number("y_px", "{pixel}", "Position downwards; centre of the first pixel is 0.")
FLAGS = Column(
    "flags",
    "list",
    "",
    "Codes of what is doubtful, joined by semicolons; empty where nothing is wrong. Each code's meaning is listed "
    "with the results.",
)
LN_RANDOM_SE = number(
    "ln_resistance_random_se",
    "1",
    "Standard uncertainty of ln(resistance) from causes of its own: noise in radii and lengths. Shrinks when many "
    "are averaged.",
)
LN_SHARED_SE = number(
    "ln_resistance_shared_se",
    "1",
    "Standard uncertainty of ln(resistance) from what the whole image has in common: pixel size, blur, profile, "
    "hematocrit. Averaging within the image does not shrink it.",
)
OF_DRIVE = (
    "Where no pressure or flow was given or estimated it belongs to the assumed drop of pressure (drive_mmhg) and is "
    "proportional to it; resistance and shares do not depend on it."
)
OF_DRIVE_INVERSELY = OF_DRIVE.replace("is proportional to it", "falls in inverse proportion to it")

SEGMENTS: tuple[Column, ...] = (
    IMAGE_ID,
    SEGMENT_ID,
    NETWORK_ID,
    count("node_a", "Node at which the segment's points begin."),
    count("node_b", "Node at which the segment's points end."),
    text("vessel_class", "Kind of vessel; empty where it is not said.", CLASSES),
    number(
        "class_probability",
        "1",
        "Probability of the segment's likelier class; where it is below [classes] probability, no class is said.",
    ),
    count("n_points", "Number of centreline points of the segment."),
    number(
        "length_um",
        "um",
        "Arc length of the smoothed centreline between the two nodes, without the stub inside a parent's lumen.",
    ),
    number("length_se_um", "um", "Standard uncertainty of the segment's length, pixel size included (k = 1)."),
    number("chord_um", "um", "Straight distance between the segment's first and last point."),
    number(
        "tortuosity",
        "1",
        "Arc length over chord (Hart et al. 1999, tau 1); 1 for a straight segment, empty for a closed ring.",
    ),
    number(
        "curvature_rad",
        "rad",
        "How far the segment turns to either side together: integral of the absolute curvature over its length, "
        "outside of branchings (Hart et al., Int J Med Inform 1999;53:239-252). Waves of less than 60 px come out more "
        "than 5 % too small, noise adds some 0.0015 rad a pixel; empty for a segment of less than 13 px.",
    ),
    number(
        "squared_curvature_per_um",
        "/um",
        "Integral of the squared curvature over the same length (Hart et al. 1999). Not to be compared across pixel "
        "sizes.",
    ),
    count(
        "inflections",
        "How often the segment changes between bends to either side that turn by 0.2 rad or more (Bullitt et al., IEEE "
        "Trans Med Imaging 2003;22:1163-1171).",
    ),
    number("radius_mean_um", "um", "Mean lumen radius along the segment."),
    number(
        "radius_sd_um",
        "um",
        "Spread (standard deviation) of the true lumen radius along the segment; measurement noise is taken out.",
    ),
    number(
        "radius_hydraulic_um",
        "um",
        "Lumen radius of the uniform tube of equal length and equal resistance: (mean over length of mu(r)/r^4, "
        "over mu at that radius)^(-1/4). Never above the mean radius for constant viscosity.",
    ),
    number(
        "radius_hydraulic_se_um", "um", "Standard uncertainty of the hydraulic radius, random and shared parts (k = 1)."
    ),
    number(
        "hematocrit",
        "1",
        "Discharge hematocrit in the segment, as a fraction: that which enters its network, or what "
        "cells parting at branchings leave to it, where the study asks for that.",
    ),
    number(
        "hematocrit_tube",
        "1",
        "Share of the segment's volume that cells fill, below the discharge hematocrit as cells run ahead of plasma "
        "(Pries et al., Circ Res 1990;67:826-834).",
    ),
    number("viscosity_mpa_s", "mPa.s", "Apparent viscosity at the hydraulic radius, by the law that the study names."),
    number(
        "resistance_pa_s_m3",
        "Pa.s/m3",
        "Resistance of the segment: (8/pi) times the integral of mu(r)/r^4 over its length (Sutera and Skalak, Annu "
        "Rev Fluid Mech 1993;25:1-20, doi 10.1146/annurev.fl.25.010193.000245, applied locally).",
    ),
    number("resistance_lo_pa_s_m3", "Pa.s/m3", "Lower bound of the 95 % interval of the segment's resistance."),
    number("resistance_hi_pa_s_m3", "Pa.s/m3", "Upper bound of the 95 % interval of the segment's resistance."),
    LN_RANDOM_SE,
    LN_SHARED_SE,
    number("flow_nl_min", "nL/min", "Flow through the segment, positive from node_a to node_b."),
    number("pressure_a_mmhg", "mm[Hg]", "Pressure at node_a."),
    number("pressure_b_mmhg", "mm[Hg]", "Pressure at node_b."),
    number(
        "velocity_mm_s",
        "mm/s",
        f"Mean velocity of blood over the cross-section at the hydraulic radius. {OF_DRIVE}",
    ),
    number(
        "transit_s", "s", f"Time in the segment at its mean velocity; empty where nothing flows. {OF_DRIVE_INVERSELY}"
    ),
    number(
        "wall_shear_pa",
        "Pa",
        f"Wall shear stress at the hydraulic radius: 4 mu |Q| / (pi r^3), mu the apparent viscosity. {OF_DRIVE}",
    ),
    number(
        "wall_shear_rate_per_s",
        "/s",
        "Wall shear rate at the hydraulic radius: 4 |Q| / (pi r^3), the wall shear stress over the apparent viscosity. "
        f"{OF_DRIVE}",
    ),
    number(
        "reynolds",
        "1",
        "Reynolds number: density times mean velocity times diameter over apparent viscosity. Empty where no pressure "
        "or flow at a terminal was given or estimated: flow then has the size of an assumed drop of pressure.",
    ),
    number(
        "womersley",
        "1",
        "Womersley number at the heart rate that the study gives: radius times the root of (angular frequency times "
        "density over apparent viscosity). Empty without a heart rate.",
    ),
    number(
        "resistance_share",
        "1",
        "The segment's share of its network's resistance, d ln(R network) / d ln(R segment), which is its share of the "
        "dissipated power (Cohn, Proc Am Math Soc 1950;1:316). Shares of a network sum to 1.",
    ),
    count(
        "order_strahler",
        "Strahler's order in its tree, from 1 at the tips (Strahler, Trans Am Geophys Union 1957;38:913-920); empty "
        "where the network is no tree or has no one root.",
    ),
    count(
        "order_diameter",
        "Diameter-defined order in its tree (Jiang, Kassab and Fung, J Appl Physiol 1994;76:882-892); empty as before, "
        "and where no orders agree with themselves.",
    ),
    FLAGS,
)

POINTS: tuple[Column, ...] = (
    IMAGE_ID,
    SEGMENT_ID,
    count("point", "Number of the point within its segment, from 1 at node_a."),
    number("s_um", "um", "Arc length from the segment's first point."),
    X,
    Y,
    number("radius_um", "um", "Lumen radius at the point."),
    number("radius_se_um", "um", "Standard uncertainty of the local lumen radius, random and shared parts (k = 1)."),
    number(
        "contrast",
        "{signal}",
        "How strongly the vessel stands out at the point: share of light taken away for dark vessels, intensity above "
        "the background, in units of the file, for bright ones.",
    ),
    FLAGS,
)

NODES: tuple[Column, ...] = (
    IMAGE_ID,
    NODE_ID,
    NETWORK_ID,
    X,
    Y,
    text(
        "kind",
        "end; rim, an end where the field of view cuts the vessel; branching; or loop, the seam of a closed ring.",
        ("end", "rim", "branching", "loop"),
    ),
    count("degree", "Number of segment ends that meet at the node."),
    text("role", "Where blood enters or leaves; empty for all other nodes.", ("inlet", "outlet")),
    number("pressure_mmhg", "mm[Hg]", "Pressure at the node; empty where no flow is solved."),
)

CROSSINGS: tuple[Column, ...] = (
    IMAGE_ID,
    X,
    Y,
    count("segment_over", "segment_id of the vessel on top, where that can be told; else the lower of the two."),
    count("segment_under", "segment_id of the vessel beneath, where that can be told; else the higher of the two."),
    number("probability", "1", "Probability that the two vessels cross here and do not join."),
)
