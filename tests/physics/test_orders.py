"""Orders of trees against counts that follow from their shape, a slow twin, and resistances in series and parallel."""

import numpy as np
import pytest
from beds import bed, published, straight, y_bed
from shapes import shape_of

from vasohm.flags import Flag
from vasohm.network.graph import VesselClass
from vasohm.network.orders import SCHEMES

STRAHLER, DIAMETER = (SCHEMES.index(name) for name in ("strahler", "diameter"))


def tree(parents, radii, lengths=None):
    """A tree by the parent of each segment (-1 for the root's); node k + 1 ends segment k, segments side by side."""
    lengths = np.full(len(parents), 50.0) if lengths is None else lengths
    place = [(0.0, 0.0)]
    for k, parent in enumerate(parents):
        x, y = place[parent + 1]
        place.append((x + lengths[k] * np.cos(0.01 * k), y + lengths[k] * np.sin(0.01 * k)))
    vessels = [straight(place, parent + 1, k + 1, radii[k], n=5) for k, parent in enumerate(parents)]
    return bed(place, vessels)


def rooted(measured, **known):
    """Its shape, with an inlet at the first node and outlets at all other ends."""
    graph = measured.graph
    degree = np.bincount(np.concatenate([graph.node_a, graph.node_b]), minlength=graph.n_nodes)
    role = np.where(degree == 1, -1, 0)
    role[0] = 1
    return shape_of(measured, role=role, fov=np.ones((8, 8), dtype=bool), **known).orders


def full(generations, radius_ratio=0.8):
    """Full binary tree: parents and radii."""
    parents, radii, level = [-1], [20.0], [0]
    for generation in range(1, generations + 1):
        below = []
        for parent in level:
            for _ in (0, 1):
                below.append(len(parents))
                parents.append(parent)
                radii.append(20.0 * radius_ratio**generation)
        level = below
    return parents, radii


@pytest.mark.parametrize(("case", "generations"), [(0, 2), (1, 3), (2, 5)])
def test_full_binary_trees(case, generations):
    """Horton 1945, Strahler 1957: 2^(N - k + 1) segments of order k, bifurcation ratio 2; orders by diameter agree."""
    _, told = published("strahler_counts")[case]
    parents, radii = full(generations)
    found = rooted(tree(parents, radii))
    for scheme in (STRAHLER, DIAMETER):
        rows = found.scheme == scheme
        assert found.n_segments[rows].tolist() == told["order_counts_from_1"]
        assert found.n_elements[rows].tolist() == told["order_counts_from_1"]
        assert found.order[rows].tolist() == list(range(1, told["root_order"] + 1))
    assert found.highest.tolist() == [told["root_order"]] * 2
    np.testing.assert_allclose(found.bifurcation_ratio, told["bifurcation_ratio"])
    np.testing.assert_allclose(found.radius_ratio, 1 / 0.8)
    np.testing.assert_allclose(found.length_ratio, 1.0)
    np.testing.assert_allclose(found.bifurcation_ratio_se, 0.0, atol=1e-7)


def test_a_trunk_with_five_side_twigs():
    """Six tips: the trunk's five segments of order 2 are one element; the twigs and the trunk's end have order 1."""
    inputs, told = published("strahler_counts")[3]
    parents, radii = [-1], [10.0]
    for _ in range(inputs["k"]):
        trunk = max(k for k, r in enumerate(radii) if r == 10.0)
        parents += [trunk, trunk]
        radii += [4.0, 10.0]
    radii[-1] = 4.0
    found = rooted(tree(parents, radii))
    rows = found.scheme == STRAHLER
    assert found.n_elements[rows].tolist() == [told["order1_branches"], told["order2_branches"]]
    assert found.n_segments[rows].tolist() == [6, 5]
    assert found.highest[STRAHLER] == told["root_order"]
    assert found.length_um[rows].tolist() == pytest.approx([50.0, 250.0])
    assert np.isnan(found.length_sd_um[rows][1])  # one element has no spread


def slow_strahler(parents, k):
    below = [slow_strahler(parents, child) for child, parent in enumerate(parents) if parent == k]
    if not below:
        return 1
    return max(below) + (below.count(max(below)) > 1)


