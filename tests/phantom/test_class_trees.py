"""Arteriolar and venular trees that touch in a picture: parted where they touch, and nowhere else."""

from dataclasses import replace

import numpy as np
import pytest
from beds import CommonErrors, bed, flow_of, straight, y_bed

from vasohm.flags import Flag
from vasohm.flow.hydraulics import tell_unsaid
from vasohm.network.class_trees import TreeSettings, part_trees
from vasohm.network.graph import NodeKind, VesselClass, label_networks
from vasohm.network.radius import MeasuredGraph

A, V, C, NONE = VesselClass.ARTERIOLE, VesselClass.VENULE, VesselClass.CAPILLARY, VesselClass.NONE
BY_CLASS = TreeSettings(by_class=True)
CROSS = [(100.0, 100.0), (20.0, 100.0), (180.0, 100.0), (100.0, 20.0), (100.0, 180.0)]
MIDDLE_GAP_UM = 12.0  # twice the radius of the vessel whose lumen hides the middle of the other


def meeting(classes, probability=1.0, nodes=CROSS, pairs=((0, 1), (0, 2), (0, 3), (0, 4)), **known) -> MeasuredGraph:
    """Straight vessels of 6 um radius between nodes, 1 um a pixel."""
    made = bed(nodes, [straight(nodes, a, b, 6.0, n=81) for a, b in pairs], classes=classes, **known)
    given = np.where(np.array(classes) == NONE, np.nan, probability)
    return replace(made, graph=replace(made.graph, class_probability=given))


def classes_of_networks(measured: MeasuredGraph) -> list[set[int]]:
    _, network = label_networks(measured.graph)
    return [set(measured.graph.vessel_class[network == k].tolist()) for k in range(network.max() + 1)]


def test_vessels_that_cross_at_one_node_come_apart():
    """Left joined, blood would pass from an artery into a vein without a capillary: R of both were nonsense."""
    parted = part_trees(meeting([A, A, V, V], probability=0.9), BY_CLASS)
    graph = parted.graph
    assert classes_of_networks(parted) == [{V}, {A}]
    assert graph.n_segments == 2
    assert (graph.node_kind == NodeKind.END).all()
    np.testing.assert_allclose(parted.length_um, 160.0, rtol=1e-9)
    np.testing.assert_allclose(parted.radius_um, 6.0, rtol=1e-12)
    found = graph.crossings
    assert (found.x_px.tolist(), found.y_px.tolist()) == ([100.0], [100.0])
    assert {int(found.segment_over[0]), int(found.segment_under[0])} == {0, 1}
    assert found.probability[0] == pytest.approx(0.81)


def test_vessels_that_touch_side_by_side_do_not_cross():
    """Arms that do not alternate around the node."""
    parted = part_trees(meeting([A, V, A, V]), BY_CLASS)
    assert classes_of_networks(parted) == [{A}, {V}]
    assert len(parted.graph.crossings.x_px) == 0


def test_a_branching_of_one_class_stays_and_the_other_ends():
    parted = part_trees(meeting([A, A, A, V]), BY_CLASS)
    kinds = parted.graph.node_kind
    assert sorted(kinds.tolist()) == [NodeKind.END] * 5 + [NodeKind.BRANCHING]
    assert classes_of_networks(parted) == [{A}, {V}]
    assert len(parted.graph.crossings.x_px) == 0


def test_the_way_under_the_other_vessel_is_interpolated_and_told():
    """The lumen of the wide vessel had cut both arms of the other: the passage is whole again, its middle inferred."""
    nodes = CROSS
    arms = [straight(nodes, 0, 1, 12.0, n=81), straight(nodes, 0, 2, 12.0, n=81)]
    cut = [straight(nodes, 0, end, radius, n=81) for end, radius in ((3, 4.0), (4, 6.0))]
    cut = [replace(one, path_px=one.path_px[12:], radius_um=one.radius_um[12:]) for one in cut]
    measured = bed(nodes, [*arms, *cut], classes=[A, A, V, V], ln_se=0.1, errors=CommonErrors)
    parted = part_trees(measured, BY_CLASS)
    vein = int(np.flatnonzero(parted.graph.vessel_class == V)[0])
    points = slice(parted.graph.offsets[vein], parted.graph.offsets[vein + 1])
    assert parted.length_um[vein] == pytest.approx(160.0, rel=1e-6)
    inferred = (parted.point_flags[points] & Flag.INFERRED) != 0
    assert inferred.sum() == 2 * MIDDLE_GAP_UM - 1
    middle = parted.radius_um[points][inferred]
    assert (np.diff(middle) > 0).all()
    assert middle[0] > 4.0
    assert middle[-1] < 6.0
    # Both halves' mean ln r err by 0.1 each, apart from each other: that of the whole by 0.1 / sqrt(2).
    share = np.full(parted.graph.n_points, 0.0)
    share[points] = 1 / (points.stop - points.start)
    assert np.sqrt(parted.covariance.segment_variance(share)[vein]) == pytest.approx(0.1 / np.sqrt(2), rel=1e-9)


