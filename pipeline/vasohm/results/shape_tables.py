"""Rows of the tables that hold shape: branchings, orders, classes, scales, and shape in the image's own row."""

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from vasohm.arrays import AnyArray, FloatArray, IntArray
from vasohm.flags import codes
from vasohm.image.disc import OpticDisc
from vasohm.network.calibre_equivalents import Equivalents
from vasohm.network.classed import ClassShape, GroupShape
from vasohm.network.densities import Filling
from vasohm.network.graph import VesselClass
from vasohm.network.morphometry import Morphometry
from vasohm.network.orders import SCHEMES
from vasohm.network.radius import MeasuredGraph
from vasohm.units import UM_PER_MM

CLASS_WORDS = np.array(["", *(kind.name.lower() for kind in VesselClass if kind)], dtype=object)
CLASS_NAMES = {kind: kind.name.lower() if kind else "all" for kind in VesselClass}


def network_classes(measured: MeasuredGraph, shape: Morphometry) -> tuple[AnyArray, FloatArray]:
    """Return the class of more than half of each network's length, and its mean probability over that length."""
    graph, network = measured.graph, shape.segment_network
    n = len(shape.network_length_um)
    total = np.bincount(network, measured.length_um, minlength=n)
    words = np.full(n, "", dtype=object)
    probability = np.full(n, np.nan)
    for kind in VesselClass:
        if kind == VesselClass.NONE:
            continue
        length = np.where(graph.vessel_class == kind, measured.length_um, 0.0)
        held = np.bincount(network, length, minlength=n)
        most = 2 * held > total
        weight = np.bincount(network, length * np.nan_to_num(graph.class_probability), minlength=n)
        words[most] = CLASS_WORDS[kind]
        probability[most] = weight[most] / held[most]
    return words, probability


def branching_rows(measured: MeasuredGraph, shape: Morphometry) -> dict[str, AnyArray]:
    """Columns of branchings.csv."""
    found = shape.branchings
    kinds = measured.graph.vessel_class[np.stack((found.parent, found.child_1, found.child_2))]
    said = kinds.max(axis=0, initial=0)
    agree = ((kinds == said) | (kinds == VesselClass.NONE)).all(axis=0)
    columns: dict[str, AnyArray] = {
        "node_id": found.node + 1,
        "network_id": shape.node_network[found.node] + 1,
        "vessel_class": CLASS_WORDS[np.where(agree, said, VesselClass.NONE)],
        "parent_segment": found.parent + 1,
        "child_1_segment": found.child_1 + 1,
        "child_2_segment": found.child_2 + 1,
        "parent_by": np.where(found.by_flow, "flow", "radius").astype(object),
    }
    for k, vessel in enumerate(("parent", "child_1", "child_2")):
        columns[f"radius_{vessel}_um"] = found.radius_um[:, k]
        columns[f"radius_{vessel}_se_um"] = found.radius_se_um[:, k]
    for k, angle in enumerate(("1", "2", "total")):
        columns[f"angle_{angle}_deg"] = found.angle_deg[:, k]
        columns[f"angle_{angle}_se_deg"] = found.angle_se_deg[:, k]
    for name in ("area_ratio", "asymmetry", "junction_exponent", "murray_ratio"):
        columns[name] = getattr(found, name)
        columns[f"{name}_se"] = getattr(found, f"{name}_se")
    for name in ("volume_angle", "surface_angle"):
        for k in (0, 1):
            columns[f"{name}_{k + 1}_deg"] = getattr(found, f"{name}_deg")[:, k]
            columns[f"{name}_{k + 1}_se_deg"] = getattr(found, f"{name}_se_deg")[:, k]
    return columns | {
        "volume_imbalance": found.volume_imbalance,
        "surface_imbalance": found.surface_imbalance,
        "flags": codes(found.flags),
    }


def segment_shape(shape: Morphometry) -> dict[str, Any]:
    """Columns of segments.csv that tell bends and orders."""
    return {
        "curvature_rad": shape.curves.curvature_rad,
        "squared_curvature_per_um": shape.curves.squared_curvature_per_um,
        "inflections": _whole(shape.curves.inflections),
        "order_strahler": _whole(_known(shape.orders.strahler)),
        "order_diameter": _whole(_known(shape.orders.diameter)),
    }


