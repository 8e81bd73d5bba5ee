"""Shape against geometry: branchings drawn to published rules, curves and fractals with closed forms."""

import numpy as np
import pytest
from beds import CommonErrors, Vessel, bed, published, straight

from vasohm.flags import Flag
from vasohm.network.graph import NodeKind
from vasohm.network.morphometry import box_dimension, describe_shape, junction_exponent

FORMULA = 1e-9
NOTHING = np.zeros((64, 64), dtype=bool)
ALL = np.ones((64, 64), dtype=bool)


def shape_of(measured):
    return describe_shape(measured, NOTHING, ALL)


def fork(radii, angles_deg, *, turn_deg=0.0, length=100.0, pixel_size_um=1.0, order=(0, 1, 2)):
    """A bifurcation: parent to the node, children leaving at these angles to its direction, on either side."""
    turn = np.radians(turn_deg)
    heading = [np.pi, np.radians(angles_deg[0]), -np.radians(angles_deg[1])]
    centre = np.array([200.0, 200.0])
    ends = [centre + length * np.array([np.cos(h + turn), np.sin(h + turn)]) for h in heading]
    nodes = [tuple(centre), *map(tuple, ends)]
    vessels = [straight(nodes, 0, 1 + k, radii[k] * pixel_size_um, n=101) for k in order]
    return bed(nodes, vessels, pixel_size_um=pixel_size_um)


@pytest.mark.parametrize("case", range(8))
def test_branchings_drawn_to_the_rules_of_murray_and_zamir(case):
    """Murray 1926, Zamir 1976: angles of least volume or surface with r0^3 = r1^3 + r2^3, any orientation."""
    inputs, angles = published("optimal_branching_angles")[case]
    children = np.array([inputs["r1"], inputs["r2"]]) * 6.0
    parent = (children ** inputs["m"]).sum() ** (1 / inputs["m"])
    for turn_deg in (0.0, 33.0, 170.0):
        measured = fork((parent, *children), (angles["theta1_deg"], angles["theta2_deg"]), turn_deg=turn_deg)
        found = shape_of(measured).branchings
        assert found.angle_1_deg[0] == pytest.approx(angles["theta1_deg"], rel=FORMULA)
        assert found.angle_2_deg[0] == pytest.approx(angles["theta2_deg"], rel=FORMULA)
        assert found.angle_1_deg[0] + found.angle_2_deg[0] == pytest.approx(angles["total_deg"], rel=FORMULA)
        assert found.junction_exponent[0] == pytest.approx(inputs["m"], rel=FORMULA)
        assert found.parent[0] == 0
        assert found.flags[0] == 0


def test_the_order_of_segments_does_not_name_the_parent():
    found = shape_of(fork((10.0, 8.0, 7.0), (30.0, 50.0), order=(2, 0, 1))).branchings
    assert (found.parent[0], found.child_1[0], found.child_2[0]) == (1, 2, 0)
    assert (found.radius_parent_um[0], found.radius_child_1_um[0], found.radius_child_2_um[0]) == (10.0, 8.0, 7.0)
    assert found.angle_2_deg[0] == pytest.approx(50.0)
    assert found.node[0] == 0


def test_area_ratio_of_asymmetric_branchings():
    """Murray 1926: beta = (1 + a) / (1 + a^1.5)^(2/3) with a = (r2 / r1)^2."""
    for inputs, ratio in published("murray_area_ratio_asymmetric"):
        narrow = 8.0 * np.sqrt(inputs["asymmetry_(r2/r1)^2"])
        parent = (8.0**3 + narrow**3) ** (1 / 3)
        found = shape_of(fork((parent, 8.0, narrow), (30.0, 40.0))).branchings
        assert found.area_ratio[0] == pytest.approx(ratio, rel=FORMULA)
        assert found.asymmetry[0] == pytest.approx(inputs["asymmetry_(r2/r1)^2"], rel=FORMULA)


def test_junction_exponents_by_bisection_and_none_where_there_is_none():
    rows = published("junction_exponent_solver")
    radii = np.array([[inputs["r0"], inputs["r1"], inputs["r2"]] for inputs, _ in rows]).T
    np.testing.assert_allclose(junction_exponent(*radii), [value for _, value in rows], rtol=FORMULA)
    none = junction_exponent(np.array([8.0, 8.0, 10.0]), np.array([8.0, 9.0, 5.0]), np.array([5.0, 5.0, 0.0]))
    assert np.isnan(none).all()  # never a clipped number
    steep = junction_exponent(np.array([1.0]), np.array([1 - 1e-6]), np.array([0.5]))[0]
    assert (1 - 1e-6) ** steep + 0.5**steep == pytest.approx(1.0, rel=FORMULA)


def test_a_short_branch_is_read_where_it_is_and_told():
    nodes = [(200.0, 200.0), (100.0, 200.0), (300.0, 230.0), (203.0, 195.0)]
    vessels = [straight(nodes, 0, 1, 10.0), straight(nodes, 0, 2, 8.0), straight(nodes, 0, 3, 5.0)]
    found = shape_of(bed(nodes, vessels)).branchings
    assert found.flags[0] == Flag.SHORT
    assert found.radius_child_2_um[0] == 5.0
    assert found.angle_2_deg[0] == pytest.approx(np.degrees(np.arctan2(5, 3)))