def test_a_vessel_that_shares_a_short_bridge_is_led_across():
    """Two nodes with a bridge between, which belongs to one of the vessels: the other must not fall apart."""
    nodes = [(100.0, 100.0), (110.0, 104.0), (20.0, 100.0), (190.0, 108.0), (84.0, 30.0), (128.0, 180.0)]
    pairs = ((2, 0), (0, 1), (1, 3), (4, 0), (1, 5))
    for of_bridge in (A, NONE):
        parted = part_trees(meeting([A, of_bridge, A, V, V], nodes=nodes, pairs=pairs), BY_CLASS)
        assert classes_of_networks(parted) == [{V}, {A}]
        assert parted.graph.n_segments == 2
        assert len(parted.graph.crossings.x_px) == 1
    far = [(100.0, 100.0), (180.0, 104.0), (20.0, 100.0), (260.0, 108.0), (84.0, 30.0), (198.0, 180.0)]
    parted = part_trees(meeting([A, A, A, V, V], nodes=far, pairs=pairs), BY_CLASS)
    assert parted.graph.n_segments == 3  # a long common stretch is no crossing: the venule's ways are two


def test_vessels_of_no_class_go_with_the_tree_they_hang_on():
    """A twig of unknown class on a tree of one class is that tree's; so is one that goes on through a crossing."""
    twig = [(20.0, 100.0), (100.0, 100.0), (180.0, 60.0), (180.0, 140.0), (250.0, 60.0), (250.0, 20.0)]
    pairs = ((0, 1), (1, 2), (1, 3), (2, 4), (2, 5))
    whole = meeting([A, NONE, A, NONE, NONE], nodes=twig, pairs=pairs)
    lone = meeting([V, V, V, V], nodes=[(x, y + 200) for x, y in CROSS])
    assert part_trees(whole, BY_CLASS) is whole  # one class alone: nothing to part
    assert classes_of_networks(part_trees(lone, BY_CLASS)) == [{V}]
    through = part_trees(meeting([A, NONE, V, V]), BY_CLASS)  # the unknown arm goes straight on from the arteriole
    assert classes_of_networks(through) == [{V}, {A}]
    assert through.graph.n_segments == 2


def test_a_tree_between_two_classes_stays_with_the_better_supported():
    """Of the unknown vessel's two ends one goes straight on, the other meets the middle of a vein at a right angle."""
    nodes = [(20.0, 100.0), (100.0, 100.0), (180.0, 100.0), (180.0, 20.0), (180.0, 180.0), (100.0, 180.0)]
    pairs = ((0, 1), (1, 2), (2, 3), (2, 4), (1, 5))
    parted = part_trees(meeting([A, NONE, V, V, A], nodes=nodes, pairs=pairs), BY_CLASS)
    graph = parted.graph
    assert classes_of_networks(parted) == [{V}, {A, NONE}]
    ends = {(float(x), float(y)) for x, y in zip(graph.node_x_px, graph.node_y_px, strict=True)}
    assert (180.0, 100.0) in ends  # where the unknown one ends


def test_capillaries_join_both_classes():
    """Where a capillary is seen, blood does pass."""
    bedded = meeting([A, V, C, C])
    assert len(classes_of_networks(part_trees(bedded, BY_CLASS))) == 1


def test_rings_stay_rings():
    """Two arterioles that both close on the node of a vein: no way to join them without losing all their nodes."""
    nodes = [(100.0, 100.0), (100.0, 200.0), (20.0, 100.0), (20.0, 200.0)]
    pairs = ((0, 1), (0, 1), (0, 2), (1, 3))
    made = meeting([A, A, V, V], nodes=nodes, pairs=pairs)
    parted = part_trees(made, BY_CLASS)
    own = parted.graph.vessel_class == A
    assert own.sum() == 1
    ring = int(np.flatnonzero(own)[0])
    assert parted.graph.node_a[ring] == parted.graph.node_b[ring]
    assert parted.graph.node_kind[parted.graph.node_a[ring]] == NodeKind.LOOP


def test_ids_follow_from_the_places_and_other_pictures_stay_as_they_are():
    """Equal input gives equal bytes; what no tree touches is the same object."""
    made = meeting([V, V, A, A])
    assert part_trees(made, TreeSettings(by_class=False)) is made
    one, other = part_trees(made, BY_CLASS), part_trees(made, BY_CLASS)
    for name in ("node_x_px", "node_y_px", "node_a", "node_b", "x_px", "y_px", "vessel_class"):
        np.testing.assert_array_equal(getattr(one.graph, name), getattr(other.graph, name))
    rows = np.lexsort((one.graph.node_x_px, one.graph.node_y_px))
    assert rows.tolist() == list(range(one.graph.n_nodes))
    apart = [*CROSS, (300.0, 300.0), (400.0, 300.0)]
    separate = bed(apart, [straight(apart, 0, 1, 6.0), straight(apart, 5, 6, 6.0)], classes=[A, V])
    assert part_trees(separate, BY_CLASS) is separate


def test_vessels_of_no_class_that_hold_much_of_a_resistance_are_told():
    """An artery's trunk of no class, joined to a venular tree, must not pass in silence as part of its resistance."""
    told = []
    for classes in ([V, V, V], [NONE, V, V], [NONE, NONE, NONE]):
        measured = y_bed(classes=classes)
        told.append(bool(tell_unsaid(measured, flow_of(measured)).network_flags[0] & Flag.CLASS_UNSAID))
    assert told == [False, True, True]
    alone = meeting([NONE], pairs=((0, 1),), nodes=CROSS[:2])
    assert not tell_unsaid(alone, flow_of(alone)).network_flags[0] & Flag.CLASS_UNSAID