def test_strahler_orders_of_random_trees_by_recursion():
    """Branchings of two to four, numbers in no order. The rule written out one segment at a time."""
    rng = np.random.default_rng(2)
    for _ in range(5):
        parents = [-1]
        while len(parents) < 60:
            free = [k for k in range(len(parents)) if k not in parents]
            parents += [int(rng.choice(free))] * int(rng.integers(2, 5))
        found = rooted(tree(parents, rng.uniform(3, 20, len(parents))))
        assert found.strahler.tolist() == [slow_strahler(parents, k) for k in range(len(parents))]


def test_diameters_decide_where_equal_orders_meet():
    """Jiang, Kassab and Fung 1994: two vessels of one order make the next only where the calibre grows far enough.

    Tips of 2 and 4 um of radius; one pair meets in a vessel of 3 um, another in one of 8 um. By Strahler both are of
    order 2, with a limit of ((3 + 1.155) + (5.5 - 3.536)) / 2 = 3.06 um: the narrow one falls back to its tips' order.
    """
    parents = [-1, 0, 0, 1, 1, 2, 2]
    radii = [12.0, 3.0, 8.0, 2.0, 4.0, 2.0, 4.0]
    found = rooted(tree(parents, radii))
    assert found.strahler.tolist() == [3, 2, 2, 1, 1, 1, 1]
    assert found.diameter[1] == 1
    assert found.diameter[2] == 2
    assert found.ratio_flags.tolist() == [0, 0]
    first = np.flatnonzero((found.scheme == DIAMETER) & (found.order == 1))[0]
    assert found.n_segments[first] == 5
    assert found.n_elements[first] == 4  # the narrow vessel and the wider of its tips are one


def test_equal_calibres_are_one_order():
    parents, _ = full(4)
    found = rooted(tree(parents, [5.0] * len(parents)))
    assert set(found.diameter) == {1}
    assert np.isnan(found.bifurcation_ratio[DIAMETER])  # one order tells no ratio
    assert found.bifurcation_ratio[STRAHLER] == pytest.approx(2.0)


def test_resistance_of_orders_adds_up_to_that_of_the_tree():
    """Generations of a symmetric tree are its orders: R / R_root = sum of q^k with all ends at one pressure."""
    for inputs, ratio in published("symmetric_tree_resistance"):
        generations = inputs["generations_after_root"]
        if generations > 5:
            continue  # as many more segments say nothing new
        parents, radii = full(generations, 2 ** (-1 / inputs["junction_exponent"]))
        generation = np.rint(np.log(np.array(radii) / 20.0) / np.log(radii[-1] / 20.0) * generations)
        resistance = inputs["length_ratio"] ** generation * (np.array(radii) / 20.0) ** -4.0
        found = rooted(tree(parents, radii), resistance=resistance)
        rows = found.scheme == STRAHLER
        assert found.resistance_parallel[rows].sum() == pytest.approx(ratio, rel=1e-9)


def test_segments_in_series_are_one_resistor():
    """A trunk of three parts with two twigs a part: series is their sum, parallel that of the twigs side by side."""
    parents = [-1, 0, 0, 2, 2]
    resistance = np.array([1.0, 30.0, 2.0, 20.0, 60.0])
    found = rooted(tree(parents, [10.0, 3.0, 9.0, 4.0, 3.0]), resistance=resistance)
    rows = found.scheme == STRAHLER
    assert found.resistance_series[rows].tolist() == pytest.approx([110 / 3, 3.0])
    assert found.resistance_parallel[rows].tolist() == pytest.approx([1 / (1 / 30 + 1 / 20 + 1 / 60), 3.0])


