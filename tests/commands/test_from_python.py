"""One image measured from Python, as a person would call it."""

from pathlib import Path

import numpy as np
import pytest
from PIL import Image
from scipy.ndimage import gaussian_filter

import vasohm
from vasohm.errors import RequestError
from vasohm.results.write import record_is_whole, write_image

PIXEL_SIZE_UM = 2.0


def random_mask(folder: Path, seed: int, size_px: int = 96) -> Path:
    """Blobs and holes where no vessel is, joined every which way."""
    noise = np.random.default_rng(seed).normal(size=(size_px, size_px))
    path = folder / f"mask-{seed}.png"
    Image.fromarray((255 * (gaussian_filter(noise, 1.5) > 0.05)).astype(np.uint8)).save(path)
    return path


@pytest.mark.parametrize("seed", [0, 8])
def test_vessels_where_there_are_none_are_written_without_bounds(tmp_path: Path, seed: int) -> None:
    """One hopeless segment must not cost the whole image, nor pass for a segment with an interval."""
    picture = np.clip(np.random.default_rng(seed).normal(120.0, 10.0, (96, 96)), 0, 255).astype(np.uint8)
    found = vasohm.measure_image(picture, pixel_size_um=PIXEL_SIZE_UM, mask_file=random_mask(tmp_path, seed))
    write_image(found, tmp_path / "out", {"key": "k"}, overlay=False)
    assert record_is_whole(tmp_path / "out")
    for table in (found.segments, found.networks):
        low, high = table["resistance_lo_pa_s_m3"], table["resistance_hi_pa_s_m3"]
        is_known = table["resistance_pa_s_m3"].notna()
        is_bounded = np.isfinite(low) & np.isfinite(high)
        assert (low.notna() == high.notna()).all()
        assert (table["flags"].str.contains("no_interval") == (is_known & ~is_bounded)).all()


GREY = np.full((40, 40), 100, np.uint8)


@pytest.mark.parametrize(
    ("pixels", "words"),
    [
        (GREY * 1j, "an array of complex128 is no picture"),
        (GREY.astype(object), "an array of object is no picture"),
        (GREY.astype(str), "an array of <U3 is no picture"),
        (None, "an array of object is no picture"),
        (GREY[:0], r"an array of shape \(0, 40\) holds no pixel"),
        (GREY[0], r"an array of shape \(40,\) is no picture: \[y, x\]"),
        (np.stack([GREY, GREY], axis=2), r"an array of shape \(40, 40, 2\) is no picture"),
    ],
)
def test_an_array_that_is_no_picture_is_refused_in_words(pixels: object, words: str) -> None:
    with pytest.raises(RequestError, match=words):
        vasohm.measure_image(pixels, pixel_size_um=PIXEL_SIZE_UM)  # type: ignore[arg-type]


@pytest.mark.parametrize("hematocrit", [-0.01, 45.0, np.nan])
def test_a_hematocrit_out_of_range_is_refused_at_once(hematocrit: float) -> None:
    """Per cent taken for a fraction is the usual slip; it must not surface after a minute of measuring."""
    with pytest.raises(RequestError, match=r"hematocrit is .*; give a fraction between 0 and 0.75, not per cent"):
        vasohm.measure_image(GREY, pixel_size_um=PIXEL_SIZE_UM, hematocrit=hematocrit)


def test_colour_with_and_without_opacity_is_the_same_picture() -> None:
    light = np.random.default_rng(0).normal(150.0, 2.0, (64, 64))
    light[28:36] -= 40.0
    colour = np.clip(np.stack([light, light, light], axis=2), 0, 255).astype(np.uint8)
    opaque = np.concatenate([colour, np.full((64, 64, 1), 255, np.uint8)], axis=2)
    plain, with_opacity = (vasohm.measure_image(one, pixel_size_um=PIXEL_SIZE_UM) for one in (colour, opaque))
    assert len(plain.segments) > 0
    assert plain.segments.equals(with_opacity.segments)
