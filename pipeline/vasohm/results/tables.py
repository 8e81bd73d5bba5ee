"""From nouns to tables: every output column, as pandas data frames."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import networkx as nx
import numpy as np
import pandas as pd

from vasohm.arrays import AnyArray, BoolArray, FloatArray, IntArray
from vasohm.flags import Flag, codes
from vasohm.flow.hydraulics import NetworkFlow
from vasohm.flow.monte_carlo import ResistanceIntervals
from vasohm.flow.scenarios import ScenarioOutcomes
from vasohm.image.prepare import PreparedImage
from vasohm.image.segment import VesselMask
from vasohm.network.edits import Edit
from vasohm.network.graph import NodeKind
from vasohm.network.morphometry import Morphometry
from vasohm.network.radius import MeasuredGraph
from vasohm.results.handed_graph import hand_out_graph
from vasohm.results.schema import column_names, image_columns
from vasohm.results.shape_tables import (
    CLASS_WORDS,
    branching_rows,
    class_rows,
    disc_cells,
    horton_rows,
    image_shape,
    network_classes,
    order_flags,
    order_rows,
    scale_rows,
    segment_shape,
)
from vasohm.uncertainty import no_interval, quadrature

KIND_WORDS = np.array([kind.name.lower() for kind in NodeKind], dtype=object)
BLUR_NOT_TOLD = Flag.BLUR_ASSUMED | Flag.ASSUMED_BLUR_SPREAD  # assumed, or typed in the study
HALF_ROUNDING = 1e-9  # two equal segments hold one half each: shares are not exact to the last digit
ROLE_WORDS = np.array(["outlet", "", "inlet"], dtype=object)  # role -1, 0, +1


@dataclass(frozen=True, slots=True, eq=False)
class ImageTables:
    """All that one image gives.

    `tables` has a key for each table of `vasohm.results.schema.COLUMNS` but the failures; each frame has all its
    columns, also without rows. Missing numbers are NaN, missing texts are empty.
    """

    image_id: str
    status: str  # measured | empty
    tables: Mapping[str, pd.DataFrame]
    graph: "nx.MultiGraph[int]"
    mask: BoolArray  # (h, w)
    fov: BoolArray  # (h, w), the field of view
    picture: AnyArray  # (h, w) uint8, the measured channel stretched for showing
    pixel_size_um: float
    notes: tuple[str, ...]
    edits: tuple[Edit, ...] = ()  # a person's corrections that went into it

    @property
    def image(self) -> pd.DataFrame:
        return self.tables["image"]

    @property
    def networks(self) -> pd.DataFrame:
        return self.tables["networks"]

    @property
    def segments(self) -> pd.DataFrame:
        return self.tables["segments"]

    @property
    def nodes(self) -> pd.DataFrame:
        return self.tables["nodes"]

    @property
    def points(self) -> pd.DataFrame:
        return self.tables["points"]

    @property
    def branchings(self) -> pd.DataFrame:
        return self.tables["branchings"]

    @property
    def orders(self) -> pd.DataFrame:
        return self.tables["orders"]

    @property
    def classes(self) -> pd.DataFrame:
        return self.tables["classes"]

    @property
    def crossings(self) -> pd.DataFrame:
        return self.tables["crossings"]

    @property
    def scenarios(self) -> pd.DataFrame:
        return self.tables["scenarios"]


@dataclass(frozen=True, slots=True, eq=False)
class Findings:
    """What the stages found in one image."""

    prepared: PreparedImage
    mask: VesselMask
    measured: MeasuredGraph
    flow: NetworkFlow
    shape: Morphometry
    scenarios: ScenarioOutcomes
    intervals: ResistanceIntervals
    edits: tuple[Edit, ...] = ()  # as a person gave them


def tabulate(image_id: str, design: Mapping[str, str], findings: Findings) -> ImageTables:
    """Lay out what was found in one image as the output tables.

    Parameters
    ----------
    image_id : the image's name in the sheet.
    design : the sheet's own columns of this image, in the sheet's order.
    findings : the nouns of all stages. Without an optic disc its columns are absent.

    Returns
    -------
    Tables with all their columns; ids are indices plus 1. `status` is "empty" where there is no segment.

    Raises
    ------
    DomainError : a column of the sheet has the name of an output column.
    """
    kinds, _ = network_classes(findings.measured, findings.shape)
    frames = {
        "networks": _networks(findings),
        "segments": _segments(findings),
        "nodes": _nodes(findings),
        "points": _points(findings.measured),
        "branchings": branching_rows(findings.measured, findings.shape),
        "orders": order_rows(findings.shape, kinds),
        "horton": horton_rows(findings.shape, kinds),
        "classes": class_rows(findings.shape),
        "scales": scale_rows(findings.shape, findings.prepared.pixel_size_um),
        "crossings": _crossings(findings.measured),
        "scenarios": _scenarios(findings.scenarios),
    }
    tables = {table: _framed(table, image_id, columns) for table, columns in frames.items()}
    status = "measured" if findings.measured.graph.n_segments else "empty"
    image, disc, equivalents = _image(findings), findings.shape.disc, findings.shape.equivalents
    image.update({"image_id": image_id, "status": status})
    if disc is not None and equivalents is not None:
        image.update(disc_cells(disc, equivalents))
    image.update(design)
    names = [column.name for column in image_columns(design, with_disc=disc is not None)]
    tables["image"] = pd.DataFrame({name: [image[name]] for name in names})
    return ImageTables(
        image_id=image_id,
        status=status,
        tables=tables,
        graph=hand_out_graph(image_id, tables["nodes"], tables["segments"]),
        mask=findings.mask.pixels,
        fov=findings.prepared.fov,
        picture=findings.prepared.picture,
        pixel_size_um=findings.prepared.pixel_size_um,
        notes=findings.prepared.notes + findings.flow.terminals.notes + findings.intervals.notes,
        edits=findings.edits,
    )


def _framed(table: str, image_id: str, columns: Mapping[str, AnyArray]) -> pd.DataFrame:
    """Put the columns in the order of the schema, with the image's id before them."""
    n = len(next(iter(columns.values())))
    named = {"image_id": np.full(n, image_id, dtype=object), **columns}
    return pd.DataFrame({name: named[name] for name in column_names(table)})


