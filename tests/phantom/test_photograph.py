"""The real fundus photograph: what must be found and what must not. No truth exists; places were read by eye."""

from pathlib import Path

import numpy as np
import pytest
from scipy.spatial import cKDTree

import vasohm

PHOTOGRAPH = Path(__file__).parents[2] / "configs" / "demo" / "retina.jpg"
ON_LARGE_VESSELS = [(801, 420), (1085, 385), (930, 189), (775, 1222), (517, 967), (1000, 1229), (269, 995)]
BY_EYE_PX = 12  # how well a place on a vessel can be read from a screen
FOVEA = (
    711,
    702,
    40,
)  # x, y, radius without a vessel: some 250 um (textbooks, from memory) are 36 px; a twig ends at 48
TAB = (1215, 180, 25)  # x, y within the tab at the upper right, radius without a vessel
# x, y on what is no vessel, read by eye: the band inside the disc's rim, pigment at its right, bright bundles of fibres
# (five places), the border of the field beside the tab
NO_VESSEL = [(285, 725), (332, 645), (545, 135), (480, 245), (508, 222), (365, 495), (427, 1058), (1098, 142)]
FIELD = (706, 706)  # centre of the round field
LARGEST_RADIUS_UM = 100.0  # retinal trunks are up to about 90 um in radius (discs of 1.8 mm, from memory)


@pytest.fixture(scope="module")
def measured():
    return vasohm.measure_image(
        PHOTOGRAPH, pixel_size_um=7.0, pixel_size_se_um=0.7, preset="fundus", segment={"radius_um": [3.0, 100.0]}
    )


def test_the_large_vessels_are_there(measured):
    tree = cKDTree(measured.points[["x_px", "y_px"]].to_numpy())
    distance, nearest = tree.query(ON_LARGE_VESSELS)
    assert (distance < BY_EYE_PX).all()
    radius = measured.points.radius_um.to_numpy()[nearest]
    assert (radius > 20).all()
    assert (radius < LARGEST_RADIUS_UM).all()


def test_fovea_and_field_border_are_no_vessels(measured):
    x, y = measured.points.x_px.to_numpy(), measured.points.y_px.to_numpy()
    assert (np.hypot(x - FOVEA[0], y - FOVEA[1]) > FOVEA[2]).all()
    starts = measured.points.groupby("segment_id")[["x_px", "y_px"]].agg(["first", "last"])
    from_centre = np.hypot(x - FIELD[0], y - FIELD[1])
    field_radius = np.percentile(from_centre, 99.9)
    along_border = measured.points[from_centre > field_radius - 6].groupby("segment_id").size()
    # a vessel that leaves the field passes its last 6 px in about as many points; the border itself would be hundreds
    assert along_border.max() < 40
    assert len(starts) > 100


def test_disc_rim_nerve_fibres_and_tab_are_no_vessels(measured):
    """Wrong if edges, bright bundles of fibres or the shade at the border passed for vessels."""
    tree = cKDTree(measured.points[["x_px", "y_px"]].to_numpy())
    distance, _ = tree.query(NO_VESSEL)
    assert tree.query(TAB[:2])[0] > TAB[2]
    assert (distance > BY_EYE_PX).all(), np.array(NO_VESSEL)[distance <= BY_EYE_PX]


def test_widths_are_those_of_a_retina(measured):
    """Retinal vessels of this field are some 20 to 180 um wide (ophthalmic textbooks, from memory)."""
    long = measured.segments[measured.segments.length_um > 500]
    width = 2 * long.radius_hydraulic_um
    assert np.median(width) == pytest.approx(55, abs=25)
    assert np.mean((width > 12) & (width < 180)) > 0.95
