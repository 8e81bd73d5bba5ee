"""Large pictures: measured in blocks they give what they give in one piece, and no seam is seen."""

import errno
import os
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
import tifffile
from PIL import Image
from scipy.spatial import cKDTree

from vasohm.errors import ImageError
from vasohm.flags import Flag
from vasohm.image import blocks, prepare_blocks
from vasohm.image.calibrate import ScaledImage
from vasohm.image.prepare import PrepareSettings, prepare
from vasohm.image.read import RawImage, ReadSettings, in_blocks, read_image
from vasohm.network import densities, grouped
from vasohm_synthetic.make import make_phantoms
from vasohm_synthetic.recipe import read_recipe

BLOCK_MEGAPIXELS = 0.3
SAME_PLACE_PX = 1.0  # nodes; no two branchings of the bed are so near each other
SAME_LENGTH = 0.03  # of a length, or this share of
R_TOLERANCE = 0.01  # of resistances, in the mean: blur and contrast are learnt from other samples of the same vessels
RADIUS_IN_SE = 0.5  # of the stated standard uncertainty of a radius: half of what it may be off by anyway
FLAT_TOLERANCE = 0.02  # of a pixel's noise
MESH = """
[phantom]
name = "bed"
seed = 7
pixel_size_um = 1.0
preset = "fluorescence"
radius_um = [1.5, 10.0]
[optics]
profile = "cylinder"
polarity = "bright"
contrast = 0.35
reference_radius_px = 3.0
blur_px = 1.0
[[optics.channel]]
background = 0.08
[optics.camera]
photons = 1500
noise_sd = 0.004
bits = 16
[scene]
kind = "mesh"
width_px = 600
height_px = 600
mesh = { spacing_px = 90.0, radius_px = 3.0, radius_sd = 0.25, feeder_radius_px = 6.0, drop = 0.1 }
[[image]]
image_id = "bed"
"""
STUDY = """
[study]
name = "large"
sheet = "images.csv"
[image]
preset = "fluorescence"
block_megapixels = {}
[segment]
radius_um = [1.5, 10.0]
"""


def test_cores_of_blocks_cover_a_picture_once():
    """Wrong if a strip of pixels were measured twice or not at all."""
    count = np.zeros((1000, 333), int)
    for block in blocks.blocks_of(count.shape, 128, 40):
        window = np.zeros_like(count)[block.window]
        window[block.inner] = 1
        count[block.window] += window
        assert count[block.core].min() == 1
    assert count.max() == 1


def test_a_large_file_is_decoded_onto_disk(tmp_path):
    """Wrong if tiles were mixed up, or the picture were held in memory after all."""
    pixels = np.random.default_rng(1).integers(0, 60000, (700, 500)).astype(np.uint16)
    tifffile.imwrite(tmp_path / "a.tif", pixels, tile=(64, 96), compression="zlib", photometric="minisblack")
    raw = read_image(tmp_path / "a.tif", ReadSettings("max", 1.0, 0, 0.25))
    assert blocks.is_on_disk(raw.pixels)
    assert raw.block_px == 500
    np.testing.assert_array_equal(raw.pixels, pixels)
    small = read_image(tmp_path / "a.tif", ReadSettings("max", 1.0, 0, 0.4))
    assert small.block_px == 0
    assert not blocks.is_on_disk(small.pixels)


def test_a_full_disk_is_told_before_it_kills(monkeypatch):
    """A file with holes is killed for by the system when they cannot be filled: the room must be taken beforehand."""

    def full(*_: int) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "posix_fallocate", full)
    with pytest.raises(ImageError, match=r"1 MB more where .* TMPDIR"):
        blocks.on_disk((1000, 1000), np.uint8)


@pytest.mark.parametrize("polarity", ["dark", "bright"])
def test_preparing_in_blocks_flattens_alike(polarity, monkeypatch):
    """Wrong if each block had a background or a noise of its own: steps would be seen at the borders."""
    monkeypatch.setattr(prepare_blocks, "CORE_PX", 128)
    rng = np.random.default_rng(3)
    y, x = np.mgrid[:420, :500]
    light = 20000 + 15 * x + 10 * y + rng.normal(0, 300, x.shape)
    light[np.hypot(x - 250, y - 210) > 240] = 40  # outside of the field
    raw = RawImage(light.astype(np.uint16), 65535.0, "", None, "", (), Flag.NONE)
    settings = PrepareSettings("green", polarity, 1.0, (2.0, 12.0))
    fov = light > 1000
    whole = prepare(ScaledImage(raw, 1.0, 0.0, "sheet", Flag.NONE), settings, fov)
    pieces = prepare_blocks.prepare_in_blocks(
        ScaledImage(in_blocks(raw, 0.1), 1.0, 0.0, "sheet", Flag.NONE), settings, fov
    )
    apart = np.abs(pieces.signal - whole.signal) / whole.noise_sd
    assert apart[fov].max() < FLAT_TOLERANCE
    np.testing.assert_array_equal(pieces.fov, whole.fov)
    assert np.abs(np.log(pieces.noise_sd / whole.noise_sd))[fov].max() < FLAT_TOLERANCE
    shifted = np.abs(np.roll(whole.signal, 1, axis=0) - whole.signal) / whole.noise_sd
    assert shifted[fov].max() > FLAT_TOLERANCE  # teeth: a row out of place would be seen


