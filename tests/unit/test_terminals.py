"""Where blood enters and leaves: by file, by shape, and what is told when neither works."""

import numpy as np
import pytest
from beds import bed, straight

from vasohm.flags import Flag
from vasohm.flow.terminals import MARGIN_DD, NetworkSettings, TerminalPoint, place_terminals
from vasohm.image.disc import OpticDisc
from vasohm.network.graph import NodeKind, VesselClass

NODES = [(0.0, 100.0), (100.0, 100.0), (200.0, 50.0), (200.0, 150.0), (0.0, 300.0), (90.0, 300.0)]
AUTO = NetworkSettings("auto", 2.5)


def two_trees(classes=None, radii=(10.0, 8.0, 12.0, 5.0)):
    """A bifurcation, and a single vessel that narrows."""
    pairs = [(0, 1), (1, 2), (1, 3)]
    vessels = [straight(NODES, a, b, r) for (a, b), r in zip(pairs, radii, strict=False)]
    return bed(NODES, [*vessels, straight(NODES, 4, 5, np.linspace(4, 7, 31))], classes=classes)


def at(x, y, role="inlet", **more) -> TerminalPoint:
    given = {"pressure_mmhg": None, "flow_nl_min": None, "hematocrit": None} | more
    return TerminalPoint(x, y, role, **given)


def test_the_widest_end_of_a_tree_is_its_inlet():
    """Of node 3 (radius 12) in the bifurcation, and of the wide half of a single narrowing vessel."""
    found = place_terminals(two_trees(), [], AUTO)
    assert found.role.tolist() == [-1, 0, -1, 1, -1, 1]
    assert found.source == ("auto", "auto")
    assert found.drive_mmhg == 2.5
    assert found.flags == Flag.NONE
    assert found.network_flags.tolist() == [0, 0]


def test_blood_leaves_a_venular_tree_by_its_widest_end():
    venule, arteriole = VesselClass.VENULE, VesselClass.ARTERIOLE
    found = place_terminals(two_trees([venule, venule, arteriole, arteriole]), [], AUTO)
    assert found.role.tolist() == [1, 0, 1, -1, -1, 1]


def disc_at(x, y, radius=20.0) -> OpticDisc:
    return OpticDisc(x, y, radius, "sheet", 1.0)


@pytest.mark.parametrize(
    ("kind", "sign"), [(VesselClass.ARTERIOLE, 1), (VesselClass.VENULE, -1), (VesselClass.NONE, 1)]
)
def test_the_end_nearest_to_the_disc_is_the_root(kind, sign):
    """Not the widest one, node 3: an artery may be wider behind a narrowing, and a picture cuts wide branches."""
    found = place_terminals(two_trees([kind] * 4), [], AUTO, disc_at(-40.0, 100.0))
    assert found.role[:4].tolist() == [sign, 0, -sign, -sign]
    assert found.source == ("auto", "auto")


def test_trunks_that_leave_the_disc_apart_are_roots_together():
    """They are branches of one central vessel. A twig that ends at the disc is none of them."""
    reach = 20.0 * (1 + 2 * MARGIN_DD)
    band = disc_at(200.0 + reach - 0.1, 100.0)  # nodes 2 and 3 lie 50 px above and below, outside
    assert place_terminals(two_trees(), [], AUTO, band).role[:4].tolist() == [-1, 0, -1, 1]  # equally near: the wider
    wide = disc_at(220.0, 100.0, radius=50.0)  # both come out of it
    assert place_terminals(two_trees(), [], AUTO, wide).role[:4].tolist() == [-1, 0, 1, 1]
    twig = two_trees(radii=(10.0, 5.9, 12.0, 5.0))
    assert place_terminals(twig, [], AUTO, wide).role[:4].tolist() == [-1, 0, -1, 1]
    inside = disc_at(100.0, 100.0, radius=300.0)  # ends nowhere else: shape tells, as without a disc
    assert place_terminals(two_trees(), [], AUTO, inside).role.tolist() == [-1, 0, -1, 1, -1, 1]


def test_points_of_a_file_win_over_the_disc():
    found = place_terminals(two_trees(), [at(200, 50), at(0, 100, "outlet")], AUTO, disc_at(0.0, 100.0))
    assert found.role[:4].tolist() == [-1, 0, 1, 0]


def test_equally_wide_ends_are_settled_by_their_order():
    found = place_terminals(two_trees(radii=(8.0, 8.0, 8.0)), [], AUTO)
    assert found.role[:4].tolist() == [1, 0, -1, -1]


def test_a_network_with_loops_is_not_guessed_at():
    nodes = [*NODES[:4], (300.0, 100.0)]
    pairs = [(0, 1), (1, 2), (1, 3), (2, 3), (3, 4)]
    found = place_terminals(bed(nodes, [straight(nodes, a, b, 5.0) for a, b in pairs]), [], AUTO)
    assert found.source == ("none",)
    assert found.network_flags[0] == Flag.MESH | Flag.NO_TERMINALS
    assert not found.role.any()


