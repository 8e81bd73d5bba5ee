"""Every measure of shape says where it was published."""

import re

from vasohm.results.column import Column
from vasohm.results.columns_images import DISC, IMAGE
from vasohm.results.columns_shape import BRANCHINGS, CLASS_SHAPES, CURVATURE, HORTON, ORDERS, SCALES
from vasohm.results.columns_vessels import SEGMENTS

# Places, plain lengths, areas and counts, the limits of a row, and spreads and uncertainties of another column.
PLAIN = re.compile(
    r"(.*_id|(parent|child_\d)_segment|.*_px|n_(segments|zone_.*)|(fov|vessel)_area_um2|edge_um|from_um|to_um|length_um"
    r"|radius_(mean|parent|child_\d)_um|avascular_radius_um|.*_se(_um|_deg|_px)?|(length|radius)_sd_um)"
)
SHAPE_OF_IMAGES = re.compile(
    r"vessel_area_fraction|length_density.*|diameter_index.*|tort.*|tissue.*|avasc.*|box.*|lac.*"
)
SHAPE_OF_SEGMENTS = re.compile(r"tortuosity|curvature_rad|squared_curvature_per_um|inflections|order_.*")
YEAR = re.compile(r"\b(19|20)\d\d\b")


def measures_of_shape() -> list[Column]:
    tables = (*BRANCHINGS, *ORDERS, *HORTON, *CLASS_SHAPES, *SCALES, *CURVATURE)
    of_images = [column for column in (*IMAGE, *DISC) if SHAPE_OF_IMAGES.fullmatch(column.name)]
    equivalents = [column for column in DISC if column.name in ("crae_um", "crve_um", "avr")]
    of_segments = [column for column in SEGMENTS if SHAPE_OF_SEGMENTS.fullmatch(column.name)]
    return [
        column
        for column in (*tables, *of_images, *equivalents, *of_segments)
        if column.type in ("number", "integer") and not PLAIN.fullmatch(column.name)
    ]


def test_every_measure_of_shape_names_its_source() -> None:
    """Whoever compares a figure with the literature would have to guess which of several definitions it follows."""
    measures = measures_of_shape()
    assert len({column.name for column in measures}) > 40
    assert [column.name for column in measures if not YEAR.search(column.meaning)] == []
