"""One bed seen by a camera that moved, turned and came nearer: the picture changes, the bed does not."""

import numpy as np
import pytest

from vasohm_synthetic.errors import RecipeError
from vasohm_synthetic.make import draw, make_phantoms
from vasohm_synthetic.recipe import parse_recipe
from vasohm_synthetic.scene import Scene, Vessel
from vasohm_synthetic.view import View, look

TURN_DEG, ZOOM, SHIFT = 30.0, 1.25, (7.5, -4.0)
ROUNDING = 1e-9  # of lengths that are sums over some hundred chords


def recipe(view: dict[str, float]) -> dict[str, object]:
    tube = {"x_px": 60.0, "y_px": 70.0, "length_px": 40.0, "radius_px": 4.0, "angle_deg": 20.0}
    scene = {"kind": "tubes", "width_px": 128, "height_px": 128, "tube": [tube]}
    image = [{"image_id": "still", "bed": "bed"}, {"image_id": "moved", "bed": "bed", "view": view}]
    return {"phantom": {"pixel_size_um": 2.0}, "scene": scene, "image": image}


def test_lengths_and_radii_in_micrometres_stay(tmp_path):
    """Wrong if the view changed the bed itself: a ratio of two states would then not be that of their tone."""
    made = parse_recipe(recipe({"shift_x_px": SHIFT[0], "shift_y_px": SHIFT[1], "turn_deg": TURN_DEG, "zoom": ZOOM}))
    make_phantoms(made, tmp_path)
    tables = [
        np.genfromtxt(tmp_path / "truth" / name / "segments.csv", delimiter=",", names=True)
        for name in ("still", "moved")
    ]
    for column in ("length_um", "radius_mean_um", "resistance_pa_s_m3"):
        still, moved = (float(table[column]) for table in tables)
        assert moved == pytest.approx(still, rel=ROUNDING)
    sheet = (tmp_path / "images.csv").read_text()
    assert f"{2.0 / ZOOM!r}" in sheet


def test_a_point_lies_where_turn_zoom_and_shift_about_the_middle_put_it():
    """Wrong if the turn went the other way or about a corner; the expected place is worked out by complex numbers."""
    x, y, middle = np.array([10.0, 90.0]), np.array([20.0, 25.0]), 63.5 + 63.5j
    vessel = Vessel(x, y, np.array([3.0, 3.0]), 0, 1, 0)
    moved = look(Scene((128, 128), x.copy(), y.copy(), (vessel,)), View(*SHIFT, TURN_DEG, ZOOM, margin_px=10))
    place = middle + complex(*SHIFT) - (10 + 10j) + ZOOM * np.exp(1j * np.deg2rad(TURN_DEG)) * (x + 1j * y - middle)
    assert moved.vessels[0].x_px + 1j * moved.vessels[0].y_px == pytest.approx(place)
    assert moved.vessels[0].radius_px == pytest.approx(3.0 * ZOOM)
    assert moved.shape == (108, 108)


def test_an_unmoved_view_leaves_the_picture_as_it_is():
    """Wrong if phantoms made before views were known came out differently."""
    made = parse_recipe(recipe({}))
    assert made.images[1].view == View()
    scene = Scene((64, 64), np.array([]), np.array([]), ())
    assert look(scene, View()) is scene
    assert draw(made, made.images[0], scene).shape == (64, 64)


@pytest.mark.parametrize(
    ("view", "told"),
    [({"zoom": 3.0}, "zoom 3"), ({"turn_deg": 200.0}, "turn_deg 200"), ({"margin_px": 60}, "margin_px 60"),
     ({"shift_x_px": 500.0}, "shift_x_px 500"), ({"angle": 3.0}, "unknown key")],
)  # fmt: skip
def test_impossible_views_are_refused_by_name(view, told):
    """Wrong if a picture were made that shows nothing of its bed."""
    with pytest.raises(RecipeError, match=told):
        parse_recipe(recipe(view))
