"""Arterioles and venules told by colour, on rendered vessels of known class."""

import io
import subprocess
import sys
from dataclasses import replace
from itertools import product
from pathlib import Path

import numpy as np
import pytest
from beds import bed, straight
from PIL import Image

from vasohm.flags import Flag
from vasohm.image.calibrate import ScaledImage
from vasohm.image.prepare import PrepareSettings, prepare
from vasohm.image.read import RawImage
from vasohm.network.class_evidence import LEAST_GAIN, Circumstances, weigh_colours
from vasohm.network.class_inference import Links, infer, links_of
from vasohm.network.classes import ClassSettings, classify_vessels
from vasohm.network.colours import measure_colours
from vasohm.network.graph import VesselClass
from vasohm.study.appraise import appraise
from vasohm_synthetic.backdrop import digitise
from vasohm_synthetic.make import make_phantoms
from vasohm_synthetic.optics import Backdrop, Camera, Channel, Optics
from vasohm_synthetic.recipe import read_recipe
from vasohm_synthetic.render import render
from vasohm_synthetic.scene import Scene, Vessel

A, V, NONE = VesselClass.ARTERIOLE, VesselClass.VENULE, VesselClass.NONE
RECIPE = Path(__file__).parents[2] / "configs" / "phantom-fundus.toml"
COLOUR = ClassSettings("colour", 0.8)
WIDE, HIGH = 260, 480
RADII_PX = (2.0, 3.0, 4.0, 5.0, 6.0, 2.5, 3.5, 4.5, 5.5, 3.0, 4.0, 2.0, 6.0, 5.0, 2.5, 3.5)
KINDS = ("arteriole", "venule")
LEAST_RIGHT, LEAST_SAID = 0.92, 0.80  # of the length; what a fundus-like phantom at its usual colours is held to
NOISELESS_RATIO = 0.03  # of a ratio of densities: linear sampling and light's curvature, both shared by the colours


def optics(red=(0.2, 0.5), green=(0.9, 1.1), **changed) -> Optics:
    """Fundus-like colours: the gains of arterioles and of venules in red and green."""
    gains = [dict(zip(KINDS, pair, strict=True)) for pair in (red, green, (0.7, 0.8))]
    channels = tuple(Channel(b, g) for b, g in zip((0.72, 0.38, 0.16), gains, strict=True))
    camera = Camera(photons=4000, noise_sd=0.006)
    usual = {"contrast": 0.45, "reference_radius_px": 5.5, "channels": channels, "camera": camera, "supersample": 2}
    return Optics(**{**usual, "backdrop": Backdrop(vignette=0.2, texture_sd=0.02, texture_px=16.0), **changed})


