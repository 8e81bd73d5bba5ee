"""One image measured from Python, as a person would call it."""

from pathlib import Path

import numpy as np
import pytest
from PIL import Image
from scipy.ndimage import gaussian_filter

import vasohm
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
    assert found.segments["flags"].str.contains("no_interval").any()
