"""Columns of the tables that hold shape: branchings, orders, classes, scales, calibre equivalents."""

from vasohm.results.column import Column, count, number, text
from vasohm.results.columns_vessels import CLASSES, FLAGS, IMAGE_ID, NETWORK_ID, NODE_ID

NETWORK_CLASS = text("vessel_class", "Class of the network, as in networks.csv; empty where none is said.", CLASSES)
SCHEME = text("scheme", "How vessels are ordered: by Strahler, or by Strahler and diameter.", ("strahler", "diameter"))

BRANCHINGS: tuple[Column, ...] = (
    IMAGE_ID,
    NODE_ID,
    NETWORK_ID,
    text("vessel_class", "Class that is said of the three vessels; empty where none is or they differ.", CLASSES),
    count("parent_segment", "segment_id of the parent."),
    count("child_1_segment", "segment_id of the wider child."),
    count("child_2_segment", "segment_id of the narrower child."),
    text(
        "parent_by",
        "What tells the parent: flow, which alone comes to the node in it or alone leaves through it; or radius, the "
        "widest of the three.",
        ("flow", "radius"),
    ),
    number(
        "radius_parent_um", "um", "Lumen radius of the parent, median from 1 to 4 of the widest radius off the node."
    ),
    number(
        "radius_parent_se_um", "um", "Standard uncertainty of the parent's radius, random and shared parts (k = 1)."
    ),
    number("radius_child_1_um", "um", "Lumen radius of the wider child, read as the parent's."),
    number("radius_child_1_se_um", "um", "Standard uncertainty of the wider child's radius (k = 1)."),
    number("radius_child_2_um", "um", "Lumen radius of the narrower child, read as the parent's."),
    number("radius_child_2_se_um", "um", "Standard uncertainty of the narrower child's radius (k = 1)."),
    number(
        "angle_1_deg",
        "deg",
        "Angle between the parent's direction, carried on, and the wider child (Zamir, J Theor Biol 1976;62:227-251); "
        "of lines from 2.5 to 6 of the widest radius off the node.",
    ),
    number("angle_1_se_deg", "deg", "Standard uncertainty of angle_1_deg (k = 1); empty where a vessel is too short."),
    number(
        "angle_2_deg", "deg", "Angle between the parent's direction, carried on, and the narrower child (Zamir 1976)."
    ),
    number("angle_2_se_deg", "deg", "Standard uncertainty of angle_2_deg (k = 1); empty where a vessel is too short."),
    number("angle_total_deg", "deg", "Sum of the two children's angles to the parent's direction (Zamir 1976)."),
    number("angle_total_se_deg", "deg", "Standard uncertainty of angle_total_deg (k = 1); empty as before."),
    number("area_ratio", "1", "Cross-section of both children over the parent's: (r1^2 + r2^2) / r0^2 (Zamir 1976)."),
    number("area_ratio_se", "1", "Standard uncertainty of area_ratio (k = 1); what vessels share largely cancels."),
    number("asymmetry", "1", "Cross-section of the narrower child over the wider one's: (r2 / r1)^2 (Zamir 1976)."),
    number("asymmetry_se", "1", "Standard uncertainty of asymmetry (k = 1)."),
    number(
        "junction_exponent",
        "1",
        "m with r0^m = r1^m + r2^m (3 by Murray, Proc Natl Acad Sci USA 1926;12:207-214); empty unless the parent is "
        "wider than both children.",
    ),
    number("junction_exponent_se", "1", "Standard uncertainty of junction_exponent (k = 1, to first order)."),
    number(
        "murray_ratio",
        "1",
        "(r1^3 + r2^3) / r0^3, 1 by Murray's law (1926). Unlike the exponent it has a value at every branching, so "
        "that its mean is not picked.",
    ),
    number("murray_ratio_se", "1", "Standard uncertainty of murray_ratio (k = 1)."),
    number(
        "volume_angle_1_deg",
        "deg",
        "angle_1_deg that these three radii would have for the least volume or pumping power (Murray, J Gen Physiol "
        "1926;9:835-841; Zamir 1976); empty where no angle is best.",
    ),
    number("volume_angle_1_se_deg", "deg", "Standard uncertainty of volume_angle_1_deg (k = 1, to first order)."),
    number("volume_angle_2_deg", "deg", "The same for angle_2_deg (Murray, Zamir 1976)."),
    number("volume_angle_2_se_deg", "deg", "Standard uncertainty of volume_angle_2_deg (k = 1, to first order)."),
    number(
        "surface_angle_1_deg",
        "deg",
        "angle_1_deg that these three radii would have for the least surface or drag (Zamir 1976); empty where no "
        "angle is best.",
    ),
    number("surface_angle_1_se_deg", "deg", "Standard uncertainty of surface_angle_1_deg (k = 1, to first order)."),
    number("surface_angle_2_deg", "deg", "The same for angle_2_deg, for the least surface or drag (Zamir 1976)."),
    number("surface_angle_2_se_deg", "deg", "Standard uncertainty of surface_angle_2_deg (k = 1, to first order)."),
    number(
        "volume_imbalance",
        "1",
        "Volume that moving the node would save for its way, over the parent's cross-section: length of the sum of r^2 "
        "u / r0^2, u the three directions; 0 at the angles of least volume (from the balance in Zamir 1976). Doubt of "
        "radii and angles lifts it above 0; no uncertainty is claimed.",
    ),
    number(
        "surface_imbalance",
        "1",
        "The same for surface: length of the sum of r u / r0; 0 at the angles of least surface (Zamir 1976).",
    ),
    FLAGS,
)