def _segments(findings: Findings) -> dict[str, AnyArray]:
    measured, flow, shape = findings.measured, findings.flow, findings.shape
    graph = measured.graph
    low, high = findings.intervals.segment_lo, findings.intervals.segment_hi
    unbounded = np.where(no_interval(flow.resistance_pa_s_m3, low), int(Flag.NO_INTERVAL), 0)
    pixel_se_um = measured.length_um * _pixel_rel_se(measured)
    return {
        "segment_id": _ids(graph.n_segments),
        "network_id": shape.segment_network + 1,
        "node_a": graph.node_a + 1,
        "node_b": graph.node_b + 1,
        "vessel_class": CLASS_WORDS[graph.vessel_class],
        "class_probability": graph.class_probability,
        "n_points": np.diff(graph.offsets),
        "length_um": measured.length_um,
        "length_se_um": quadrature(measured.length_random_se_um, pixel_se_um),
        "chord_um": measured.chord_um,
        "tortuosity": shape.tortuosity,
        **segment_shape(shape),
        "radius_mean_um": shape.radius_mean_um,
        "radius_sd_um": shape.radius_sd_um,
        "radius_hydraulic_um": flow.radius_hydraulic_um,
        "radius_hydraulic_se_um": quadrature(flow.radius_hydraulic_random_se_um, flow.radius_hydraulic_shared_se_um),
        "hematocrit": flow.hematocrit,
        "hematocrit_tube": flow.hematocrit_tube,
        "viscosity_mpa_s": flow.viscosity_mpa_s,
        "resistance_pa_s_m3": flow.resistance_pa_s_m3,
        "resistance_lo_pa_s_m3": low,
        "resistance_hi_pa_s_m3": high,
        "ln_resistance_random_se": flow.ln_resistance_random_se,
        "ln_resistance_shared_se": flow.ln_resistance_shared_se,
        "flow_nl_min": flow.flow_nl_min,
        "pressure_a_mmhg": flow.pressure_mmhg[graph.node_a],
        "pressure_b_mmhg": flow.pressure_mmhg[graph.node_b],
        "velocity_mm_s": flow.motion.velocity_mm_s,
        "transit_s": flow.motion.transit_s,
        "wall_shear_pa": flow.motion.wall_shear_pa,
        "wall_shear_rate_per_s": flow.motion.wall_shear_rate_per_s,
        "reynolds": flow.motion.reynolds,
        "womersley": flow.motion.womersley,
        "resistance_share": flow.share,
        "flags": codes(graph.segment_flags | measured.segment_flags | flow.segment_flags | unbounded),
    }


