"""Shape of segments and networks against geometry: lengths, areas and volumes with closed forms."""

import numpy as np
import pytest
from beds import CommonErrors, Vessel, bed, straight
from shapes import shape_of


def test_tortuosity_of_arcs():
    """Arc over chord: a semicircle pi/2, a quarter circle pi/(2 sqrt 2), a straight line 1."""
    turns = [np.pi, np.pi / 2]
    vessels, nodes = [], []
    for k, turn in enumerate(turns):
        at = np.linspace(0, turn, 2001)
        path = 100.0 * np.stack([np.cos(at), np.sin(at)], axis=1) + [110.0 + 220.0 * k, 110.0]
        nodes += [tuple(path[0]), tuple(path[-1])]
        vessels.append(Vessel(2 * k, 2 * k + 1, path, np.full(2001, 5.0)))
    nodes += [(10.0, 400.0), (110.0, 430.0)]
    vessels.append(straight(nodes, 4, 5, 5.0))
    found = shape_of(bed(nodes, vessels))
    polygon = (np.pi / 2000) ** 2 / 24  # a polygon of 2000 sides is shorter than its arc by this part
    np.testing.assert_allclose(found.tortuosity, [np.pi / 2, np.pi / np.sqrt(8), 1.0], rtol=2 * polygon)
    length = np.array([np.pi, np.pi / 2, np.hypot(100, 30) / 100])
    assert found.whole.tortuosity_mean == pytest.approx(np.average(found.tortuosity, weights=length), rel=2 * polygon)


def test_length_area_and_volume_of_cones():
    """A frustum in side view: length L, area (r1 + r2) L, volume pi L (r1² + r1 r2 + r2²) / 3."""
    nodes = [(0.0, 0.0), (300.0, 0.0), (0.0, 50.0), (300.0, 50.0)]
    vessels = [straight(nodes, 0, 1, np.linspace(12, 4, 801)), straight(nodes, 2, 3, 5.0)]
    found = shape_of(bed(nodes, vessels, pixel_size_um=0.5))
    np.testing.assert_allclose(found.network_length_um, [150.0, 150.0])
    np.testing.assert_allclose(found.network_area_um2, [16 * 150, 10 * 150])
    trapezium = (8 / 800) ** 2  # the rule's error for a square, over r²
    np.testing.assert_allclose(
        found.network_volume_um3, [np.pi * 150 * (144 + 48 + 16) / 3, np.pi * 150 * 25], rtol=trapezium
    )
    np.testing.assert_allclose(found.radius_mean_um, [8.0, 5.0])
    assert found.whole.radius_mean_um == pytest.approx(6.5)
    assert found.length_um == pytest.approx(300.0)
    assert found.fov_area_um2 == 512 * 512 * 0.25


def test_the_spread_of_the_radius_is_the_vessels_own():
    """Independent noise adds its variance, a posterior's smoothing hides its own; both are undone."""
    nodes, n, own, noise = [(0.0, 0.0), (4000.0, 0.0)], 4001, 0.10, 0.15
    rng = np.random.default_rng(3)
    wave = own * np.sqrt(2) * np.sin(np.linspace(0, 40 * np.pi, n))  # standard deviation `own` of ln r
    noisy = 10 * np.exp(wave + rng.normal(0, noise, n))
    sampling = 4 * noise**2 * np.sqrt(2 / n) / (2 * own**2)  # four standard errors of the variance, halved for the root
    seen = shape_of(bed(nodes, [straight(nodes, 0, 1, noisy)], ln_se=noise, noise_sign=-1))
    assert seen.radius_sd_um[0] / seen.radius_mean_um[0] == pytest.approx(own, rel=sampling)
    smooth = shape_of(bed(nodes, [straight(nodes, 0, 1, 10.0, n)], ln_se=own, noise_sign=1))
    assert smooth.radius_sd_um[0] == pytest.approx(10.0 * own, rel=2 / n)
    even = shape_of(bed(nodes, [straight(nodes, 0, 1, 10.0, n)], ln_se=own, noise_sign=-1))
    assert even.radius_sd_um[0] == 0.0
    common = bed(nodes, [straight(nodes, 0, 1, 10.0, n)], ln_se=own, noise_sign=1, errors=CommonErrors)
    assert shape_of(common).radius_sd_um[0] == pytest.approx(0.0, abs=1e-6)


def test_an_image_without_vessels():
    found = shape_of(bed([], []))
    assert np.isnan(found.whole.radius_mean_um)
    assert np.isnan(found.filling.dimension.value)
    assert found.length_um == 0.0
    assert found.classes == ()
    assert found.branchings.node.shape == found.network_length_um.shape == (0,)
