"""The table of blurred profiles against quadrature, its areas against closed forms, and who votes on a profile."""

import numpy as np
import pytest
from radius_truth import gaussian_profile, height
from scipy.special import iv, modstruve

from vasohm.network.blur import advantage
from vasohm.network.profiles import (
    Optics,
    ln_area,
    ln_height,
    optical_blur_px,
    photometric_ln_radius,
    profile_table,
    total_blur_px,
    tube_strips,
)

TABLE_ERROR = 3e-4  # of the unblurred height: a hundredth of the noise of a good picture
SLOPE_ERROR = 2e-3  # of the largest slope; Gauss-Newton steps need no more
FAMILIES = [("slab", 0.0), ("cylinder", 0.0), ("absorber", 0.15), ("absorber", 1.0)]


def strip(table, half, ln_r, offset):
    return tube_strips(table, half, np.array([ln_r]), np.zeros(1), np.array([offset]))[0].astype(float)


@pytest.mark.parametrize(("family", "mu"), FAMILIES)
@pytest.mark.parametrize("s", [0.5, 1.0, 2.5])
def test_blurred_profiles_and_their_slopes_agree_with_quadrature(family, mu, s):
    """Wrong if a thin or a wide tube were drawn from a poor grid, or a slope had the wrong sign or factor."""
    rng = np.random.default_rng(3)
    table = profile_table(Optics(family, mu, s), 40.0, 60)
    h = 1e-4
    for r in s * np.geomspace(0.3, 15.0, 12):
        half, offset = int(min(r + 3 * s + 3, 50)), rng.uniform(-1.5, 1.5)
        x = np.arange(-half, half + 1) - offset
        value, by_ln_r, by_offset = strip(table, half, np.log(r), offset)
        truth = gaussian_profile(family, mu, r, s, x)
        assert np.abs(value - truth).max() < TABLE_ERROR * height(family, mu, r)
        grown, shrunk = (gaussian_profile(family, mu, r * np.exp(step), s, x) for step in (h, -h))
        slope = (grown - shrunk) / (2 * h)
        assert np.abs(by_ln_r - slope).max() < SLOPE_ERROR * np.abs(slope).max()
        right, left = (gaussian_profile(family, mu, r, s, x - step) for step in (h, -h))
        slope = (right - left) / (2 * h)
        assert np.abs(by_offset - slope).max() < SLOPE_ERROR * np.abs(slope).max()
        wider = gaussian_profile(family, mu, 1.01 * r, s, x)
        assert np.abs(wider - truth).max() > TABLE_ERROR * height(family, mu, r)  # teeth: 1 % of radius shows


def test_the_area_of_an_absorber_is_that_of_its_closed_form():
    """K = r pi (I1(t) - L1(t)), t = 2 mu r: Abramowitz and Stegun 12.2.3 for the integral of exp(-t sin)."""
    mu, r = 0.3, np.array([0.2, 1.0, 3.0, 9.0])
    closed = r * np.pi * (iv(1, 2 * mu * r) - modstruve(1, 2 * mu * r))
    optics = Optics("absorber", mu, 1.0)
    found, slope = ln_area(optics, np.log(r))
    np.testing.assert_allclose(np.exp(found), closed, rtol=1e-4)
    ahead, behind = (ln_area(optics, np.log(r) + step)[0] for step in (0.01, -0.01))
    np.testing.assert_allclose(slope, (ahead - behind) / 0.02, rtol=1e-3)
    np.testing.assert_allclose(np.exp(photometric_ln_radius(optics, found)), r, rtol=1e-4)