ORDERS: tuple[Column, ...] = (
    IMAGE_ID,
    NETWORK_ID,
    NETWORK_CLASS,
    SCHEME,
    count(
        "order",
        "Order of these vessels, from 1 at the tips (Strahler, Trans Am Geophys Union 1957;38:913-920; by diameter "
        "Jiang, Kassab and Fung, J Appl Physiol 1994;76:882-892).",
    ),
    count("n_segments", "Number of segments of this order."),
    count("n_elements", "Number of elements of this order: its segments in series are one (Jiang et al. 1994)."),
    number("length_um", "um", "Mean length of the order's elements (Jiang et al. 1994)."),
    number("length_sd_um", "um", "Standard deviation of the lengths of the order's elements; empty for one."),
    number("radius_um", "um", "Mean lumen radius of the order's elements (Jiang et al. 1994)."),
    number("radius_sd_um", "um", "Standard deviation of the radii of the order's elements; empty for one."),
    number(
        "resistance_series_pa_s_m3",
        "Pa.s/m3",
        "Mean resistance of the order's elements (Jiang et al. 1994), each the sum over its segments in series.",
    ),
    number(
        "ln_resistance_series_random_se",
        "1",
        "Standard uncertainty of ln(resistance_series_pa_s_m3) from noise in the radii and lengths of its segments.",
    ),
    number(
        "ln_resistance_series_shared_se",
        "1",
        "Standard uncertainty of ln(resistance_series_pa_s_m3) from what segments share, as if it moved all alike.",
    ),
    number(
        "resistance_parallel_pa_s_m3",
        "Pa.s/m3",
        "Resistance of all elements of the order (Jiang et al. 1994) side by side.",
    ),
    number(
        "ln_resistance_parallel_random_se",
        "1",
        "Standard uncertainty of ln(resistance_parallel_pa_s_m3) from noise in the radii and lengths of its segments.",
    ),
    number(
        "ln_resistance_parallel_shared_se",
        "1",
        "Standard uncertainty of ln(resistance_parallel_pa_s_m3) from what segments share, as if it moved all alike.",
    ),
)

