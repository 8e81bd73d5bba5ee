"""Calibre equivalents against worked examples of the published formulas, on eyes made by hand."""

import numpy as np
import pytest
from beds import CommonErrors, Vessel, bed, published, straight
from shapes import shape_of

from vasohm.flags import Flag
from vasohm.image.disc import OpticDisc
from vasohm.network.calibre_equivalents import FORMULAS, KNUDTSON, PARR_HUBBARD, combine
from vasohm.network.morphometry import ShapeSettings

DISC = OpticDisc(256.0, 256.0, 40.0, "sheet", 1.0)  # its zone lies from 80 to 120 px off the centre
ARTERIOLES = np.array([120.0, 115.0, 110.0, 100.0, 95.0, 90.0])
VENULES = np.array([150.0, 140.0, 130.0, 125.0, 115.0, 110.0])
PIXEL_UM = 7.0
PARR_SETTINGS = ShapeSettings((0.5, 1.0), PARR_HUBBARD, (10.0,), "none")


def eye(arterioles, venules, *, more=(), classes=(), **known):
    """Vessels of these widths that run straight out of the disc, arterioles and venules by turns."""
    widths = [*arterioles, *venules]
    turn = 2 * np.pi * np.arange(len(widths)) / max(len(widths), 1) + 0.1
    nodes, vessels = [], []
    for k, width in enumerate(widths):
        way = np.array([np.cos(turn[k]), np.sin(turn[k])])
        nodes += [tuple(256 + 30 * way), tuple(256 + 200 * way)]
        vessels.append(straight(nodes, 2 * k, 2 * k + 1, width / 2, n=171))
    for vessel in more:
        nodes += [tuple(vessel.path_px[0]), tuple(vessel.path_px[-1])]
        vessels.append(Vessel(len(nodes) - 2, len(nodes) - 1, vessel.path_px, vessel.radius_um))
    kinds = [1] * len(arterioles) + [2] * len(venules) + list(classes)
    return bed(nodes, vessels, classes=kinds, pixel_size_um=PIXEL_UM, **known)


def found_in(measured, disc=DISC, **known):
    return shape_of(measured, disc=disc, **known).equivalents


@pytest.mark.parametrize("case", [0, 1, 5, 6, 7, 8])
def test_worked_examples_of_knudtson(case):
    """Knudtson et al. 2003: widest with narrowest, an odd one carried; 0.88 and 0.95 rounded as printed."""
    inputs, told = published("crae_crve_knudtson_2003")[case]
    formula = FORMULAS[KNUDTSON][0 if "CRAE" in inputs["kind"] else 1]
    widths = np.array(inputs["widths_um"], dtype=float)
    assert combine(widths, formula) == pytest.approx(told, rel=1e-9)
    assert combine(widths[::-1], formula) == pytest.approx(told, rel=1e-9)
    if case < 2:  # teeth: other factors give other numbers
        unrounded = published("crae_crve_knudtson_2003")[3 + case][1]
        assert combine(widths, formula) != pytest.approx(unrounded, rel=1e-3)


def test_worked_examples_of_parr_and_hubbard():
    """Parr and Spears 1974, Hubbard et al. 1999: constants in um², so that twice the widths is not twice the result."""
    for inputs, told in published("parr_hubbard"):
        kind = inputs["kind"]
        formula = FORMULAS[PARR_HUBBARD][0 if "CRAE" in kind or "arteriolar" in kind else 1]
        widths = inputs.get("widths_um", inputs.get("pair_um"))
        assert combine(np.array(widths, dtype=float), formula) == pytest.approx(told, rel=1e-9)
    assert np.isnan(combine(np.full(6, 1e-3), FORMULAS[PARR_HUBBARD][0]))  # no root: no trunk, and not 0 um


def test_an_eye_gives_the_worked_example():
    """Six widest of each class, thinner ones beside them, one that crosses the circle three times: once each."""
    (_, crae), (_, crve), (_, avr) = published("crae_crve_knudtson_2003")[:3]
    at = np.linspace(-1, 1, 201)
    snake = np.stack([256 + 100 + 12 * np.sin(3 * np.pi * at), 256 + 60 * at], axis=1)  # meets 100 px off five times
    thin = [Vessel(0, 0, snake, np.full(201, 20.0))]
    measured = eye([*ARTERIOLES, 50.0], [*VENULES, 60.0], more=thin, classes=[1])
    found = found_in(measured)
    assert found.artery_um == pytest.approx(crae, rel=1e-9)
    assert found.vein_um == pytest.approx(crve, rel=1e-9)
    assert found.ratio == pytest.approx(avr, rel=1e-9)
    assert (found.n_arterioles, found.n_venules, found.formula, found.flags) == (6, 6, KNUDTSON, Flag.NONE)
    every = found_in(measured, settings=PARR_SETTINGS)
    assert (every.n_arterioles, every.n_venules) == (8, 7)  # all vessels, the winding one once
    assert every.vein_um > combine(VENULES, FORMULAS[PARR_HUBBARD][1])  # it grows with their number