def scene(wider=1.0):
    """Sixteen straight vessels side by side, by turns arterioles and venules of all radii; and their measured graph."""
    y = np.linspace(24, HIGH - 24, len(RADII_PX))
    nodes = [(x, at) for at in y for x in (20.0, WIDE - 21.0)]
    vessels = [straight(nodes, 2 * k, 2 * k + 1, wider * r, n=220) for k, r in enumerate(RADII_PX)]
    drawn = tuple(
        Vessel(*v.path_px.T.copy(), v.radius_um.copy(), v.a, v.b, 0, KINDS[(k // 2 + k) % 2])
        for k, v in enumerate(vessels)
    )
    truth = np.array([A if v.vessel_class == "arteriole" else V for v in drawn])
    x, y = np.array(nodes).T
    made = Scene(shape=(HIGH, WIDE), node_x_px=x, node_y_px=y, vessels=drawn)
    measured = bed(nodes, vessels)
    return made, replace(measured, graph=replace(measured.graph, shape=(HIGH, WIDE))), truth


def picture(drawn, seen, seed=1):
    return digitise(render(drawn, seen, np.random.default_rng(seed)), 8)


def told(measured, pixels, polarity="dark", settings=COLOUR):
    """Classes that the colours of a picture give, and the note."""
    raw = RawImage(pixels, 255.0, "", None, "", (), Flag.NONE)
    channel = "green" if pixels.ndim == 3 else 0
    prepared = prepare(
        ScaledImage(raw, 1.0, 0.01, "sheet", Flag.NONE), PrepareSettings(channel, polarity, 1.0, (1.0, 8.0)), None
    )
    return classify_vessels(measured, raw, prepared, None, settings)


def test_ratio_of_densities_is_that_of_the_absorption_whatever_the_width():
    """Density is absorption times path (Beer and Lambert): a ratio that follows the width paints thin vessels alike."""
    drawn, measured, truth = scene()
    clean = optics(camera=Camera(), backdrop=Backdrop())
    pixels = digitise(render(drawn, clean, np.random.default_rng(0)), 16)
    density = measure_colours(measured, pixels, np.ones((HIGH, WIDE), dtype=bool), 65535.0).density
    expected = np.where(truth == A, 0.2 / 0.9, 0.5 / 1.1)
    np.testing.assert_allclose(density[:, 0] / density[:, 1], expected, rtol=NOISELESS_RATIO)


@pytest.mark.parametrize(("quality", "wider"), [(None, 1.0), (85, 1.6)])
def test_the_vessel_that_absorbs_less_red_is_the_arteriole(quality, wider):
    """Oxygenated blood absorbs less red (Prahl's tabulated extinction, 1999).

    Also through a JPEG's coarse colours, in which the thinnest vessels show none of their own.
    """
    drawn, measured, truth = scene(wider)
    pixels = picture(drawn, optics())
    if quality:
        file = io.BytesIO()
        Image.fromarray(pixels).save(file, "JPEG", quality=quality, subsampling="4:2:0")
        pixels = np.asarray(Image.open(file))
    classed, (note,) = told(measured, pixels)
    said = classed.graph.vessel_class != NONE
    assert np.mean(said) >= LEAST_SAID, note
    assert np.mean(classed.graph.vessel_class[said] == truth[said]) >= LEAST_RIGHT
    assert (classed.graph.class_probability[said] >= COLOUR.probability).all()


@pytest.mark.parametrize("seed", range(4))
def test_vessels_of_one_colour_get_no_class(seed):
    """Two halves of one group would be a guess told as a finding."""
    drawn, measured, _ = scene()
    classed, (note,) = told(measured, picture(drawn, optics(red=(0.3, 0.3), green=(1.0, 1.0)), seed))
    assert (classed.graph.vessel_class == NONE).all()
    assert "not those of two groups" in note


@pytest.mark.parametrize(
    ("change", "polarity", "why"),
    [
        (lambda rgb: rgb[..., 1].copy(), "dark", "grey"),
        (lambda rgb: np.repeat(rgb[..., 1:2], 3, axis=2), "dark", "equal"),
        (lambda rgb: 255 - rgb, "bright", "bright"),
    ],
)
def test_pictures_without_the_colour_of_blood_get_no_class(change, polarity, why):
    drawn, measured, _ = scene()
    classed, (note,) = told(measured, change(picture(drawn, optics())), polarity)
    assert (classed.graph.vessel_class == NONE).all()
    assert why in note


def test_nothing_is_told_where_nothing_is_asked():
    drawn, measured, _ = scene()
    classed, notes = told(measured, picture(drawn, optics()), settings=ClassSettings("none", 0.8))
    assert classed is measured
    assert notes == ()


def test_a_persons_word_stays_and_speaks_for_its_neighbours():
    """Vessel 0 goes on in a piece of it that shows no colour of its own: it follows what a person says of vessel 0."""
    drawn, measured, truth = scene()
    y = measured.graph.node_y_px
    nodes = [*zip(measured.graph.node_x_px, y, strict=True), (WIDE - 15.0, y[1])]
    vessels = [straight(nodes, 2 * k, 2 * k + 1, r, n=220) for k, r in enumerate(RADII_PX)]
    vessels.append(straight(nodes, 1, len(nodes) - 1, 0.5, n=6))
    other = V if truth[0] == A else A
    longer = bed(nodes, vessels, classes=[other] + [NONE] * len(RADII_PX))
    sure = np.full(len(vessels), np.nan)
    sure[0] = 1.0
    longer = replace(longer, graph=replace(longer.graph, shape=(HIGH, WIDE), class_probability=sure))
    classed, _ = told(longer, picture(drawn, optics()))
    assert classed.graph.vessel_class[0] == other
    assert classed.graph.class_probability[0] == 1.0
    assert classed.graph.vessel_class[-1] == other


@pytest.mark.parametrize("kind", [A, V])
def test_true_words_do_not_silence_the_colours(kind):
    """The likelihood of two groups must hold the colours of told segments too: the word is no substitute for them."""
    drawn, measured, truth = scene()
    kinds = np.where((truth == kind) & (np.arange(len(truth)) < len(truth) // 2), kind, NONE)
    sure = np.where(kinds != NONE, 1.0, np.nan)
    said = replace(measured, graph=replace(measured.graph, vessel_class=kinds, class_probability=sure))
    classed, (note,) = told(said, picture(drawn, optics(), 0))
    assert (classed.graph.vessel_class == truth).all(), note


def test_words_make_no_two_groups_of_one_colour():
    """Four venules told: whether the colours part, only the colours may tell."""
    drawn, measured, truth = scene()
    first = np.flatnonzero(truth == V)[:4]
    own = np.zeros(len(truth), dtype=np.int64)
    own[first] = 1
    pixels = picture(drawn, optics(red=(0.3, 0.3), green=(1.0, 1.0)))
    colours = measure_colours(measured, pixels, np.ones((HIGH, WIDE), dtype=bool), 255.0)
    radius = np.array(RADII_PX)
    place = np.column_stack((np.full(len(radius), WIDE / 2), np.linspace(24, HIGH - 24, len(radius))))
    links = links_of(measured.graph, np.zeros(measured.graph.n_nodes, dtype=bool))
    evidence = weigh_colours(colours, Circumstances(radius, place, None), links, own)
    gain = float(evidence.fault.rsplit("gain ", 1)[1].rstrip(")"))
    assert gain < LEAST_GAIN
    assert not evidence.log_odds.any()


def test_neighbours_on_a_tree_are_weighed_exactly():
    """Against the sum over all 2^6 ways to class six vertices: wrong odds would be told as probabilities."""
    a, b = np.array([0, 1, 1, 3, 3]), np.array([1, 2, 3, 4, 5])
    same = np.array([0.9, 0.2, 0.97, 0.6, 0.85])
    odds = np.array([1.5, 0.0, -2.0, 0.3])
    ways = np.array(list(product((0, 1), repeat=6)))
    prior = 0.5 * np.prod(np.where(ways[:, a] == ways[:, b], same, 1 - same), axis=1)
    weight = prior * np.exp(ways[:, : len(odds)] @ odds)
    probability, log_mean = infer(Links(a, b, same, 6), odds)
    settled = 1e-3  # of log odds, where messages are taken as settled
    np.testing.assert_allclose(probability, weight @ ways[:, : len(odds)] / weight.sum(), atol=settled)
    assert log_mean == pytest.approx(np.log(weight.sum()), abs=settled)


@pytest.mark.slow
def test_classes_of_a_fundus(tmp_path):
    """The whole way on a fundus-like phantom at its usual colours, against exact truth."""
    text = RECIPE.read_text(encoding="utf-8")
    recipe = tmp_path / "fundus.toml"
    recipe.write_text(text[: text.rindex("[[image]]")].replace("= 41", "= 611", 1), encoding="utf-8")
    make_phantoms(read_recipe(recipe), tmp_path / "made")
    command = [sys.executable, "-m", "vasohm", "measure", tmp_path / "made" / "study.toml", "--out", tmp_path / "out"]
    subprocess.run([*command, "--quiet"], check=True)
    found = appraise(tmp_path / "out", tmp_path / "made").images.iloc[0]
    assert found["class_said_fraction"] >= LEAST_SAID
    assert found["class_right_fraction"] >= LEAST_RIGHT