def test_doubt_of_an_orders_resistance_is_that_of_repeated_draws():
    """Segments that err by 3 to 20 % each, on their own or together (JCGM 100:2008, eq. 10 and its note 1)."""
    draws, rng = 2000, np.random.default_rng(9)
    parents, radii = [-1, 0, 0, 2, 2], [10.0, 3.0, 9.0, 4.0, 3.0]
    resistance = np.array([1.0, 30.0, 2.0, 20.0, 60.0])
    random_se, shared_se = np.array([0.2, 0.05, 0.1, 0.1, 0.03]), np.array([0.1, 0.1, 0.2, 0.15, 0.05])
    found = rooted(tree(parents, radii), resistance=resistance, doubt=(random_se, shared_se))
    rows = found.scheme == STRAHLER
    for se, error in ((random_se, rng.normal(0, 1, (5, draws))), (shared_se, rng.normal(0, 1, draws))):
        drawn = resistance[:, None] * (1 + 1e-3 * se[:, None] * error)  # so small that first order is exact
        twigs, trunk = drawn[[1, 3, 4]], drawn[0] + drawn[2]
        series, parallel = (
            [np.log(twigs.mean(axis=0)), np.log(trunk)],
            [-np.log((1 / twigs).sum(axis=0)), np.log(trunk)],
        )
        kind = "random" if se is random_se else "shared"
        for name, values in (("series", series), ("parallel", parallel)):
            stated = getattr(found, f"ln_{name}_{kind}_se")[rows]
            np.testing.assert_allclose(np.std(values, axis=1) * 1e3, stated, rtol=4 / np.sqrt(2 * draws))


def test_a_vein_is_ordered_from_its_outlet():
    parents, radii = full(3)
    measured = tree(parents, radii)
    role = np.where(np.bincount(measured.graph.node_a, minlength=16) == 0, 1, 0)
    role[0] = -1
    found = shape_of(measured, role=role, fov=np.ones((8, 8), dtype=bool)).orders
    assert found.highest.tolist() == [4, 4]


def test_a_mesh_and_a_rootless_tree_are_left_out_by_name():
    """A number for an order that does not exist would pass for a measurement."""
    nodes = [(0.0, 0.0), (50.0, 0.0), (100.0, 50.0), (100.0, -50.0), (150.0, 0.0), (300.0, 0.0), (350.0, 0.0)]
    pairs = [(0, 1), (1, 2), (1, 3), (2, 4), (3, 4), (5, 6)]
    mesh = shape_of(bed(nodes, [straight(nodes, a, b, 5.0) for a, b in pairs]), fov=np.ones((8, 8), dtype=bool)).orders
    assert mesh.strahler.tolist() == [0, 0, 0, 0, 0, 1]
    assert mesh.network.tolist() == [1, 1]
    assert mesh.ratio_flags.tolist() == [Flag.ORDER_LOOPS, Flag.ORDER_LOOPS, 0, 0]
    assert np.isnan(mesh.bifurcation_ratio[:2]).all()
    parents, radii = full(2)
    measured = tree(parents, radii)
    role = np.zeros(8, dtype=np.int64)
    role[[0, 4, 5, 6]] = 1, 1, -1, -1
    two = shape_of(measured, role=role, fov=np.ones((8, 8), dtype=bool)).orders
    assert two.ratio_flags.tolist() == [Flag.ORDER_ROOTLESS] * 2
    assert not two.order.size
    alone = shape_of(measured, fov=np.ones((8, 8), dtype=bool)).orders  # nothing known: the widest end is the root
    assert alone.highest.tolist() == [3, 3]


@pytest.mark.parametrize(("kind", "sign"), [(VesselClass.ARTERIOLE, 1), (VesselClass.VENULE, -1)])
def test_two_trunks_that_end_in_one_place_are_not_ordered_upside_down(kind, sign):
    """Blood of arterioles flows from wide to thin vessels: a distal end as root would make twigs of the trunks."""
    role = sign * np.array([-1, 0, 1, 1])
    one = shape_of(y_bed(classes=[kind] * 3), role=role, fov=np.ones((8, 8), dtype=bool)).orders
    assert one.ratio_flags.tolist() == [Flag.ORDER_ROOTLESS] * 2
    other = shape_of(y_bed(classes=[kind] * 3), role=-role, fov=np.ones((8, 8), dtype=bool)).orders
    assert other.highest.tolist() == [2, 2]


def test_an_image_without_vessels_has_no_orders():
    found = shape_of(bed([], []), fov=np.ones((8, 8), dtype=bool)).orders
    assert found.order.shape == found.ratio_flags.shape == found.strahler.shape == (0,)