def order_rows(shape: Morphometry, kinds: AnyArray) -> dict[str, AnyArray]:
    """Columns of orders.csv; `kinds` (n_networks,) are the words for the networks' classes."""
    found = shape.orders
    return {
        "network_id": found.network + 1,
        "vessel_class": kinds[found.network],
        "scheme": np.array(SCHEMES, dtype=object)[found.scheme],
        "order": found.order,
        "n_segments": found.n_segments,
        "n_elements": found.n_elements,
        "length_um": found.length_um,
        "length_sd_um": found.length_sd_um,
        "radius_um": found.radius_um,
        "radius_sd_um": found.radius_sd_um,
        "resistance_series_pa_s_m3": found.resistance_series,
        "ln_resistance_series_random_se": found.ln_series_random_se,
        "ln_resistance_series_shared_se": found.ln_series_shared_se,
        "resistance_parallel_pa_s_m3": found.resistance_parallel,
        "ln_resistance_parallel_random_se": found.ln_parallel_random_se,
        "ln_resistance_parallel_shared_se": found.ln_parallel_shared_se,
    }


def order_flags(shape: Morphometry) -> IntArray:
    """Flags (n_networks,) of what keeps a network from orders."""
    return np.asarray(np.bitwise_or.reduce(shape.orders.ratio_flags.reshape(-1, len(SCHEMES)), axis=1))


def horton_rows(shape: Morphometry, kinds: AnyArray) -> dict[str, Any]:
    """Columns of horton.csv; `kinds` as for the orders."""
    found = shape.orders
    return {
        "network_id": found.ratio_network + 1,
        "vessel_class": kinds[found.ratio_network],
        "scheme": np.array(SCHEMES, dtype=object)[found.ratio_scheme],
        "highest_order": _whole(_known(found.highest)),
        "bifurcation_ratio": found.bifurcation_ratio,
        "bifurcation_ratio_se": found.bifurcation_ratio_se,
        "length_ratio": found.length_ratio,
        "length_ratio_se": found.length_ratio_se,
        "radius_ratio": found.radius_ratio,
        "radius_ratio_se": found.radius_ratio_se,
        "flags": codes(found.ratio_flags),
    }


def class_rows(shape: Morphometry) -> dict[str, AnyArray]:
    """Columns of classes.csv."""
    rows = [_class_row(one, shape) for one in shape.classes]
    names = ["vessel_class", "from_um", "to_um", *_group_cells(shape.whole, shape.fov_area_um2), *_filling_cells(None)]
    types = {"vessel_class": object, "n_segments": np.int64}
    return {name: np.array([row[name] for row in rows], dtype=types.get(name, np.float64)) for name in names}


def scale_rows(shape: Morphometry, pixel_size_um: float) -> dict[str, AnyArray]:
    """Columns of scales.csv."""
    fillings = [(VesselClass.NONE, shape.filling)]
    fillings += [(one.vessel_class, one.filling) for one in shape.classes if one.vessel_class and one.filling]
    edges = np.concatenate([filling.scales.edge_px for _, filling in fillings])
    return {
        "vessel_class": np.array(
            [CLASS_NAMES[kind] for kind, filling in fillings for _ in filling.scales.edge_px], dtype=object
        ),
        "edge_px": edges,
        "edge_um": edges * pixel_size_um,
        "n_occupied": np.concatenate([filling.scales.n_occupied for _, filling in fillings]),
        "lacunarity": np.concatenate([filling.scales.lacunarity for _, filling in fillings]),
    }