def test_points_take_the_nearest_end_within_ten_pixels():
    points = [
        at(3, 104, pressure_mmhg=30.0, hematocrit=0.4),
        at(200, 60, "outlet", flow_nl_min=3.0),  # exactly 10 px away
        at(200, 160.1, "outlet"),  # 10.1 px away
        at(100, 100, "outlet"),  # a branching is no end
        at(4, 96),  # taken already
    ]
    found = place_terminals(two_trees(), points, AUTO)
    assert found.role.tolist() == [1, 0, -1, 0, 0, 0]
    assert found.pressure_mmhg[0] == 30.0
    assert found.hematocrit[0] == 0.4
    assert found.flow_nl_min[2] == 3.0
    assert np.isnan(found.pressure_mmhg[1:]).all()
    assert found.flags == Flag.TERMINAL_MISSED
    assert len(found.notes) == 3
    assert "outlet at x 200, y 160.1 px left out: no vessel end within 10 px (the nearest is 10.1 px" in found.notes[0]
    assert "x 4, y 96 px left out: the nearest vessel end has a terminal already" in found.notes[2]
    assert found.source == ("file", "none")
    assert found.network_flags.tolist() == [0, Flag.NO_TERMINALS]


def test_a_point_between_two_ends_takes_the_first():
    nodes = [(0.0, 0.0), (50.0, 0.0), (58.0, 0.0), (100.0, 0.0)]
    measured = bed(nodes, [straight(nodes, 2, 3, 5.0), straight(nodes, 0, 1, 5.0)])
    assert place_terminals(measured, [at(54, 0)], AUTO).role.tolist() == [0, 1, 0, 0]


@pytest.mark.parametrize(("role", "flag"), [("inlet", Flag.NO_OUTLET), ("outlet", Flag.NO_INLET)])
def test_what_a_network_lacks_is_told(role, flag):
    found = place_terminals(two_trees(), [at(0, 100, role)], AUTO)
    assert found.network_flags.tolist() == [flag, Flag.NO_TERMINALS]


def test_a_pressure_rules_out_a_flow_at_the_same_place():
    found = place_terminals(two_trees(), [at(0, 100, pressure_mmhg=30.0, flow_nl_min=5.0)], AUTO)
    assert np.isnan(found.flow_nl_min[0])


@pytest.mark.parametrize("how", ["file", "none"])
def test_shape_is_not_asked_where_the_study_says_so(how):
    settings = NetworkSettings(how, 1.0)
    assert place_terminals(two_trees(), [], settings).source == ("none", "none")
    used = place_terminals(two_trees(), [at(0, 100)], settings).role.any()
    assert used == (how == "file")


def test_estimates_are_marked_only_where_nothing_is_known():
    """A tree shows its ends by its shape; a mesh, and ends that a terminals file leaves out, are left to estimation."""
    estimate = NetworkSettings("estimate", 1.0)
    nodes = [*NODES[:4], (300.0, 100.0)]
    pairs = [(0, 1), (1, 2), (1, 3), (2, 3), (3, 4)]
    mesh = place_terminals(bed(nodes, [straight(nodes, a, b, 5.0) for a, b in pairs]), [], estimate)
    assert mesh.source == ("estimated",)
    assert mesh.network_flags.tolist() == [Flag.TERMINALS_ESTIMATED]
    assert not mesh.role.any()
    by_shape = place_terminals(two_trees(), [], estimate)
    assert by_shape.source == ("auto", "auto")
    assert by_shape.network_flags.tolist() == [0, 0]
    some = [at(0, 100), at(200, 50, "outlet"), at(0, 300), at(90, 300, "outlet")]
    told = place_terminals(two_trees(), some, estimate)
    assert told.source == ("estimated", "file")
    assert told.role.tolist() == [1, 0, -1, 0, 1, -1]


def test_a_closed_ring_has_no_terminals():
    around = np.linspace(0, 2 * np.pi, 41)
    path = 100 + 30 * np.stack([np.cos(around), np.sin(around)], axis=1)
    vessel = straight([(0, 0), (1, 1)], 0, 0, 5.0)
    ring = bed([(130.0, 100.0)], [type(vessel)(0, 0, path, np.full(41, 5.0))], kinds=[NodeKind.LOOP])
    found = place_terminals(ring, [at(130, 100)], AUTO)
    assert found.source == ("none",)
    assert "the image has none" in found.notes[0]


def test_an_image_without_vessels():
    found = place_terminals(bed([], []), [at(5, 5)], AUTO)
    assert found.source == ()
    assert found.flags == Flag.TERMINAL_MISSED