@pytest.mark.parametrize(("mu", "family", "contrast"), [(1e-4, "cylinder", 1e-4), (30.0, "slab", 1.0)])
def test_the_absorber_lies_between_slab_and_cylinder(mu, family, contrast):
    """Wrong if the three were not one family: little absorption is a cylinder, much is a slab."""
    r = np.log(np.array([1.0, 4.0]))
    absorber, limit = Optics("absorber", mu, 1.0), Optics(family, 0.0, 1.0)
    np.testing.assert_allclose(np.exp(ln_area(absorber, r)[0]), contrast * np.exp(ln_area(limit, r)[0]), rtol=2e-3)
    np.testing.assert_allclose(np.exp(ln_height(absorber, r)), contrast * np.exp(ln_height(limit, r)), rtol=2e-3)


@pytest.mark.parametrize("psf", [0.4, 0.7, 1.1, 2.5])
def test_the_blur_of_the_optics_comes_back_from_all_blur(psf):
    """Wrong if pixel and sampling were taken off once more or once less than they were put on."""
    assert optical_blur_px(total_blur_px(psf)) == pytest.approx(psf, abs=1e-4)
    assert total_blur_px(psf) > np.hypot(psf, np.sqrt(1 / 12))


# Half-height width of a box of width w blurred by a Gaussian of standard deviation 1, over w: roots of a closed form
# with error functions; and of a projected cylinder without blur, sqrt(3)/2 of its diameter (chord of half length)
BOX_WIDTHS = {2.0: 1.3857, 3.0: 1.1109, 4.0: 1.0285, 6.0: 1.0011}
PRINTED = 2e-4  # digits of the published values, and the table's own error over the slope at half height


def half_height_width(table, ln_r):
    """Width at half height of a tabulated profile, read on a grid of a sixteenth of a pixel."""
    half = 50
    fine = np.linspace(-0.5, 0.5, 16, endpoint=False)
    x = np.concatenate([np.arange(-half, half + 1) - offset for offset in fine])
    value = np.concatenate([strip(table, half, ln_r, offset)[0].ravel() for offset in fine])
    order = np.argsort(x)
    x, value = x[order], value[order] / value.max()
    right = x > 0
    return 2 * np.interp(-0.5, -value[right], x[right])


@pytest.mark.parametrize(("width", "ratio"), BOX_WIDTHS.items())
def test_half_height_width_of_a_blurred_slab(width, ratio):
    """A blur of half the width makes a slab look 39 % wider: no width may be taken for the lumen's."""
    s = 2.0
    table = profile_table(Optics("slab", 0.0, s), 20.0, 60)
    assert half_height_width(table, np.log(width * s / 2)) / (width * s) == pytest.approx(ratio, abs=5 * PRINTED)


def test_half_height_width_of_a_projected_cylinder_is_too_small():
    """sqrt(3)/2 of the diameter, hence 1.78 times the resistance (closed form); some blur hardly changes it."""
    table = profile_table(Optics("cylinder", 0.0, 0.5), 30.0, 60)
    ratio = half_height_width(table, np.log(30.0)) / 60.0
    blur_lowers_the_top = 0.005
    assert ratio == pytest.approx(np.sqrt(3) / 2, abs=blur_lowers_the_top)
    assert ratio**-4 == pytest.approx(16 / 9, rel=4 * blur_lowers_the_top)


def test_a_segment_traced_across_two_vessels_has_no_vote_on_the_profile():
    """One such segment, which no profile explains, outvoted a whole photograph: its vessels became slabs."""
    segment = np.repeat(np.arange(6), 20)
    cylinder = np.full(len(segment), 4.0)
    slab = cylinder + 0.5  # every sound strip says cylinder, by half a unit of log likelihood
    wrong = segment == 5
    cylinder[wrong], slab[wrong] = 40.0, 15.0
    cylinder[np.flatnonzero(wrong)[:8]], slab[np.flatnonzero(wrong)[:8]] = 400.0, 250.0
    assert advantage(cylinder, slab, segment) == pytest.approx(0.5 * np.count_nonzero(~wrong))
    swapped = advantage(slab, cylinder, segment)
    assert swapped == pytest.approx(-0.5 * np.count_nonzero(~wrong))
