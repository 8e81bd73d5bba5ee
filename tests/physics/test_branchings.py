"""Bifurcations drawn to published rules; their stated doubt against repeated draws."""

import numpy as np
import pytest
from beds import CommonErrors, Vessel, bed, published, straight
from scipy import ndimage

from vasohm.flags import Flag
from vasohm.network.branchings import find_branchings, junction_exponent, optimal_angles_deg

FORMULA = 1e-9
DRAWS = 300
SPREAD = 4 / np.sqrt(2 * DRAWS)  # four standard errors of a standard deviation


def fork(radii, angles_deg, *, turn_deg=0.0, length=100.0, order=(0, 1, 2), **known):
    """A bifurcation: parent to the node, children leaving at these angles to its direction, on either side."""
    turn = np.radians(turn_deg)
    heading = [np.pi, np.radians(angles_deg[0]), -np.radians(angles_deg[1])]
    centre = np.array([200.0, 200.0])
    ends = [centre + length * np.array([np.cos(h + turn), np.sin(h + turn)]) for h in heading]
    nodes = [tuple(centre), *map(tuple, ends)]
    return bed(nodes, [straight(nodes, 0, 1 + k, radii[k], n=101) for k in order], **known)


def branchings_of(measured, flow=None):
    return find_branchings(measured, np.full(measured.graph.n_segments, np.nan) if flow is None else flow)


@pytest.mark.parametrize("case", range(8))
def test_branchings_drawn_to_the_rules_of_murray_and_zamir(case):
    """Murray 1926, Zamir 1976: angles of least volume or surface with r0^3 = r1^3 + r2^3, any orientation."""
    inputs, angles = published("optimal_branching_angles")[case]
    children = np.array([inputs["r1"], inputs["r2"]]) * 6.0
    parent = (children ** inputs["m"]).sum() ** (1 / inputs["m"])
    told = [angles["theta1_deg"], angles["theta2_deg"]]
    by_volume = inputs["principle"].startswith("minimum volume")
    for turn_deg in (0.0, 33.0, 170.0):
        found = branchings_of(fork((parent, *children), told, turn_deg=turn_deg))
        np.testing.assert_allclose(found.angle_deg[0], [*told, angles["total_deg"]], rtol=FORMULA)
        assert found.junction_exponent[0] == pytest.approx(inputs["m"], rel=FORMULA)
        assert found.murray_ratio[0] == pytest.approx(1.0, rel=FORMULA)
        best = found.volume_angle_deg if by_volume else found.surface_angle_deg
        np.testing.assert_allclose(best[0], told, rtol=FORMULA)
        balanced = (found.volume_imbalance, found.surface_imbalance)
        assert balanced[0 if by_volume else 1][0] == pytest.approx(0.0, abs=FORMULA)
        assert balanced[1 if by_volume else 0][0] > 0.1  # the other rule asks for other angles
        assert found.parent[0] == 0
        assert found.flags[0] == 0


def test_area_ratios_of_murray_branchings():
    """Murray 1926: (1 + a) / (1 + a^1.5)^(2/3) with a = (r2 / r1)^2; symmetric ones for exponents of 2 to 4."""
    for inputs, ratio in published("murray_area_ratio_asymmetric"):
        narrow = 8.0 * np.sqrt(inputs["asymmetry_(r2/r1)^2"])
        found = branchings_of(fork(((8.0**3 + narrow**3) ** (1 / 3), 8.0, narrow), (30.0, 40.0)))
        assert found.area_ratio[0] == pytest.approx(ratio, rel=FORMULA)
        assert found.asymmetry[0] == pytest.approx(inputs["asymmetry_(r2/r1)^2"], rel=FORMULA)
    for inputs, told in published("murray_symmetric_bifurcation"):
        child = 10.0 * told["r1_over_r0"]
        found = branchings_of(fork((10.0, child, child), (30.0, 40.0)))
        assert found.area_ratio[0] == pytest.approx(told["area_ratio"], rel=FORMULA)
        assert found.junction_exponent[0] == pytest.approx(inputs["junction_exponent"], rel=FORMULA)


def test_branching_coefficients_of_knudtson_are_exponents():
    """Knudtson et al. 2003: (r1² + r2²) / r0² of 1.28 and 1.11 are, for equal children, m = 2 ln 2 / ln(2 / 1.28)."""
    for coefficient in (1.28, 1.11):
        child = 10.0 * np.sqrt(coefficient / 2)
        found = branchings_of(fork((10.0, child, child), (30.0, 30.0)))
        assert found.area_ratio[0] == pytest.approx(coefficient, rel=FORMULA)
        assert found.junction_exponent[0] == pytest.approx(2 * np.log(2) / np.log(2 / coefficient), rel=FORMULA)


