"""Phantom pictures against closed forms and quadrature written here; no line is shared with what draws them."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from PIL import Image
from scipy.special import erf

from vasohm_synthetic.backdrop import digitise
from vasohm_synthetic.curves import process
from vasohm_synthetic.make import build_bed, draw, make_phantoms
from vasohm_synthetic.optics import Backdrop, Camera, Channel, Optics
from vasohm_synthetic.recipe import read_recipe
from vasohm_synthetic.render import render, render_vessels
from vasohm_synthetic.scene import Circle, Scene, Vessel
from vasohm_synthetic.tone import retone
from vasohm_synthetic.tubes import Tube, tube_scene

CONFIGS = Path(__file__).parents[2] / "configs"
PROFILE_TOLERANCE = 0.002  # of the contrast: what a phantom promises for straight tubes
CENTRE = (31.37, 32.81)  # off the pixel grid in both directions
SIDE = 64


def blurred_profile(x, radius, chord_density, sigma):
    """Quadrature of a tube's profile under a Gaussian: 400 midpoints in the angle phi, u = r sin phi."""
    n = 400
    edges = np.linspace(-np.pi / 2, np.pi / 2, n + 1)
    middle = 0.5 * (edges[1:] + edges[:-1])
    value = chord_density(2 * radius * np.cos(middle))
    low, high = radius * np.sin(edges[:-1]), radius * np.sin(edges[1:])
    share = 0.5 * (erf((x[..., None] - low) / (sigma * np.sqrt(2))) - erf((x[..., None] - high) / (sigma * np.sqrt(2))))
    return share @ value


def expected_picture(radius, angle_deg, chord_density, sigma):
    """A straight tube through CENTRE: the blurred profile averaged over each pixel by 6 x 6 Gauss-Legendre points."""
    nodes, weights = np.polynomial.legendre.leggauss(6)
    y, x = np.mgrid[:SIDE, :SIDE].astype(float)
    cos, sin = np.cos(np.deg2rad(angle_deg)), np.sin(np.deg2rad(angle_deg))
    at = np.linspace(-SIDE, SIDE, 6401)
    profile = blurred_profile(at, radius, chord_density, sigma)
    total = np.zeros((SIDE, SIDE))
    for node_x, weight_x in zip(nodes, weights, strict=True):
        for node_y, weight_y in zip(nodes, weights, strict=True):
            distance = -(x + node_x / 2 - CENTRE[0]) * sin + (y + node_y / 2 - CENTRE[1]) * cos
            total += 0.25 * weight_x * weight_y * np.interp(distance, at, profile)
    return total


DENSITY = {
    "slab": lambda chord, _: np.full_like(chord, 0.5),
    "cylinder": lambda chord, r: 0.5 * chord / (2 * r),
    "absorber": lambda chord, _: 0.5 * (1 - np.exp(-0.2 * chord)),
}


def optics_for(profile, radius, sigma, **more):
    return Optics(
        profile=profile,
        contrast=0.5,
        reference_radius_px=radius,
        absorption_per_px=0.2,
        blur_px=sigma,
        **more,
    )


@pytest.mark.parametrize("profile", ["slab", "cylinder", "absorber"])
@pytest.mark.parametrize(
    ("radius", "sigma", "angle_deg"),
    [(0.7, 0.8, 17.0), (1.0, 0.5, 45.0), (2.0, 1.0, 0.0), (3.3, 0.7, 63.4), (4.0, 2.0, 90.0), (8.0, 1.0, 30.0)],
)
def test_straight_tube_has_the_blurred_profile_at_any_angle_and_phase(profile, radius, sigma, angle_deg):
    """Wrong chords, blur, pixel average or aliasing would bias every radius measured on a phantom."""
    scene = tube_scene([Tube(*CENTRE, radius_px=radius, length_px=400.0, angle_deg=angle_deg)], (SIDE, SIDE))
    (drawn,) = render_vessels(scene, optics_for(profile, radius, sigma, polarity="bright"))

    def chord_density(chord):
        return DENSITY[profile](chord, radius)

    expected = expected_picture(radius, angle_deg, chord_density, sigma)
    contrast = float(chord_density(np.array([2 * radius]))[0])
    np.testing.assert_allclose(drawn, expected, rtol=0, atol=PROFILE_TOLERANCE * contrast)
    wider = expected_picture(1.02 * radius, angle_deg, lambda c: DENSITY[profile](c, radius), sigma)
    assert np.abs(drawn - wider).max() > PROFILE_TOLERANCE * contrast  # teeth: 2 % of the radius would be seen


