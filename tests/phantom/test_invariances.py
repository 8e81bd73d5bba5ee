"""What must not change when the picture is turned, mirrored, scaled, or shown as its negative."""

from itertools import pairwise

import numpy as np
import pytest
import tifffile
from drawing import draw
from skimage.draw import line

import vasohm

PIXEL_UM = 2.0
TREE = [  # a trunk from the left border that branches once into two vessels with free ends; (x, y, radius)
    (np.array([0.0, 110.0]), np.array([100.0, 100.0]), 6.0),
    (np.array([110.0, 200.0]), np.array([100.0, 50.0]), 4.5),
    (np.array([110.0, 200.0]), np.array([100.0, 160.0]), 4.0),
]
# Thinning and sampling are not exactly symmetric on a pixel grid; 1 % of a radius is 4 % of a resistance
R_TOLERANCE = 0.04


@pytest.fixture(scope="module")
def picture():
    """8-bit-like brightness: background 60, vessels up to 200, noise 14."""
    return 60 + 140 * draw(TREE, (211, 231))


def measure(picture, *, scale=1.0, preset="fluorescence", **more):
    return vasohm.measure_image(
        picture, pixel_size_um=PIXEL_UM * scale, preset=preset, segment={"radius_um": [3.0 * scale, 40.0 * scale]},
        blood={"law": "constant", "viscosity_mpa_s": 3.0}, **more,
    )  # fmt: skip


@pytest.fixture(scope="module")
def plain(picture):
    return measure(picture)


def network_resistance(measured):
    assert len(measured.networks) == 1
    return float(measured.networks.resistance_pa_s_m3.iloc[0])


def test_the_tree_is_measured_as_drawn(plain):
    assert plain.networks.n_segments.tolist() == [3]
    assert plain.networks.terminals.tolist() == ["auto"]
    assert sorted(plain.nodes.kind) == ["branching", "end", "end", "rim"]
    assert plain.nodes.role.tolist().count("inlet") == 1
    assert plain.nodes[plain.nodes.kind == "rim"].role.tolist() == ["inlet"]


@pytest.mark.parametrize("turn", [np.rot90, np.flipud, np.fliplr, np.transpose])
def test_turning_and_mirroring(picture, plain, turn):
    """Wrong if a radius or a length depended on the direction of the pixel rows."""
    turned = measure(np.ascontiguousarray(turn(picture)))
    assert network_resistance(turned) == pytest.approx(network_resistance(plain), rel=R_TOLERANCE)


def test_resistance_goes_with_the_inverse_cube_of_the_pixel_size(picture, plain):
    """R ~ L / r^4: a pixel twice as large gives an eighth, whatever the picture (closed form, constant viscosity)."""
    doubled = measure(picture, scale=2.0)
    rounding = 1e-6  # single precision pictures, sums in a different unit
    assert network_resistance(plain) / network_resistance(doubled) == pytest.approx(8.0, rel=rounding)


def test_the_negative_with_the_other_polarity(picture, plain):
    """Dark vessels on bright ground are the same vessels, but for a signal that is divided by its background."""
    negative = 400 - picture
    dark = measure(negative, preset="fundus")
    assert network_resistance(dark) == pytest.approx(network_resistance(plain), rel=R_TOLERANCE)


@pytest.mark.parametrize("gain", [0.01, 7.0])
def test_gain_changes_nothing(picture, plain, gain):
    """Wrong if a threshold were counted in grey values instead of in noise."""
    assert network_resistance(measure(picture * gain)) == pytest.approx(network_resistance(plain), rel=1e-3)


def test_an_offset_of_bright_vessels_changes_nothing(picture, plain):
    assert network_resistance(measure(picture + 1000.0)) == pytest.approx(network_resistance(plain), rel=1e-3)


def lumens(extra_px: float) -> np.ndarray:
    """The tree's lumens as a mask, each radius larger by so much."""
    return draw([(x, y, r + extra_px) for x, y, r in TREE], (211, 231), seed=None) > 0.5


def axes_of_tree() -> np.ndarray:
    """The tree's axes as lines one pixel wide (Bresenham's, of scikit-image)."""
    mask = np.zeros((211, 231), dtype=bool)
    for x, y, _ in TREE:
        for (x0, y0), (x1, y1) in pairwise(zip(x.astype(int), y.astype(int), strict=True)):
            mask[line(y0, x0, y1, x1)] = True
    return mask


@pytest.mark.parametrize(
    "values",
    [
        lumens(0),
        lumens(2.0).astype(np.uint8),
        255 * lumens(-2.0).astype(np.uint8),
        3 * axes_of_tree().astype(np.uint16),
    ],
    ids=["bool", "wide, 0 and 1", "narrow, 0 and 255", "axes, a label"],
)
def test_a_mask_made_elsewhere_says_where_and_the_picture_how_wide(picture, plain, values, tmp_path):
    """Wrong if a radius came from the mask: masks 2 px wider or narrower, or mere lines, would move it by a third."""
    tifffile.imwrite(tmp_path / "mask.tif", values)
    given = measure(picture, mask_file=tmp_path / "mask.tif")
    assert given.networks.n_segments.tolist() == [3]
    assert sorted(given.nodes.kind) == sorted(plain.nodes.kind)
    assert network_resistance(given) == pytest.approx(network_resistance(plain), rel=R_TOLERANCE)
    narrow, wide = 4.5 - 2.0, 4.5 + 2.0
    assert (wide / narrow) ** 4 > 1 + 10 * R_TOLERANCE  # teeth