def image_shape(shape: Morphometry) -> dict[str, Any]:
    """Cells of image.csv that tell shape."""
    whole, avascular = shape.whole, shape.filling.avascular
    return {
        "fov_area_um2": shape.fov_area_um2,
        "vessel_area_um2": shape.vessel_area_um2,
        "vessel_area_fraction": shape.vessel_area_um2 / shape.fov_area_um2,
        "length_um": shape.length_um,
        "length_density_per_mm": whole.length_um / shape.fov_area_um2 * UM_PER_MM,
        "diameter_index_um": shape.vessel_area_um2 / whole.length_um if whole.length_um > 0 else np.nan,
        "n_networks": len(shape.network_length_um),
        "radius_mean_um": whole.radius_mean_um,
        "tortuosity_mean": whole.tortuosity_mean,
        **_curvature_cells(whole),
        **_filling_cells(shape.filling),
        "avascular_area_um2": avascular.area_um2,
        "avascular_radius_um": avascular.radius_um,
        "avascular_x_px": avascular.x_px,
        "avascular_y_px": avascular.y_px,
    }


def disc_cells(disc: OpticDisc, found: Equivalents) -> Mapping[str, Any]:
    """Cells of image.csv that tell the optic disc and the calibre equivalents around it."""
    return {
        "disc_x_px": disc.x_px,
        "disc_y_px": disc.y_px,
        "disc_radius_px": disc.radius_px,
        "disc_source": disc.source,
        "disc_confidence": disc.confidence,
        "zone_inner_px": found.zone_px[0],
        "zone_outer_px": found.zone_px[1],
        "crae_um": found.artery_um,
        "crae_se_um": found.artery_se_um,
        "crve_um": found.vein_um,
        "crve_se_um": found.vein_se_um,
        "avr": found.ratio,
        "avr_se": found.ratio_se,
        "n_zone_arterioles": found.n_arterioles,
        "n_zone_venules": found.n_venules,
        "calibre_formula": found.formula,
    }


def _class_row(one: ClassShape, shape: Morphometry) -> dict[str, Any]:
    is_whole = one.from_um is None
    filling = shape.filling if is_whole and not one.vessel_class else one.filling
    return {
        "vessel_class": CLASS_NAMES[one.vessel_class],
        "from_um": np.nan if one.from_um is None else one.from_um,
        "to_um": np.nan if one.to_um is None else one.to_um,
        **_group_cells(one.shape, shape.fov_area_um2),
        **_filling_cells(filling),
    }


def _group_cells(group: GroupShape, fov_area_um2: float) -> dict[str, Any]:
    return {
        "n_segments": group.n_segments,
        "length_um": group.length_um,
        "length_density_per_mm": group.length_um / fov_area_um2 * UM_PER_MM,
        "area_density": group.area_um2 / fov_area_um2,
        "diameter_index_um": group.area_um2 / group.length_um if group.length_um > 0 else np.nan,
        "radius_mean_um": group.radius_mean_um,
        "tortuosity_mean": group.tortuosity_mean,
        **_curvature_cells(group),
    }


def _curvature_cells(group: GroupShape) -> dict[str, float]:
    return {
        "curvature_per_mm": group.curvature_per_mm,
        "squared_curvature_per_mm2": group.squared_curvature_per_mm2,
        "inflections_per_mm": group.inflections_per_mm,
    }


def _filling_cells(filling: Filling | None) -> dict[str, float]:
    names = (
        "tissue_distance_mean_um",
        "tissue_distance_sd_um",
        "tissue_distance_p05_um",
        "tissue_distance_median_um",
        "tissue_distance_p95_um",
        "tissue_unseen_fraction",
        "box_dimension",
        "box_dimension_se",
        "box_least_px",
        "box_most_px",
        "lacunarity",
    )
    if filling is None:
        return dict.fromkeys(names, np.nan)
    distances, dimension = filling.distances, filling.dimension
    values = (
        distances.mean_um,
        distances.sd_um,
        *distances.quantiles_um,
        distances.unseen,
        dimension.value,
        dimension.se,
        dimension.least_px,
        dimension.most_px,
        filling.lacunarity,
    )
    return dict(zip(names, values, strict=True))


def _known(order: IntArray) -> FloatArray:
    return np.where(order > 0, order, np.nan)


def _whole(values: FloatArray) -> Any:
    """Whole numbers of which some are missing."""
    return pd.array(values, dtype="Int64")