def test_junction_exponents_by_bisection_and_none_where_there_is_none():
    rows = published("junction_exponent_solver")
    radii = np.array([[inputs["r0"], inputs["r1"], inputs["r2"]] for inputs, _ in rows]).T
    np.testing.assert_allclose(junction_exponent(*radii), [value for _, value in rows], rtol=FORMULA)
    none = junction_exponent(np.array([8.0, 8.0, 10.0]), np.array([8.0, 9.0, 5.0]), np.array([5.0, 5.0, 0.0]))
    assert np.isnan(none).all()  # never a clipped number
    steep = junction_exponent(np.array([1.0]), np.array([1 - 1e-6]), np.array([0.5]))[0]
    assert (1 - 1e-6) ** steep + 0.5**steep == pytest.approx(1.0, rel=FORMULA)


def test_no_angle_is_best_where_a_child_is_wider_than_both_others_together():
    assert np.isnan(optimal_angles_deg(np.array([[3.0, 10.0, 2.0]]), 2.0)).all()


def test_flow_tells_the_parent_where_it_is_known():
    """An artery's parent brings the blood even where a child is wider; a vein's parent takes it; else the widest."""
    measured = fork((8.0, 10.0, 5.0), (20.0, 60.0))  # all three segments begin at the node
    arterial = branchings_of(measured, flow=np.array([-3.0, 2.0, 1.0]))
    venous = branchings_of(measured, flow=np.array([3.0, -2.0, -1.0]))
    for found in (arterial, venous):
        assert (found.parent[0], found.child_1[0], found.child_2[0]) == (0, 1, 2)
        assert found.by_flow[0]
        np.testing.assert_allclose(found.angle_deg[0], [20.0, 60.0, 80.0])
        assert np.isnan(found.junction_exponent[0])  # a child is wider
        assert found.murray_ratio[0] == pytest.approx((1000 + 125) / 512)
    for unknown in ([np.nan] * 3, [-3.0, 3.0, 0.0]):
        by_width = branchings_of(measured, flow=np.array(unknown))
        assert by_width.parent[0] == 1
        assert not by_width.by_flow[0]


def test_the_order_of_segments_does_not_name_the_parent():
    found = branchings_of(fork((10.0, 8.0, 7.0), (30.0, 50.0), order=(2, 0, 1)))
    assert (found.parent[0], found.child_1[0], found.child_2[0]) == (1, 2, 0)
    assert found.radius_um[0].tolist() == [10.0, 8.0, 7.0]
    assert found.angle_deg[0, 1] == pytest.approx(50.0)
    assert found.node[0] == 0


def test_a_short_branch_is_read_where_it_is_and_told():
    nodes = [(200.0, 200.0), (100.0, 200.0), (300.0, 230.0), (203.0, 195.0)]
    vessels = [straight(nodes, 0, 1, 10.0), straight(nodes, 0, 2, 8.0), straight(nodes, 0, 3, 5.0)]
    found = branchings_of(bed(nodes, vessels))
    assert found.flags[0] == Flag.SHORT
    assert found.radius_um[0, 2] == 5.0
    assert found.angle_deg[0, 1] == pytest.approx(np.degrees(np.arctan2(5, 3)))
    assert np.isfinite(found.angle_se_deg[0, 0])
    assert np.isnan(found.angle_se_deg[0, 1])  # nothing tells how good it is


def test_only_three_segments_make_a_bifurcation():
    """A node of four, and a node with a self-loop, are none."""
    nodes = [(200.0, 200.0), (100.0, 200.0), (300.0, 200.0), (200.0, 100.0), (200.0, 300.0)]
    cross = bed(nodes, [straight(nodes, 0, k, 5.0) for k in range(1, 5)])
    assert branchings_of(cross).node.size == 0
    circle = 200.0 + 10 * np.stack([np.cos(np.linspace(0, 6.28, 41)), np.sin(np.linspace(0, 6.28, 41))], axis=1)
    loop = bed(nodes[:2], [straight(nodes, 0, 1, 5.0), Vessel(0, 0, circle, np.full(41, 3.0))])
    assert branchings_of(loop).node.size == 0