HORTON: tuple[Column, ...] = (
    IMAGE_ID,
    NETWORK_ID,
    NETWORK_CLASS,
    SCHEME,
    count("highest_order", "Order of the root (Horton 1945); empty where the network has no orders."),
    number(
        "bifurcation_ratio",
        "1",
        "Number of elements of one order over that of the next, by the line through ln(number) of all orders (Horton, "
        "Geol Soc Am Bull 1945;56:275-370); empty for one order.",
    ),
    number("bifurcation_ratio_se", "1", "Standard error of bifurcation_ratio by that line; empty for two orders."),
    number(
        "length_ratio", "1", "Mean length of the elements of one order over that of the order before (Horton 1945)."
    ),
    number("length_ratio_se", "1", "Standard error of length_ratio by its line; empty for two orders."),
    number(
        "radius_ratio", "1", "Mean radius of the elements of one order over that before (as Horton 1945 for lengths)."
    ),
    number("radius_ratio_se", "1", "Standard error of radius_ratio by its line; empty for two orders."),
    FLAGS,
)

CURVATURE = (
    number(
        "curvature_per_mm",
        "/mm",
        "Absolute curvature a length, in radians: sum of curvature_rad over the length on which it was taken (Hart et "
        "al., Int J Med Inform 1999;53:239-252, tau 4). The smoother flattens waves of less than 60 px by more than 5 "
        "%; noise adds 0.0015 rad a pixel.",
    ),
    number(
        "squared_curvature_per_mm2",
        "/mm2",
        "Squared curvature a length, summed over segments likewise (Hart et al. 1999, tau 5). Waves of 60 px "
        "come out 14 % too small.",
    ),
    number("inflections_per_mm", "/mm", "Inflections a length, summed over segments likewise (Bullitt et al. 2003)."),
)

TISSUE = (
    number(
        "tissue_distance_mean_um",
        "um",
        "Mean distance from the pixels outside vessels to the nearest vessel, freed from the border of the field "
        "(Baddeley and Gill, Ann Stat 1997;25:263-292).",
    ),
    number(
        "tissue_distance_sd_um",
        "um",
        "Standard deviation of the distances from tissue to vessels (Baddeley and Gill 1997).",
    ),
    number(
        "tissue_distance_p05_um", "um", "5 % of the tissue is at most so far from a vessel (Baddeley and Gill 1997)."
    ),
    number(
        "tissue_distance_median_um",
        "um",
        "Half of the tissue is at most so far from a vessel (Baddeley and Gill 1997).",
    ),
    number(
        "tissue_distance_p95_um",
        "um",
        "95 % of the tissue is at most so far from a vessel; empty, as the median may be, where the field of view "
        "cannot tell it (tissue_unseen_fraction; Baddeley and Gill 1997).",
    ),
    number(
        "tissue_unseen_fraction",
        "1",
        "Share of the tissue that lies further from any vessel than the field of view can tell. It is counted at the "
        "largest distance that is told, so that the mean and standard deviation of the distances are least values "
        "(Kaplan and Meier, J Am Stat Assoc 1958;53:457-481).",
    ),
)

DIMENSION = (
    number(
        "box_dimension",
        "1",
        "Box-counting dimension of the vessel mask: slope of ln(occupied boxes) over -ln(edge) (Falconer, Fractal "
        "Geometry, 3rd ed., 2014, ch. 2). Depends on resolution and field of view: compare within one set-up.",
    ),
    number(
        "box_dimension_se",
        "1",
        "Standard error of that slope: how straight the line is, as box counts are not independent.",
    ),
    number("box_least_px", "{pixel}", "Smallest edge of the boxes on that line."),
    number("box_most_px", "{pixel}", "Largest edge of the boxes on that line, at most a quarter of the field's side."),
    number(
        "lacunarity",
        "1",
        "Mean lacunarity E[M^2] / E[M]^2 of gliding boxes over the same edges (Allain and Cloitre, Phys Rev A "
        "1991;44:3552-3558); 1 for an even pattern.",
    ),
)