def test_dark_tube_is_transmitted_light_blurred_or_density_blurred():
    """A picture whose optical density is not what the truth says would mislead every test on dark vessels."""
    radius, sigma, angle = 3.0, 1.0, 25.0
    scene = tube_scene([Tube(*CENTRE, radius_px=radius, length_px=400.0, angle_deg=angle)], (SIDE, SIDE))
    light = render_vessels(scene, optics_for("cylinder", radius, sigma, polarity="dark", blur_in="light"))[0]
    density = render_vessels(scene, optics_for("cylinder", radius, sigma, polarity="dark", blur_in="density"))[0]
    lost = expected_picture(radius, angle, lambda c: 1 - np.exp(-0.5 * c / (2 * radius)), sigma)
    blurred = expected_picture(radius, angle, lambda c: 0.5 * c / (2 * radius), sigma)
    np.testing.assert_allclose(1 - light, lost, rtol=0, atol=PROFILE_TOLERANCE * 0.5)
    np.testing.assert_allclose(-np.log(density), blurred, rtol=0, atol=PROFILE_TOLERANCE * 0.5)
    assert np.abs(light - density).max() > PROFILE_TOLERANCE * 0.5  # teeth: the two are told apart


@pytest.mark.parametrize(("shape", "length"), [("straight", 60.0), ("arc", 60.0), ("ring", 2 * np.pi * 20)])
def test_light_of_a_cylinder_is_its_volume(shape, length):
    """Pappus: a bent tube holds pi r^2 times the length of its axis. A lost end or a doubled bend would show."""
    radius, reference, contrast = 4.0, 5.0, 0.5
    tube = Tube(40.2, 39.7, radius, length_px=length, angle_deg=33.0, shape=shape, bend_radius_px=20.0)
    optics = Optics(profile="cylinder", polarity="bright", contrast=contrast, reference_radius_px=reference)
    (drawn,) = render_vessels(tube_scene([tube], (80, 80)), optics)
    volume = np.pi * radius**2 * length * contrast / (2 * reference)
    grid = 2e-3  # square-cut ends are averaged over cells of a quarter pixel
    assert drawn.sum() == pytest.approx(volume, rel=grid)


def two_tubes(layer_of_second):
    first = tube_scene([Tube(32, 32, 6, 400, 0), Tube(32, 32, 6, 400, 90)], (65, 65))
    return replace(first, vessels=(first.vessels[0], replace(first.vessels[1], layer=layer_of_second)))


@pytest.mark.parametrize(
    ("profile", "single", "crossed"),
    [
        ("slab", 0.4, 0.8),
        ("cylinder", 0.4, 0.8),
        ("absorber", 0.4 * (1 - np.exp(-1.2)), 0.4 * (1 - np.exp(-2.4))),
    ],
)
def test_crossing_adds_absorption_and_junction_does_not(profile, single, crossed):
    """If lumens that join were counted twice, every branching would look like a crossing."""
    optics = Optics(
        profile=profile, contrast=0.4, reference_radius_px=6.0, absorption_per_px=0.1, blur_px=0.0, supersample=5
    )
    across = -np.log(render_vessels(two_tubes(1), optics)[0][32, 32])
    joined = -np.log(render_vessels(two_tubes(0), optics)[0][32, 32])
    pixel = 0.4 * 2 * (1 - np.sqrt(1 - (0.5 / 6) ** 2))  # an axis pixel's mean chord is shorter than the diameter
    assert across == pytest.approx(crossed, abs=pixel)
    assert joined == pytest.approx(single, abs=pixel)


def test_quarter_turn_of_the_scene_turns_the_picture():
    """A swapped axis or a half-pixel shift would break it."""
    scene = tube_scene(
        [Tube(20.3, 27.9, 2.5, 30, 20), Tube(25, 25, 3, 20, 100, shape="arc", bend_radius_px=15)], (56, 56)
    )
    turned = Scene(
        scene.shape,
        scene.node_y_px,
        55 - scene.node_x_px,
        tuple(replace(v, x_px=v.y_px, y_px=55 - v.x_px) for v in scene.vessels),
    )
    optics = Optics(profile="slab", polarity="bright")
    rounding = 1e-9
    straight, rotated = (render_vessels(s, optics)[0] for s in (scene, turned))
    np.testing.assert_allclose(rotated, np.rot90(straight), rtol=0, atol=rounding)