def test_stated_doubt_of_calibres_is_that_of_repeated_draws():
    """Radii that err by 2 % each: ratios and exponents scatter as stated (JCGM 100:2008, eq. 10, to first order)."""
    rng = np.random.default_rng(5)
    names = ("area_ratio", "asymmetry", "murray_ratio", "junction_exponent")
    true, drawn = np.array([10.0, 8.3, 6.6]), []
    for _ in range(DRAWS):
        radii = true * np.exp(rng.normal(0, 0.02, 3))
        found = branchings_of(fork(tuple(radii), (30.0, 40.0)))
        drawn.append([*found.radius_um[0], *(getattr(found, name)[0] for name in names)])
    stated = branchings_of(fork(tuple(true), (30.0, 40.0), ln_se=0.02, errors=CommonErrors))
    expected = [*stated.radius_se_um[0], *(getattr(stated, f"{name}_se")[0] for name in names)]
    np.testing.assert_allclose(np.std(drawn, axis=0), expected, rtol=SPREAD)
    with pytest.raises(AssertionError):  # teeth: doubt of the parent left out
        np.testing.assert_allclose(np.std(drawn, axis=0)[3], expected[3] / np.sqrt(2), rtol=SPREAD)


def test_stated_doubt_of_optimal_angles_is_that_of_repeated_draws():
    """Radii that err by 1 % each (JCGM 100:2008, eq. 10); no doubt of an angle that does not exist."""
    rng = np.random.default_rng(11)
    true = np.array([10.0, 8.0, 7.6])
    radii = true * np.exp(rng.normal(0, 0.01, (2000, 3)))
    stated = branchings_of(fork(tuple(true), (30.0, 40.0), ln_se=0.01, errors=CommonErrors))
    for power, angle_se in ((2.0, stated.volume_angle_se_deg), (1.0, stated.surface_angle_se_deg)):
        drawn = np.std(optimal_angles_deg(radii, power), axis=0)
        np.testing.assert_allclose(angle_se[0], drawn, rtol=4 / np.sqrt(2 * 2000))
    none = branchings_of(fork((10.0, 9.9, 2.0), (30.0, 40.0), ln_se=0.01, errors=CommonErrors))
    np.testing.assert_array_equal(np.isnan(none.volume_angle_se_deg), np.isnan(none.volume_angle_deg))


def test_what_all_vessels_share_cancels_in_ratios():
    """A wrong pixel size moves every radius and no ratio."""
    found = branchings_of(fork((10.0, 8.0, 6.5), (30.0, 40.0), pixel_size_rel_se=0.1, shared=np.full((303, 1), 0.05)))
    np.testing.assert_allclose(found.radius_se_um[0], np.hypot(0.1, 0.05) * found.radius_um[0])
    for name in ("area_ratio_se", "asymmetry_se", "murray_ratio_se", "junction_exponent_se"):
        assert getattr(found, name)[0] == pytest.approx(0.0, abs=1e-9)
    for angles_se in (found.volume_angle_se_deg, found.surface_angle_se_deg):
        np.testing.assert_allclose(angles_se, 0.0, atol=1e-6)


def test_stated_doubt_of_angles_holds_the_scatter_of_centrelines():
    """Centrelines that err by half a pixel, smoothly over some 6 px, scatter angles within a factor of two of it."""
    rng = np.random.default_rng(6)
    nodes = [(200.0, 200.0), (100.0, 200.0), (280.0, 260.0), (290.0, 150.0)]
    ends = np.array(nodes[1:]) - 200.0
    normals = np.stack([-ends[:, 1], ends[:, 0]], axis=1) / np.hypot(*ends.T)[:, None]
    drawn, stated = [], []
    for _ in range(100):
        vessels = []
        for k in range(3):
            vessel = straight(nodes, 0, 1 + k, (5.0, 4.0, 3.5)[k], n=101)
            wobble = ndimage.gaussian_filter1d(rng.normal(0, 1, 101), 2.5)
            path = vessel.path_px + (0.5 * wobble / wobble.std())[:, None] * normals[k]
            vessels.append(Vessel(0, 1 + k, path, vessel.radius_um))
        found = branchings_of(bed(nodes, vessels))
        drawn.append(found.angle_deg[0])
        stated.append(found.angle_se_deg[0])
    typical = np.sqrt(np.mean(np.square(stated), axis=0))
    ratio = np.std(drawn, axis=0) / typical
    assert np.all((ratio > 0.5) & (ratio < 2.0)), ratio
