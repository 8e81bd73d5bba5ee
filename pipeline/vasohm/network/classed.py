"""Shape by group: all vessels, those of each class, and of each class of calibre."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.along import arc_shares
from vasohm.network.densities import Filling, describe_filling
from vasohm.network.graph import VesselClass, VesselGraph
from vasohm.network.groups import sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph
from vasohm.network.tortuosity import Curves
from vasohm.units import UM_PER_MM


@dataclass(frozen=True, slots=True)
class GroupShape:
    """Sums and means over some segments; NaN where none of them tells."""

    n_segments: int
    length_um: float  # of centrelines, up to their nodes, inside the field of view
    area_um2: float  # twice the radius, integrated over that length
    radius_mean_um: float  # means are weighted by length
    tortuosity_mean: float
    curvature_per_mm: float  # absolute curvature a length, in radians
    squared_curvature_per_mm2: float
    inflections_per_mm: float


@dataclass(frozen=True, slots=True)
class ClassShape:
    """One group: of a class of vessels (NONE: of all) and between two radii (None: of all, or open)."""

    vessel_class: VesselClass
    from_um: float | None
    to_um: float | None
    shape: GroupShape
    filling: Filling | None  # not of classes of calibre


@dataclass(frozen=True, slots=True, eq=False)
class SegmentShapes:
    """What the groups are made of; one entry a segment."""

    radius_mean_um: FloatArray
    tortuosity: FloatArray
    curves: Curves
    seen_length_um: FloatArray  # see `seen_lengths`


def seen_lengths(measured: MeasuredGraph, fov: BoolArray) -> FloatArray:
    """Length (n_segments,) of each centreline inside the field of view, with the stub to its node in a parent's lumen.

    That is the length of a skeleton, which reaches its branchings; without the stubs a dense mesh would seem sparser
    the wider its vessels are.
    """
    graph = measured.graph
    inside = _at(fov, graph.x_px, graph.y_px)
    of = owner(graph.offsets)
    length = sum_by(of, arc_shares(measured) * inside, graph.n_segments) * measured.length_um
    node_inside = _at(fov, graph.node_x_px, graph.node_y_px)
    for node, end in ((graph.node_a, graph.offsets[:-1]), (graph.node_b, graph.offsets[1:] - 1)):
        gap = np.hypot(graph.x_px[end] - graph.node_x_px[node], graph.y_px[end] - graph.node_y_px[node])
        length = length + gap * measured.pixel_size_um * node_inside[node]
    return np.asarray(length)


def summarise(shapes: SegmentShapes, chosen: BoolArray) -> GroupShape:
    """Sums and means over the chosen segments."""
    length = shapes.seen_length_um[chosen]
    radius = shapes.radius_mean_um[chosen]
    curves = shapes.curves
    told = chosen & np.isfinite(curves.length_um)
    bent_mm = float(curves.length_um[told].sum()) / UM_PER_MM

    def a_mm(values: FloatArray) -> float:
        return float(values[told].sum()) / bent_mm if bent_mm > 0 else np.nan

    return GroupShape(
        n_segments=int(chosen.sum()),
        length_um=float(length.sum()),
        area_um2=float((2.0 * radius * length).sum()),
        radius_mean_um=weighted_mean(radius, length),
        tortuosity_mean=weighted_mean(shapes.tortuosity[chosen], length),
        curvature_per_mm=a_mm(curves.curvature_rad),
        squared_curvature_per_mm2=a_mm(curves.squared_curvature_per_um) * UM_PER_MM,
        inflections_per_mm=a_mm(curves.inflections),
    )


def weighted_mean(values: FloatArray, weights: FloatArray) -> float:
    """Mean over the known values; NaN without any."""
    known = np.isfinite(values) & (weights > 0)
    return float(np.average(values[known], weights=weights[known])) if known.any() else np.nan


def describe_classes(
    measured: MeasuredGraph, shapes: SegmentShapes, field: tuple[BoolArray, BoolArray], calibre_um: tuple[float, ...]
) -> tuple[ClassShape, ...]:
    """Describe each class of vessels that there is, all together first, and each class of calibre within it.

    Parameters
    ----------
    measured : MeasuredGraph
        Segments with their classes.
    shapes : SegmentShapes
        What is known of each.
    field : two (h, w) bool arrays
        Vessel pixels and field of view; a pixel belongs to the class of the nearest centreline.
    calibre_um : ascending radii
        Limits between the classes of calibre; a segment belongs to that of its mean radius.
    """
    pixels, fov = field
    graph = measured.graph
    kinds = [kind for kind in VesselClass if kind and (graph.vessel_class == kind).any()]
    nearest = _nearest_class(graph, fov.shape) if kinds else np.zeros(0, np.int64)
    limits = (0.0, *calibre_um, np.inf)
    calibre = np.digitize(shapes.radius_mean_um, calibre_um)
    found = []
    for kind in (VesselClass.NONE, *kinds):
        chosen = graph.vessel_class == kind if kind else np.ones(graph.n_segments, dtype=bool)
        if not chosen.any():
            continue
        own = pixels & (nearest == kind) if kind else pixels
        filling = describe_filling(own, fov, measured.pixel_size_um, seek_avascular=False) if kind else None
        found.append(ClassShape(kind, None, None, summarise(shapes, chosen), filling))
        for k, (low, high) in enumerate(pairwise(limits)):
            within = chosen & (calibre == k)
            if within.any():
                top = float(high) if np.isfinite(high) else None
                found.append(ClassShape(kind, low, top, summarise(shapes, within), None))
    return tuple(found)


def _nearest_class(graph: VesselGraph, shape: tuple[int, ...]) -> IntArray:
    """Class (h, w) of the nearest centreline, looked for between squares of 2 by 2 px."""
    row = np.clip(np.rint(graph.y_px), 0, shape[0] - 1).astype(np.int64) // 2
    column = np.clip(np.rint(graph.x_px), 0, shape[1] - 1).astype(np.int64) // 2
    small = ((shape[0] + 1) // 2, (shape[1] + 1) // 2)
    free, kind = np.ones(small, dtype=bool), np.zeros(small, dtype=np.int8)
    free[row, column] = False
    kind[row, column] = graph.vessel_class[owner(graph.offsets)]
    at = ndimage.distance_transform_edt(free, return_distances=False, return_indices=True)
    return np.asarray(kind[at[0], at[1]].repeat(2, axis=0).repeat(2, axis=1)[: shape[0], : shape[1]])


def _at(fov: BoolArray, x_px: FloatArray, y_px: FloatArray) -> BoolArray:
    """Whether places lie in the field of view; those up to half a pixel beyond the picture as the pixel beside."""
    row, column = np.rint(y_px).astype(np.int64), np.rint(x_px).astype(np.int64)
    within = (row >= -1) & (column >= -1) & (row <= fov.shape[0]) & (column <= fov.shape[1])
    return np.asarray(within & fov[np.clip(row, 0, fov.shape[0] - 1), np.clip(column, 0, fov.shape[1] - 1)])
