"""A person's corrections to the graph, applied in a fixed order and reported one by one."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from scipy.spatial import cKDTree

from vasohm.arrays import BoolArray
from vasohm.flags import Flag
from vasohm.network.graph import Crossings, NodeKind, VesselClass, VesselGraph, in_fixed_order, rebuild
from vasohm.network.joining import join_ends
from vasohm.network.paths import owner

PLACE_EDITS = ("crossing", "branching")
REACH_PX = 10.0  # an edit takes the nearest segment or node within this distance


@dataclass(frozen=True, slots=True)
class Edit:
    """One row of an edits file."""

    x_px: float
    y_px: float
    edit: Literal["drop", "keep", "class", "crossing", "branching"]
    value: str


def forced_places(edits: Sequence[Edit]) -> list[tuple[float, float, bool]]:
    """Return where a person said crossing (True) or branching (False)."""
    return [(e.x_px, e.y_px, e.edit == "crossing") for e in edits if e.edit in PLACE_EDITS]


def apply_edits(
    graph: VesselGraph, edits: Sequence[Edit], places_met: Sequence[bool]
) -> tuple[VesselGraph, tuple[str, ...], Flag]:
    """Drop segments and set classes where a person said so; a segment that is also to be kept is not dropped.

    Parameters
    ----------
    graph : the graph, crossings resolved.
    edits : all edits of the image, in the file's order.
    places_met : for each of `forced_places`, whether four arms met near it.

    Returns
    -------
    The graph in its fixed order, a note for every edit, and EDIT_MISSED where one was left out.
    """
    notes, flags = [], Flag.NONE
    drop, keep = np.zeros(graph.n_segments, dtype=bool), np.zeros(graph.n_segments, dtype=bool)
    vessel_class, probability = graph.vessel_class.copy(), graph.class_probability.copy()
    points = cKDTree(np.column_stack((graph.x_px, graph.y_px))) if graph.n_points else None
    of_point = owner(graph.offsets)
    met = iter(places_met)
    for edit in edits:
        fault = ""
        if edit.edit in PLACE_EDITS:
            fault = "" if next(met) else f"no place within {REACH_PX:g} px where four vessel arms meet"
        else:
            distance, nearest = points.query((edit.x_px, edit.y_px)) if points is not None else (np.inf, -1)
            if distance > REACH_PX:
                fault = f"nearest segment is {distance:.0f} px away, over {REACH_PX:g}"
            else:
                segment = of_point[nearest]
                drop[segment] |= edit.edit == "drop"
                keep[segment] |= edit.edit == "keep"
                if edit.edit == "class":
                    vessel_class[segment], probability[segment] = VesselClass[edit.value.upper()], 1.0
        flags |= Flag.EDIT_MISSED if fault else Flag.NONE
        notes.append(
            f"edit {edit.edit} at ({edit.x_px:g}, {edit.y_px:g}): {fault + '; left out' if fault else 'applied'}"
        )
    graph = replace(graph, vessel_class=vessel_class, class_probability=probability)
    return drop_segments(graph, drop & ~keep), tuple(notes), flags


def drop_segments(graph: VesselGraph, drop: BoolArray) -> VesselGraph:
    """Take segments out; a branching left with one segment becomes an end, one left with two joins them.

    Crossings of a dropped segment go with it.
    """
    if not drop.any():
        return graph
    nodes = np.column_stack((graph.node_a, graph.node_b))
    degree = np.bincount(nodes[~drop].ravel(), minlength=graph.n_nodes)
    kind = np.where((graph.node_kind == NodeKind.BRANCHING) & (degree == 1), NodeKind.END, graph.node_kind)
    new_index = np.cumsum(~drop) - 1
    c = graph.crossings
    stays = ~drop[c.segment_over] & ~drop[c.segment_under]
    over, under = new_index[c.segment_over[stays]], new_index[c.segment_under[stays]]
    rebuilt = rebuild(
        graph, ~drop, graph.node_x_px, graph.node_y_px, (kind.astype(np.int64), graph.node_a, graph.node_b)
    )
    partner = _passing_ends(rebuilt)
    if partner:
        rebuilt, new_of = join_ends(rebuilt, partner, set())
        over, under = new_of[over], new_of[under]
    crossings = Crossings(c.x_px[stays], c.y_px[stays], over, under, c.probability[stays], c.over_told[stays])
    return in_fixed_order(replace(rebuilt, crossings=crossings))


def _passing_ends(graph: VesselGraph) -> dict[int, int]:
    """Pair the ends of the two segments at each branching that has only two."""
    end_node = np.concatenate((graph.node_a, graph.node_b))
    degree = np.bincount(end_node, minlength=graph.n_nodes)
    passing = (graph.node_kind == NodeKind.BRANCHING) & (degree == 2)
    ends = np.nonzero(passing[end_node])[0]
    pairs = ends[np.argsort(end_node[ends], kind="stable")].reshape(-1, 2)
    both_ways = np.concatenate((pairs, pairs[:, ::-1]))
    return dict(zip(both_ways[:, 0].tolist(), both_ways[:, 1].tolist(), strict=True))