def test_tiles_do_not_show():
    """A picture wider than one tile must be what one tile would give: the seam at 256 px would look like an edge."""
    scene = tube_scene([Tube(260.4, 40.2, 3.0, 500, 12)], (80, 512))
    shifted = tube_scene([Tube(160.4, 40.2, 3.0, 500, 12)], (80, 412))
    optics = Optics(profile="slab", polarity="bright", blur_px=1.5)
    whole, part = render_vessels(scene, optics)[0], render_vessels(shifted, optics)[0]
    cut = 1e-6  # of the blur beyond five standard deviations
    np.testing.assert_allclose(whole[:, 120:500], part[:, 20:400], rtol=0, atol=cut)


def test_noise_has_the_variance_and_correlation_it_says():
    """Uncertainties are judged against this noise: its variance must be known, not its look."""
    empty = Scene((400, 400), np.zeros(0), np.zeros(0), ())
    sampling = 4.0 / np.sqrt(2 * 160_000)  # four standard errors of a standard deviation
    for background, camera, sd in (
        (0.5, Camera(noise_sd=0.02), 0.02),
        (0.3, Camera(photons=900), np.sqrt(0.3 / 900)),
        (0.4, Camera(noise_sd=0.01, photons=1600), np.hypot(0.01, np.sqrt(0.4 / 1600))),
    ):
        optics = Optics(camera=camera, channels=(Channel(background),))
        picture = render(empty, optics, np.random.default_rng(3))
        assert picture.std() == pytest.approx(sd, rel=sampling)
        assert picture.mean() == pytest.approx(background, abs=4 * sd / 400)
    blurred = render(empty, Optics(camera=Camera(noise_sd=0.02, noise_blur_px=1.0)), np.random.default_rng(4)) - 0.6
    independent = 4 * np.pi  # pixels to one independent value of noise blurred by one pixel
    assert blurred.std() == pytest.approx(0.02, rel=sampling * np.sqrt(independent))
    next_pixel = np.mean(blurred[:, 1:] * blurred[:, :-1]) / blurred.var()
    assert next_pixel == pytest.approx(np.exp(-0.25), abs=4 * np.sqrt(independent / 160_000))


def test_radius_process_has_unit_variance_and_gaussian_covariance():
    """Truth about how radii vary along a vessel (standard deviation, correlation length) rests on it."""
    rng = np.random.default_rng(5)
    draws = np.array([process(161, 0.5, 10.0, rng) for _ in range(4000)])
    sampling = 4 * np.sqrt(2 / 4000)
    np.testing.assert_allclose((draws**2).mean(axis=0)[::40], 1.0, atol=sampling)
    for lag_px in (5.0, 10.0, 20.0):
        expected = np.exp(-0.5 * (lag_px / 10.0) ** 2)
        assert np.mean(draws[:, 40] * draws[:, 40 + int(2 * lag_px)]) == pytest.approx(expected, abs=sampling)


def test_backdrop_and_colour_do_what_they_say():
    """Slope, vignette, disc, field of view and the classes' contrast in each colour are part of the truth."""
    scene = replace(
        tube_scene([Tube(100, 60, 5, 150, vessel_class="arteriole")], (201, 201)),
        fov=Circle(100, 100, 95),
        disc=Circle(50, 130, 15),
    )
    optics = Optics(
        contrast=0.4,
        reference_radius_px=5.0,
        blur_px=0.0,
        channels=(Channel(0.7, {"arteriole": 0.25}), Channel(0.4), Channel(0.2, {"venule": 3.0})),
        backdrop=Backdrop(slope=0.2, vignette=0.3, disc=0.5),
    )
    picture = render(scene, optics, np.random.default_rng(0))
    assert picture.shape == (201, 201, 3)
    assert picture[5, 5].max() == 0.0
    centre = picture[100, 100]
    np.testing.assert_allclose(centre, [0.7, 0.4, 0.2], rtol=1e-6)
    far_from_disc = 1e-6
    assert picture[100, 180, 1] / 0.4 == pytest.approx(
        (1 + 0.2 * 80 / 201) * (1 - 0.3 * (80 / 95) ** 2), rel=far_from_disc
    )
    disc = (1 + 0.2 * -50 / 201) * (1 - 0.3 * (50**2 + 30**2) / 95**2) * 1.5
    assert picture[130, 50, 1] / 0.4 == pytest.approx(disc, rel=0.003)  # the disc's edge is soft: 2.5 px
    density = -np.log(picture[60, 100] / picture[45, 100] * (1 - 0.3 * 55**2 / 95**2) / (1 - 0.3 * 40**2 / 95**2))
    chord = 1 - 1 / (24 * 5.0**2) * 4  # mean chord over the axis pixel; the rest is the cell's finite width
    np.testing.assert_allclose(density, np.array([0.1, 0.4, 0.4]) * chord, rtol=0.01)