def test_only_the_zone_counts():
    """A vessel is as wide as it is between half a disc diameter and a whole one from the margin."""
    nodes = [(286.0, 256.0), (486.0, 256.0)]
    away = np.linspace(30, 230, 201)
    radius = np.where((away >= 80) & (away <= 120), 50.0, 10.0)
    tapers = Vessel(0, 1, straight(nodes, 0, 1, 1.0, n=201).path_px, radius)
    inner = straight([(256.0, 286.0), (256.0, 350.0)], 0, 1, 70.0)  # ends before the middle of the zone
    measured = eye([100.0] * 5, [], more=[tapers, inner], classes=[1, 1])
    found = found_in(measured)
    assert found.artery_um == pytest.approx(published("crae_crve_knudtson_2003")[5][1], rel=1e-9)
    wider = found_in(measured, settings=ShapeSettings((0.2, 0.6), KNUDTSON, (10.0,), "none"))
    assert wider.artery_um > found.artery_um  # now the inner one is met


def test_a_vessel_that_branches_on_the_circle_is_not_lost():
    """Children begin off their parent's lumen: between them and a node on the circle there are no points."""
    nodes = [(286.0, 256.0), (355.0, 256.0), (440.0, 220.0), (440.0, 292.0)]
    parent = straight(nodes, 0, 1, 50.0)
    children = [straight(nodes, 1, end, 35.0, n=101) for end in (2, 3)]
    cut = [Vessel(vessel.a, vessel.b, vessel.path_px[10:], vessel.radius_um[10:]) for vessel in children]
    measured = bed(nodes, [parent, *cut], classes=[1, 1, 1], pixel_size_um=PIXEL_UM)
    assert found_in(measured, settings=PARR_SETTINGS).n_arterioles == 2
    nodes[1] = (357.0, 256.0)  # beyond the circle: now it is the parent that meets it
    measured = bed(nodes, [straight(nodes, 0, 1, 50.0), *cut], classes=[1, 1, 1], pixel_size_um=PIXEL_UM)
    assert found_in(measured, settings=PARR_SETTINGS).n_arterioles == 1


def test_a_wide_vessel_of_no_class_is_told():
    """It may be one of the six; a narrow one changes nothing."""
    for width, told in ((105.0, Flag.ZONE_UNSAID), (20.0, Flag.NONE)):
        other = straight([(286.0, 286.0), (400.0, 400.0)], 0, 1, width / 2, n=171)
        assert found_in(eye(ARTERIOLES, VENULES, more=[other], classes=[0])).flags == told


def test_doubt_is_that_of_repeated_draws_and_the_pixel_size_cancels_in_the_ratio():
    draws = 400
    rng = np.random.default_rng(4)
    drawn = [
        combine(ARTERIOLES * np.exp(rng.normal(0, 0.03, 6)), FORMULAS[KNUDTSON][0])
        / combine(VENULES * np.exp(rng.normal(0, 0.03, 6)), FORMULAS[KNUDTSON][1])
        for _ in range(draws)
    ]
    found = found_in(eye(ARTERIOLES, VENULES, ln_se=0.03, errors=CommonErrors))
    assert found.ratio_se == pytest.approx(np.std(drawn), rel=4 / np.sqrt(2 * draws))
    shared = found_in(eye(ARTERIOLES, VENULES, pixel_size_rel_se=0.1, shared=np.full((12 * 171, 1), 0.05)))
    assert shared.artery_se_um == pytest.approx(np.hypot(0.1, 0.05) * shared.artery_um, rel=1e-6)
    assert shared.vein_se_um == pytest.approx(np.hypot(0.1, 0.05) * shared.vein_um, rel=1e-6)
    assert shared.ratio_se == pytest.approx(0.0, abs=1e-9)


def test_too_few_vessels_give_no_number():
    """An equivalent of five would be some 10 % smaller than that of six, and nobody would see why."""
    five = found_in(eye(ARTERIOLES[:5], VENULES))
    assert np.isnan([five.artery_um, five.artery_se_um, five.ratio, five.ratio_se]).all()
    assert np.isfinite(five.vein_um)
    assert (five.n_arterioles, five.n_venules) == (5, 6)
    assert five.flags == Flag.FEW_ARTERIOLES
    one_class = found_in(eye([], VENULES))
    assert one_class.flags == Flag.FEW_ARTERIOLES
    assert np.isfinite(found_in(eye(ARTERIOLES[:2], []), settings=PARR_SETTINGS).artery_um)
    nothing = found_in(bed([], []))
    assert nothing.flags == Flag.FEW_ARTERIOLES | Flag.FEW_VENULES


def test_a_disc_that_is_not_wholly_seen_is_refused_and_a_cut_zone_told():
    measured = eye(ARTERIOLES, VENULES)
    assert shape_of(measured).equivalents is None  # no disc, no zone
    corner = found_in(measured, OpticDisc(20.0, 256.0, 40.0, "sheet", 1.0))
    assert np.isnan([corner.artery_um, corner.vein_um]).all()
    assert corner.flags == Flag.DISC_OUTSIDE
    cut = found_in(measured, fov=np.arange(512)[None, :] + np.zeros((512, 1)) < 340)
    assert Flag.ZONE_CUT in cut.flags
    beyond = np.zeros((512, 512), dtype=bool)
    beyond[:, :250] = True
    assert found_in(measured, fov=beyond).flags == Flag.DISC_OUTSIDE
