"""What image.csv says of a picture's quality is what was put into it."""

import numpy as np
import pytest
from drawing import BLUR_PX, NOISE, draw
from test_invariances import TREE, measure

SHAPE = (211, 231)
GROUND, CONTRAST = 60.0, 120.0
TOP = 255
# Noise is read from the picture's own differences, blur and contrast from its vessels: within a tenth
QUALITY_TOLERANCE = 0.10


@pytest.fixture(scope="module")
def picture() -> np.ndarray:
    return np.clip(np.rint(GROUND + CONTRAST * draw(TREE, SHAPE)), 0, TOP - 1).astype(np.uint8)


def quality(picture: np.ndarray):
    return measure(picture).image.iloc[0]


def test_blur_noise_and_contrast_are_those_of_the_picture(picture):
    image = quality(picture)
    assert image.noise == pytest.approx(CONTRAST * NOISE, rel=QUALITY_TOLERANCE)
    assert image.contrast == pytest.approx(CONTRAST, rel=QUALITY_TOLERANCE)
    assert image.blur_px == pytest.approx(BLUR_PX, rel=QUALITY_TOLERANCE)
    assert bool(image.focus_ok)
    assert bool(image.exposure_ok)
    assert (image.saturated_fraction, image.invalid_fraction) == (0.0, 0.0)


@pytest.mark.parametrize(("rows", "is_ok"), [(1, True), (3, False)])
def test_saturated_pixels_are_counted(picture, rows, is_ok):
    """Wrong if the share were of the file, or a picture with more than 1 % of it clipped passed for well exposed."""
    clipped = picture.copy()
    clipped[-rows:] = TOP  # a row is 0.5 % of the picture
    image = quality(clipped)
    assert image.saturated_fraction == pytest.approx(rows / SHAPE[0], rel=1e-12)
    assert bool(image.exposure_ok) == is_ok
    assert ("saturated" in image["flags"].split(";")) != is_ok


def test_pixels_that_are_no_number_are_counted_with_what_they_touch(picture):
    """A pixel and those within two steps of it along rows and columns: 13 of a diamond."""
    spoiled = picture.astype(np.float32)
    spoiled[180, 40] = np.nan
    image = quality(spoiled)
    assert image.invalid_fraction == pytest.approx(13 / picture.size, rel=1e-12)
    assert "invalid_pixels" in image["flags"].split(";")


@pytest.mark.parametrize("value", [0, 7, TOP])
def test_a_blank_picture_holds_nothing_and_is_not_well_exposed(value):
    image = quality(np.full(SHAPE, value, np.uint8))
    assert image.status == "empty"
    assert not image.exposure_ok
    assert image.saturated_fraction == (1.0 if value == TOP else 0.0)


def test_a_picture_saturated_by_more_than_half_is_not_well_exposed(picture):
    bright = picture.copy()
    bright[: int(0.6 * SHAPE[0])] = TOP
    image = quality(bright)
    assert not image.exposure_ok
    assert image.saturated_fraction == pytest.approx(0.6, abs=1 / SHAPE[0])
