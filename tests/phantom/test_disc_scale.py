"""Pixel size from an optic disc that nobody told: found at a guessed scale first, or the image is refused."""

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter

import vasohm
from vasohm.errors import ScaleError
from vasohm.results.tables import ImageTables

DISC_PX, DISC_UM = 32.0, 1800.0
SIZE_PX = 400


def eye(*, disc: bool) -> np.ndarray:
    """Eight absorbing vessels out of a bright disc, by Beer's law."""
    y, x = np.mgrid[:SIZE_PX, :SIZE_PX].astype(float)
    x, y = x - 0.38 * SIZE_PX, y - 0.5 * SIZE_PX
    light = 110 + 70 * (np.hypot(x, y) < DISC_PX) * disc
    depth = np.zeros_like(light)
    for k in range(8):
        turn = 2 * np.pi * k / 8 + 0.2
        along = x * np.cos(turn) + y * np.sin(turn)
        off = y * np.cos(turn) - x * np.sin(turn) - (0.0015 if k % 2 else -0.0015) * along**2
        tube = 2 * np.sqrt(np.maximum((3.2 if k % 2 else 4.0) ** 2 - off**2, 0))
        depth = np.maximum(depth, np.where(along > 0.3 * DISC_PX, tube, 0))
    blurred = gaussian_filter(light * np.exp(-0.07 * depth), 1.2)
    return np.clip(np.round(blurred + np.random.default_rng(0).normal(0, 1.5, light.shape)), 0, 255).astype(np.uint8)


def measured(picture: np.ndarray, **known: float) -> ImageTables:
    scale = {"disc_diameter_um": DISC_UM}
    return vasohm.measure_image(picture, scale=scale, segment={"radius_um": [40.0, 400.0]}, **known)


def test_a_disc_found_in_the_picture_gives_the_pixel_size() -> None:
    """Its margin is placed to a pixel at worst; the guess that comes first is 14 % off here and must leave no trace."""
    image = measured(eye(disc=True)).image.iloc[0]
    assert image["pixel_size_um"] == pytest.approx(DISC_UM / (2 * DISC_PX), rel=1 / DISC_PX)
    assert (image["pixel_size_source"], image["disc_source"]) == ("disc", "image")
    assert image["pixel_size_se_um"] == pytest.approx(0.09 * image["pixel_size_um"])
    assert image["pixel_size_um"] == pytest.approx(DISC_UM / (2 * image["disc_radius_px"]), rel=1e-12)


def test_a_picture_without_a_disc_is_refused() -> None:
    with pytest.raises(ScaleError, match="no optic disc is known either"):
        measured(eye(disc=False))
