"""Tubes drawn on a pixel grid by distance to a polyline: independent of the package and of its phantoms."""

import numpy as np
from scipy import ndimage
from scipy.spatial import cKDTree

from vasohm.flags import Flag
from vasohm.image.prepare import ImageQuality, PreparedImage

BLUR_PX = 1.0
NOISE = 0.1  # of the contrast: contrast-to-noise 10


def draw(lines: list[tuple[np.ndarray, np.ndarray, float]], shape: tuple[int, int], seed: int | None = 0) -> np.ndarray:
    """Bright slabs of unit contrast, blurred, with noise; lines are (x_px, y_px, radius_px)."""
    rows, columns = np.indices(shape)
    pixels = np.column_stack((columns.ravel(), rows.ravel()))
    picture = np.zeros(shape)
    for x, y, radius in lines:
        step = np.concatenate(([0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))))
        dense = np.linspace(0, step[-1], int(step[-1] * 8) + 2)
        tree = cKDTree(np.column_stack((np.interp(dense, step, x), np.interp(dense, step, y))))
        distance = tree.query(pixels, distance_upper_bound=radius + 2)[0].reshape(shape)
        picture = np.maximum(picture, np.clip(radius + 0.5 - distance, 0, 1))
    picture = ndimage.gaussian_filter(picture, BLUR_PX)
    if seed is not None:
        picture += np.random.default_rng(seed).normal(0, NOISE, shape)
    return picture


def prepared(picture: np.ndarray) -> PreparedImage:
    """The drawn picture as the prepared noun: flat background, known noise."""
    return PreparedImage(
        signal=picture.astype(np.float32),
        noise_sd=np.full(picture.shape, NOISE, np.float32),
        picture=np.clip(200 * picture + 20, 0, 255).astype(np.uint8),
        fov=np.ones(picture.shape, dtype=bool),
        clipped=np.zeros(picture.shape, dtype=bool),
        polarity="bright",
        pixel_size_um=1.0,
        pixel_size_se_um=0.01,
        pixel_size_source="sheet",
        quality=ImageQuality(NOISE, 0.0, 0.0, exposure_ok=True),
        notes=(),
        flags=Flag.NONE,
    )