AVASCULAR = (
    number(
        "avascular_area_um2",
        "um2",
        "Largest avascular area inside the field of view: what a disc of half the radius of the largest empty circle "
        "reaches from there without touching a vessel, an opening (Serra, Image Analysis and Mathematical Morphology, "
        "1982). In OCT angiography of a macula the foveal avascular zone.",
    ),
    number("avascular_radius_um", "um", "Radius of the largest empty circle."),
    number("avascular_x_px", "{pixel}", "Centre of the largest avascular area, to the right."),
    number("avascular_y_px", "{pixel}", "Centre of the largest avascular area, downwards."),
)

DENSITY = number(
    "length_density_per_mm",
    "/mm",
    "Length of the centrelines up to their nodes over the area of the field of view, both inside it (Chu et al. 2016).",
)
INDEX = number(
    "diameter_index_um",
    "um",
    "Mean calibre: vessel area over the length of the centrelines (Chu et al., J Biomed Opt 2016;21:066008).",
)

CLASS_SHAPES: tuple[Column, ...] = (
    IMAGE_ID,
    text("vessel_class", "Which vessels the row is of; all also holds those of no class.", ("all", *CLASSES)),
    number("from_um", "um", "Least mean radius of the row's segments; empty where all calibres are in it."),
    number("to_um", "um", "Radius below which they stay; empty where there is no such limit."),
    count("n_segments", "Number of segments of the row's vessels."),
    number("length_um", "um", "Length of their centrelines up to their nodes, inside the field of view."),
    number("length_density_per_mm", "/mm", "That length over the area of the field of view (Chu et al. 2016)."),
    number(
        "area_density",
        "1",
        "Twice the radius, integrated over that length, over the area of the field of view (Chu et al. 2016).",
    ),
    number(
        "diameter_index_um", "um", "Twice the radius, integrated over that length, over that length (Chu et al. 2016)."
    ),
    number("radius_mean_um", "um", "Mean lumen radius of the row's segments, weighted by length."),
    number("tortuosity_mean", "1", "Mean tortuosity of the row's segments, weighted by length (Hart et al. 1999)."),
    *CURVATURE,
    *TISSUE,
    *DIMENSION,
)

SCALES: tuple[Column, ...] = (
    IMAGE_ID,
    text("vessel_class", "Whose pixels are counted; all also holds those of no class.", ("all", *CLASSES)),
    count("edge_px", "Edge of the boxes.", "{pixel}"),
    number("edge_um", "um", "Edge of the boxes in micrometres."),
    count("n_occupied", "Number of boxes on a grid that hold a vessel pixel (Falconer 2014)."),
    number(
        "lacunarity",
        "1",
        "Lacunarity of gliding boxes of this edge (Allain and Cloitre 1991); empty where none lies wholly in the "
        "field.",
    ),
)

EQUIVALENTS: tuple[Column, ...] = (
    number(
        "crae_um",
        "um",
        "Central retinal artery equivalent, a diameter (Knudtson et al., Curr Eye Res 2003;27:143-149, or Parr and "
        "Hubbard as the study asks): from the arterioles that cross the zone around the optic disc; empty for too few.",
    ),
    number("crae_se_um", "um", "Standard uncertainty of crae_um, random and shared parts (k = 1)."),
    number(
        "crve_um",
        "um",
        "Central retinal vein equivalent, a diameter, likewise from the venules (Knudtson et al. 2003).",
    ),
    number("crve_se_um", "um", "Standard uncertainty of crve_um, random and shared parts (k = 1)."),
    number("avr", "1", "Arteriole-to-venule ratio: crae_um over crve_um (Knudtson et al. 2003)."),
    number("avr_se", "1", "Standard uncertainty of avr (k = 1); the pixel size cancels."),
    count("n_zone_arterioles", "Number of arterioles that were used for crae_um, or were too few for it."),
    count("n_zone_venules", "Number of venules that were used for crve_um, or were too few for it."),
    text("calibre_formula", "Formula of the equivalents.", ("knudtson", "parr-hubbard")),
)