def test_digits_round_and_cut():
    """Grey levels beyond the file's scale would otherwise wrap round."""
    picture = np.array([[-0.2, 0.0, 0.5, 1.0, 1.7]])
    np.testing.assert_array_equal(digitise(picture, 8), np.array([[0, 0, 128, 255, 255]], np.uint8))
    np.testing.assert_array_equal(digitise(picture, 16), np.array([[0, 0, 32768, 65535, 65535]], np.uint16))


def test_reflex_brightens_the_axis_of_wide_vessels_only():
    """The stripe along the axis gives back 30 % of the lost light where asked, and is absent from thin vessels."""
    optics = Optics(contrast=0.4, reference_radius_px=5.0, blur_px=0.0, reflex=0.3, reflex_radius_px=3.0, supersample=9)
    plain = replace(optics, reflex=0.0)
    for radius, height in ((6.0, 0.3), (2.0, 0.0)):
        scene = tube_scene([Tube(30, 30, radius, 200)], (61, 61))
        with_reflex, without = (1 - render_vessels(scene, o)[0][30, 30] for o in (optics, plain))
        stripe = 0.5**2 / 3 / (2 * (0.25 * radius) ** 2)  # the axis pixel's mean lies this much below the crest
        assert 1 - with_reflex / without == pytest.approx(height, abs=1e-3 + height * stripe)


def test_demonstration_pictures_come_from_their_recipe():
    """Whoever draws the demonstration again must get the pictures that lie in the folder."""
    recipe = read_recipe(CONFIGS / "phantom-demo.toml")
    image = next(image for image in recipe.images if image.image_id == "aged-2-dilator")
    picture = draw(recipe, image, retone(build_bed(recipe, image), image.tones, recipe.pixel_size_um))
    with Image.open(CONFIGS / "demo" / "aged-2-dilator.png") as stored:
        difference = np.abs(picture.astype(int) - np.asarray(stored, int))
    one_level = 1  # another numerical library may round the other way
    assert difference.max() <= one_level


@pytest.mark.slow
def test_whole_demonstration_comes_from_its_recipe(tmp_path):
    """Every picture and every terminal of the demonstration, and the rows of its sheet."""
    names = make_phantoms(read_recipe(CONFIGS / "phantom-demo.toml"), tmp_path)
    one_level = 1
    for name in names:
        with Image.open(CONFIGS / "demo" / f"{name}.png") as stored, Image.open(tmp_path / f"{name}.png") as made:
            assert np.abs(np.asarray(made, int) - np.asarray(stored, int)).max() <= one_level
        terminals = (pd.read_csv(folder / f"{name}_terminals.csv") for folder in (CONFIGS / "demo", tmp_path))
        pd.testing.assert_frame_equal(*terminals)
    stored, made = (pd.read_csv(folder / "images.csv") for folder in (CONFIGS / "demo", tmp_path))
    pd.testing.assert_frame_equal(stored.loc[stored["image_id"] != "retina", made.columns], made)


def test_vessel_must_be_possible():
    """A scene that cannot be drawn is refused by name, not drawn wrongly."""
    axis = np.array([0.0, 10.0])
    with pytest.raises(ValueError, match="radius -1 px is not positive"):
        Scene((20, 20), axis, axis, (Vessel(axis, axis, np.array([-1.0, 2.0]), 0, 1, 0),))
    with pytest.raises(ValueError, match="smaller than 8"):
        Scene((4, 4), axis, axis, ())
