"""A person's corrections change what they say and nothing else."""

import numpy as np
import pytest
from drawing import draw
from test_graph import graph_of, ladder, lengths

from vasohm.flags import Flag
from vasohm.network.edits import Edit, apply_edits
from vasohm.network.graph import NodeKind, VesselClass, VesselGraph, label_networks

MIDDLE_RUNG = (140.0, 130.0)  # on the drawn ladder


@pytest.fixture(scope="module")
def graph() -> VesselGraph:
    return graph_of(draw(ladder(), (261, 301)))


def test_no_edit_changes_nothing(graph):
    edited, notes, flags = apply_edits(graph, (), ())
    assert edited.n_segments == graph.n_segments
    np.testing.assert_array_equal(edited.x_px, graph.x_px)
    assert (notes, flags) == ((), Flag.NONE)


def test_dropping_a_rung_joins_the_rails(graph):
    """Wrong if a branching with two segments stayed: the rail would count as two vessels of two resistances."""
    edited, notes, flags = apply_edits(graph, (Edit(*MIDDLE_RUNG, "drop", ""),), ())
    assert edited.n_segments == graph.n_segments - 3  # the rung, and one of two segments of each rail
    assert (edited.node_kind == NodeKind.BRANCHING).sum() == 4
    loops = edited.n_segments - edited.n_nodes + int(label_networks(edited)[1].max()) + 1
    assert loops == 1
    rung = 141.4  # of the drawing: 20 px along, 140 px across
    assert lengths(edited).sum() == pytest.approx(lengths(graph).sum() - rung, abs=3.0)
    assert flags == Flag.NONE
    assert notes[0].endswith("applied")


def test_keep_wins_over_drop(graph):
    both = (Edit(*MIDDLE_RUNG, "drop", ""), Edit(*MIDDLE_RUNG, "keep", ""))
    assert apply_edits(graph, both, ())[0].n_segments == graph.n_segments


def test_a_class_is_set_where_it_was_said(graph):
    edited, _, _ = apply_edits(graph, (Edit(*MIDDLE_RUNG, "class", "venule"),), ())
    assert np.count_nonzero(edited.vessel_class == VesselClass.VENULE) == 1
    assert edited.class_probability[edited.vessel_class == VesselClass.VENULE].tolist() == [1.0]


def test_an_edit_far_from_anything_is_left_out_by_name(graph):
    edited, notes, flags = apply_edits(graph, (Edit(20.0, 130.0, "drop", ""),), ())
    assert edited.n_segments == graph.n_segments
    assert flags == Flag.EDIT_MISSED
    assert "(20, 130)" in notes[0]
    assert "left out" in notes[0]


def test_a_person_decides_what_is_a_crossing():
    """Two vessels that cross at a right angle: said to be a branching, they are four segments at one node."""
    lines = [
        (np.array([0.0, 200.0]), np.array([100.0, 100.0]), 4.0),
        (np.array([100.0, 100.0]), np.array([0.0, 200.0]), 3.0),
    ]
    picture = draw(lines[:1], (201, 201)) + draw(lines[1:], (201, 201), None)  # their light adds
    assert graph_of(picture).n_segments == 2
    assert graph_of(picture, forced=[(103.0, 98.0, False)]).n_segments == 4
