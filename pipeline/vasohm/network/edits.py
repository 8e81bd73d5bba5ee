"""A person's corrections to the graph, applied in a fixed order and reported one by one."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from scipy.spatial import cKDTree

from vasohm.flags import Flag
from vasohm.network.graph import NodeKind, VesselClass, VesselGraph, in_fixed_order, rebuild
from vasohm.network.paths import owner

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
    return [(e.x_px, e.y_px, e.edit == "crossing") for e in edits if e.edit in ("crossing", "branching")]


def apply_edits(graph: VesselGraph, edits: Sequence[Edit]) -> tuple[VesselGraph, tuple[str, ...], Flag]:
    """Drop segments and set classes where a person said so.

    Returns
    -------
    The graph in its fixed order, a note for every edit, and EDIT_MISSED where one was left out.
    """
    notes, flags = [], Flag.NONE
    drop = np.zeros(graph.n_segments, dtype=bool)
    vessel_class, probability = graph.vessel_class.copy(), graph.class_probability.copy()
    points = cKDTree(np.column_stack((graph.x_px, graph.y_px))) if graph.n_points else None
    of_point = owner(graph.offsets)
    for edit in edits:
        place = f"edit {edit.edit} at ({edit.x_px:g}, {edit.y_px:g})"
        distance, nearest = points.query((edit.x_px, edit.y_px)) if points is not None else (np.inf, -1)
        if distance > REACH_PX:
            notes.append(f"{place}: nearest segment is {distance:.0f} px away, over {REACH_PX:g}; left out")
            flags |= Flag.EDIT_MISSED
            continue
        segment = of_point[nearest]
        drop[segment] |= edit.edit == "drop"
        if edit.edit == "class":
            vessel_class[segment], probability[segment] = VesselClass[edit.value.upper()], 1.0
        notes.append(f"{place}: applied")
    graph = replace(graph, vessel_class=vessel_class, class_probability=probability)
    return drop_segments(graph, drop), tuple(notes), flags


def drop_segments(graph: VesselGraph, drop: np.ndarray[tuple[int], np.dtype[np.bool_]]) -> VesselGraph:
    """Take segments out; a branching left with one segment becomes an end, and crossings with a dropped one go."""
    if not drop.any():
        return graph
    kept_degree = np.bincount(graph.node_a[~drop], minlength=graph.n_nodes) + np.bincount(
        graph.node_b[~drop], minlength=graph.n_nodes
    )
    kind = np.where((graph.node_kind == NodeKind.BRANCHING) & (kept_degree == 1), NodeKind.END, graph.node_kind)
    new_index = np.cumsum(~drop) - 1
    c = graph.crossings
    stays = ~drop[c.segment_over] & ~drop[c.segment_under]
    crossings = replace(
        c, x_px=c.x_px[stays], y_px=c.y_px[stays], segment_over=new_index[c.segment_over[stays]],
        segment_under=new_index[c.segment_under[stays]], probability=c.probability[stays],
    )  # fmt: skip
    rebuilt = rebuild(
        graph, ~drop, graph.node_x_px, graph.node_y_px, (kind.astype(np.int64), graph.node_a, graph.node_b)
    )
    return in_fixed_order(replace(rebuilt, crossings=crossings))