def _points(measured: MeasuredGraph) -> dict[str, AnyArray]:
    graph = measured.graph
    n_points = np.diff(graph.offsets)
    shared_se = np.sqrt(np.sum(np.square(measured.shared), axis=1))
    pixel_se = measured.column * _pixel_rel_se(measured)  # a plasma layer does not grow with the pixel
    return {
        "segment_id": np.repeat(_ids(graph.n_segments), n_points),
        "point": np.arange(graph.n_points) - np.repeat(graph.offsets[:-1], n_points) + 1,
        "s_um": measured.s_um,
        "x_px": graph.x_px,
        "y_px": graph.y_px,
        "radius_um": measured.radius_um,
        "radius_se_um": measured.radius_um * quadrature(measured.ln_radius_random_se, shared_se, pixel_se),
        "contrast": measured.contrast,
        "flags": codes(measured.point_flags),
    }


def _nodes(findings: Findings) -> dict[str, AnyArray]:
    graph, flow = findings.measured.graph, findings.flow
    ends = np.concatenate([graph.node_a, graph.node_b])
    return {
        "node_id": _ids(graph.n_nodes),
        "network_id": findings.shape.node_network + 1,
        "x_px": graph.node_x_px,
        "y_px": graph.node_y_px,
        "kind": KIND_WORDS[graph.node_kind],
        "degree": np.bincount(ends, minlength=graph.n_nodes),
        "role": ROLE_WORDS[flow.terminals.role + 1],
        "pressure_mmhg": flow.pressure_mmhg,
    }


def _networks(findings: Findings) -> dict[str, AnyArray]:
    measured, flow, shape = findings.measured, findings.flow, findings.shape
    graph, terminals = measured.graph, flow.terminals
    n = len(shape.network_length_um)
    intervals = findings.intervals
    low, high = intervals.network_lo, intervals.network_hi
    unbounded = np.where(no_interval(flow.network_resistance_pa_s_m3, low), int(Flag.NO_INTERVAL), 0)
    vessel_class, probability = network_classes(measured, shape)
    node_network = shape.node_network
    return {
        "network_id": _ids(n),
        "vessel_class": vessel_class,
        "class_probability": probability,
        "n_segments": np.bincount(shape.segment_network, minlength=n),
        "n_branchings": np.bincount(node_network[graph.node_kind == NodeKind.BRANCHING], minlength=n),
        "n_inlets": np.bincount(node_network[terminals.role > 0], minlength=n),
        "n_outlets": np.bincount(node_network[terminals.role < 0], minlength=n),
        "terminals": np.array(terminals.source, dtype=object),
        "length_um": shape.network_length_um,
        "area_um2": shape.network_area_um2,
        "volume_um3": shape.network_volume_um3,
        "loops": shape.network_loops,
        "resistance_pa_s_m3": flow.network_resistance_pa_s_m3,
        "resistance_lo_pa_s_m3": low,
        "resistance_hi_pa_s_m3": high,
        "ln_resistance_random_se": flow.network_ln_resistance_random_se,
        "ln_resistance_shared_se": flow.network_ln_resistance_shared_se,
        "n_half_resistance": _count_to_half(terminals.segment_network, flow.share, n),
        "flow_nl_min": flow.network_flow_nl_min,
        "hematocrit_turns": flow.hematocrit_turns,
        "flags": codes(
            terminals.network_flags | flow.network_flags | intervals.network_flags | unbounded | order_flags(shape)
        ),
    }