def test_only_three_segments_make_a_bifurcation():
    """A node of four, and a node with a self-loop, are none."""
    nodes = [(200.0, 200.0), (100.0, 200.0), (300.0, 200.0), (200.0, 100.0), (200.0, 300.0)]
    cross = bed(nodes, [straight(nodes, 0, k, 5.0) for k in range(1, 5)])
    assert shape_of(cross).branchings.node.size == 0
    circle = 200.0 + 10 * np.stack([np.cos(np.linspace(0, 6.28, 41)), np.sin(np.linspace(0, 6.28, 41))], axis=1)
    loop = bed(nodes[:2], [straight(nodes, 0, 1, 5.0), Vessel(0, 0, circle, np.full(41, 3.0))])
    assert shape_of(loop).branchings.node.size == 0


def test_tortuosity_of_arcs():
    """Arc over chord: a semicircle pi/2, a quarter circle pi/(2 sqrt 2), a straight line 1."""
    turns = [np.pi, np.pi / 2]
    vessels, nodes = [], []
    for k, turn in enumerate(turns):
        at = np.linspace(0, turn, 2001)
        path = 100.0 * np.stack([np.cos(at), np.sin(at)], axis=1) + [500.0 * k, 0.0]
        nodes += [tuple(path[0]), tuple(path[-1])]
        vessels.append(Vessel(2 * k, 2 * k + 1, path, np.full(2001, 5.0)))
    nodes += [(0.0, 900.0), (100.0, 930.0)]
    vessels.append(straight(nodes, 4, 5, 5.0))
    found = shape_of(bed(nodes, vessels))
    polygon = (np.pi / 2000) ** 2 / 24  # a polygon of 2000 sides is shorter than its arc by this part
    np.testing.assert_allclose(found.tortuosity, [np.pi / 2, np.pi / np.sqrt(8), 1.0], rtol=2 * polygon)
    length = np.array([np.pi, np.pi / 2, np.hypot(100, 30) / 100])
    assert found.tortuosity_mean == pytest.approx(np.average(found.tortuosity, weights=length), rel=2 * polygon)


def test_a_closed_ring_has_no_tortuosity_and_one_loop():
    at = np.linspace(0, 2 * np.pi, 401)
    ring = Vessel(0, 0, 100 + 50 * np.stack([np.cos(at), np.sin(at)], axis=1), np.full(401, 4.0))
    found = shape_of(bed([(150.0, 100.0)], [ring], kinds=[NodeKind.LOOP]))
    assert np.isnan(found.tortuosity[0])
    assert np.isnan(found.tortuosity_mean)
    assert found.network_loops.tolist() == [1]


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
    assert found.radius_mean_um_image == pytest.approx(6.5)
    assert found.length_um == pytest.approx(300.0)
    assert found.fov_area_um2 == 64 * 64 * 0.25


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


def carpet(depth: int) -> np.ndarray:
    pattern = np.array([[1, 1, 1], [1, 0, 1], [1, 1, 1]], dtype=bool)
    result = np.ones((1, 1), dtype=bool)
    for _ in range(depth):
        result = np.kron(result, pattern)
    return result


def test_box_dimension_of_known_sets():
    """A Sierpinski carpet has ln 8 / ln 3; boxes of powers of two do not fit one of powers of three: within 0.03."""
    expected = {inputs["set"]: value for inputs, value in published("fractal_dimension")}
    square = np.ones((512, 512), dtype=bool)
    line = np.zeros((512, 512), dtype=bool)
    line[100] = True
    assert box_dimension(square, square) == pytest.approx(expected["filled square"], abs=1e-12)
    assert box_dimension(line, square) == pytest.approx(expected["straight line"], abs=1e-12)
    sierpinski = carpet(6)
    found = box_dimension(sierpinski, np.ones_like(sierpinski))
    assert found == pytest.approx(expected["Sierpinski carpet"], abs=0.03)


def test_only_the_field_of_view_counts():
    mask, fov = np.zeros((300, 300), dtype=bool), np.zeros((300, 300), dtype=bool)
    mask[:, ::2] = True
    fov[20:276, 20:276] = True
    found = describe_shape(bed([], [], pixel_size_um=2.0), mask, fov)
    assert found.fov_area_um2 == 256 * 256 * 4.0
    assert found.vessel_area_um2 == 256 * 128 * 4.0
    assert found.box_dimension == pytest.approx(2.0, abs=1e-12)  # every box holds a stripe


def test_an_image_without_vessels():
    found = describe_shape(bed([], []), NOTHING, ALL)
    assert np.isnan(found.box_dimension)
    assert np.isnan(found.radius_mean_um_image)
    assert found.length_um == 0.0
    assert found.branchings.node.shape == found.network_length_um.shape == (0,)