def test_filling_is_told_alike_from_disk(monkeypatch):
    """Wrong if distances ended at a block's border, or an avascular area over several blocks were cut."""
    monkeypatch.setattr(densities, "BLOCK_PX", 96)
    rng = np.random.default_rng(5)
    y, x = np.mgrid[:400, :520]
    vessels = np.zeros(x.shape, bool)
    for _ in range(25):
        at_x, at_y, angle = rng.uniform(0, 520), rng.uniform(0, 400), rng.uniform(0, np.pi)
        vessels |= np.abs((x - at_x) * np.sin(angle) - (y - at_y) * np.cos(angle)) < 2
    vessels[np.hypot(x - 300, y - 200) < 70] = False  # wider than a block
    fov = np.hypot(x - 260, y - 200) < 250
    whole = densities.describe_filling(vessels, fov, 2.0)
    large = densities.describe_filling(blocks.kept_on_disk(vessels), blocks.kept_on_disk(fov), 2.0)
    assert large.distances == whole.distances
    assert large.avascular == whole.avascular
    assert large.dimension == whole.dimension
    np.testing.assert_array_equal(large.scales.lacunarity, whole.scales.lacunarity)
    assert whole.avascular.radius_um > 96  # as wide as blocks are


def _measured(place, megapixels: float) -> dict[str, pd.DataFrame]:
    (place / "study.toml").write_text(STUDY.format(megapixels))
    out = place / f"results-{megapixels:g}"
    command = [sys.executable, "-m", "vasohm", "measure", place / "study.toml", "--out", out, "--quiet"]
    subprocess.run(command, check=True)
    return {name: pd.read_csv(out / "images" / "large" / f"{name}.csv") for name in ("segments", "nodes", "image")}


@pytest.mark.slow
def test_blocks_give_the_segments_of_one_piece(tmp_path):
    """Wrong if a seam cut a vessel, made a node, or told blocks apart by blur, noise or contrast."""
    (tmp_path / "bed.toml").write_text(MESH)
    make_phantoms(read_recipe(tmp_path / "bed.toml"), tmp_path / "bed")
    bed = np.asarray(Image.open(tmp_path / "bed" / "bed.png"))
    upper = np.concatenate((bed, bed[:, ::-1]), axis=1)  # mirrored, so that vessels go on over the middle
    tifffile.imwrite(tmp_path / "large.tif", np.concatenate((upper, upper[::-1])), tile=(256, 256))
    (tmp_path / "images.csv").write_text("image_id,file,pixel_size_um\nlarge,large.tif,1.0\n")
    whole, pieces = _measured(tmp_path, 4.0), _measured(tmp_path, BLOCK_MEGAPIXELS)
    nodes, other = (one["nodes"][["x_px", "y_px"]].to_numpy() for one in (whole, pieces))
    assert len(nodes) == len(other) > 100
    assert cKDTree(nodes).query(other)[0].max() < SAME_PLACE_PX
    a, b = whole["segments"], pieces["segments"]
    assert len(a) == len(b)
    number = np.append(0, 1 + cKDTree(nodes).query(other)[1])  # of each node in the other measurement
    ends = np.sort(np.column_stack((number[b.node_a], number[b.node_b])))
    key = pd.DataFrame({"low": ends[:, 0], "high": ends[:, 1], "length": b.length_um.round(-1)})
    b = b.iloc[key.sort_values(["low", "high", "length"], kind="stable").index]
    key = pd.DataFrame({"low": a.node_a, "high": a.node_b, "length": a.length_um.round(-1)})
    a = a.iloc[key.sort_values(["low", "high", "length"], kind="stable").index]
    np.testing.assert_allclose(b.length_um, a.length_um, rtol=SAME_LENGTH, atol=SAME_PLACE_PX)
    ln_ratio = np.log(b.resistance_pa_s_m3.to_numpy() / a.resistance_pa_s_m3.to_numpy())
    assert abs(ln_ratio.mean()) < R_TOLERANCE
    in_se = (b.radius_hydraulic_um.to_numpy() - a.radius_hydraulic_um.to_numpy()) / a.radius_hydraulic_se_um.to_numpy()
    assert np.quantile(np.abs(in_se), 0.95) < RADIUS_IN_SE
    assert np.std(np.log(a.resistance_pa_s_m3)) > 20 * np.std(ln_ratio)  # teeth: other segments are not so alike


def test_lines_longer_than_a_group_keep_their_variance():
    """Wrong if pieces of a cut line were counted to another line, or twice."""
    lines = grouped.TubeLines(
        np.arange(50.0), np.zeros(50), np.array([0, 30, 50]), np.ones(50), np.zeros(2, int), np.array([0, 1]),
        np.array([1, 2]),
    )  # fmt: skip
    cut = grouped._cut_where(lines, np.repeat([0, 1], [30, 20]), np.arange(50), 12)
    assert np.diff(cut.offsets).tolist() == [10, 10, 10, 10, 10]
    assert cut.line.tolist() == [0, 0, 0, 1, 1]
    assert (cut.node_a[0], cut.node_b[2], cut.node_a[3], cut.node_b[4]) == (0, 1, 1, 2)
    inner = [*cut.node_b[:2], *cut.node_a[1:3], cut.node_b[3], cut.node_a[4]]
    assert len(set(inner)) == len(inner)
    assert not set(inner) & {0, 1, 2}