def _count_to_half(network: IntArray, share: FloatArray, n_networks: int) -> Any:
    """Fewest segments (n_networks,) whose shares come to half; missing for a network without resistance."""
    share = np.nan_to_num(share)
    order = np.lexsort((-share, network))
    held = share[order]
    upto = np.cumsum(held) - held
    first = np.searchsorted(network[order], np.arange(n_networks))
    before = upto - np.append(upto, 0.0)[first][network[order]]
    needed = np.bincount(network[order][(before < 0.5 - HALF_ROUNDING) & (held > 0)], minlength=n_networks)
    return pd.array(np.where(needed > 0, needed, np.nan), dtype="Int64")


def _crossings(measured: MeasuredGraph) -> dict[str, AnyArray]:
    found = measured.graph.crossings
    return {
        "x_px": found.x_px,
        "y_px": found.y_px,
        "segment_over": found.segment_over + 1,
        "segment_under": found.segment_under + 1,
        "probability": found.probability,
    }


def _scenarios(outcomes: ScenarioOutcomes) -> dict[str, AnyArray]:
    return {
        "network_id": outcomes.network + 1,
        "scenario": np.array(outcomes.scenario, dtype=object),
        "n_segments_changed": outcomes.n_segments_changed,
        "radius_factor": outcomes.radius_factor,
        "resistance_before_pa_s_m3": outcomes.resistance_before_pa_s_m3,
        "resistance_after_pa_s_m3": outcomes.resistance_after_pa_s_m3,
        "ratio": outcomes.ratio,
        "ratio_lo": outcomes.ratio_lo,
        "ratio_hi": outcomes.ratio_hi,
        "flags": codes(outcomes.flags),
    }


def _image(findings: Findings) -> dict[str, Any]:
    prepared, measured, shape = findings.prepared, findings.measured, findings.shape
    kind = measured.graph.node_kind
    flags = prepared.flags | measured.flags | findings.flow.terminals.flags | shape.filling.distances.flags
    if shape.equivalents is not None:
        flags |= shape.equivalents.flags
    tells_blur = bool(measured.graph.n_segments) and not measured.flags & BLUR_NOT_TOLD
    if not tells_blur:  # nothing here says whether the picture is sharp
        flags &= ~Flag.OUT_OF_FOCUS
    height, width = prepared.signal.shape
    return {
        "width_px": width,
        "height_px": height,
        "pixel_size_um": prepared.pixel_size_um,
        "pixel_size_se_um": prepared.pixel_size_se_um,
        "pixel_size_source": prepared.pixel_size_source,
        "magnification": prepared.magnification.rule if prepared.magnification else "",
        "pixel_size_before_um": prepared.magnification.before_um if prepared.magnification else np.nan,
        **image_shape(shape),
        "n_segments": measured.graph.n_segments,
        "n_branchings": int(np.sum(kind == NodeKind.BRANCHING)),
        "n_ends": int(np.sum(kind == NodeKind.END)),
        "profile": measured.profile if measured.graph.n_segments else "",
        "blur_px": measured.blur_px if tells_blur else np.nan,
        "blur_se_px": measured.blur_se_px if tells_blur else np.nan,
        "noise": prepared.quality.noise,
        "contrast": measured.image_contrast,
        "saturated_fraction": prepared.quality.saturated_fraction,
        "invalid_fraction": prepared.quality.invalid_fraction,
        "focus_ok": Flag.OUT_OF_FOCUS not in flags if tells_blur else None,
        "exposure_ok": prepared.quality.exposure_ok,
        "flags": codes(np.array([int(flags)]))[0],
    }


def _ids(n: int) -> IntArray:
    return np.arange(1, n + 1, dtype=np.int64)


def _pixel_rel_se(measured: MeasuredGraph) -> float:
    """Return 0 where nobody told the pixel size's uncertainty; a flag of the image says so."""
    return 0.0 if np.isnan(measured.pixel_size_rel_se) else measured.pixel_size_rel_se
