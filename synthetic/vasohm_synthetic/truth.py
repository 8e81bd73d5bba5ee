"""The true tables of a picture, with the columns of the measured ones; a cell that does not apply is empty (NaN)."""

from typing import Any

import numpy as np
import pandas as pd
from scipy.optimize import brentq

from vasohm_synthetic.arrays import FloatArray
from vasohm_synthetic.blood import Blood, blood_problems, viscosity
from vasohm_synthetic.columns import NETWORK_COLUMNS, NODE_COLUMNS, POINT_COLUMNS, SEGMENT_COLUMNS
from vasohm_synthetic.crossings import crossing_table
from vasohm_synthetic.errors import refuse
from vasohm_synthetic.hydraulics import NL_MIN_PER_M3_S, PA_PER_MMHG, Flow, solve
from vasohm_synthetic.optics import Optics
from vasohm_synthetic.profile import central_density
from vasohm_synthetic.scene import Scene
from vasohm_synthetic.trace import Graph, Segment, trace

HALF_ROUNDING = 1e-9  # shares of equal segments come to half in spite of rounding
TRUTH_STEP_PX = 1.0  # between the points of points.csv


def truth_tables(
    scene: Scene,
    pixel_size_um: float,
    blood: Blood,
    *,
    image_id: str = "phantom",
    drive_mmhg: float = 1.0,
    optics: Optics | None = None,
) -> dict[str, pd.DataFrame]:
    """Make the true tables segments, points, nodes, crossings and networks of a scene.

    Parameters
    ----------
    pixel_size_um : float
        Edge of a pixel, exactly.
    blood : Blood
        Its law and hematocrit give the resistances.
    optics : Optics, optional
        Where given, `contrast` of the points is the vessel's own, before blur.

    Raises
    ------
    RecipeError
        When the pixel size, the drive or the blood are impossible.
    """
    problems = blood_problems(blood)
    if not pixel_size_um > 0:
        problems.append(f"pixel_size_um {pixel_size_um:g} is not positive")
    if not drive_mmhg > 0:
        problems.append(f"drive_mmhg {drive_mmhg:g} is not positive")
    refuse(problems)
    graph = trace(scene)
    shapes = [_shape(segment, pixel_size_um, blood) for segment in graph.segments]
    resistance = np.array([shape["resistance_pa_s_m3"] for shape in shapes])
    ends = np.array([(s.node_a, s.node_b) for s in graph.segments], np.int64).reshape(-1, 2)
    flow = solve((ends[:, 0], ends[:, 1]), resistance, graph.role, drive_mmhg)
    segments = _segments(graph, shapes, flow, blood, image_id)
    return {
        "segments": segments,
        "points": _points(graph, pixel_size_um, optics, image_id),
        "nodes": _nodes(graph, flow, image_id),
        "crossings": crossing_table(graph, image_id),
        "networks": _networks(graph, segments, flow, pixel_size_um, image_id),
    }


def _mean(values: FloatArray, s: FloatArray) -> float:
    """Mean along an axis by the trapezoidal rule."""
    return float(np.trapezoid(values, s) / (s[-1] - s[0]))


def _shape(segment: Segment, pixel_size_um: float, blood: Blood) -> dict[str, float]:
    """Length, radii, viscosity and resistance of one segment: R = (8 / pi) integral of mu r^-4 (Poiseuille)."""
    s_um, radius = segment.s_px * pixel_size_um, segment.radius_px * pixel_size_um
    mean = _mean(radius, s_um)
    hindrance = _mean(viscosity(blood, radius) / radius**4, s_um)

    def excess(ln_radius: float) -> float:
        r = np.array([np.exp(ln_radius)])
        return float(np.log(viscosity(blood, r)[0] / r[0] ** 4 / hindrance))

    low, high = np.log(radius.min()), np.log(radius.max())
    if excess(low) * excess(high) < 0:
        hydraulic = float(np.exp(brentq(excess, low, high, xtol=1e-14, rtol=1e-14)))
    else:
        hydraulic = mean  # a uniform tube: all radii are one
    length, chord = float(s_um[-1]), float(np.hypot(*_chord(segment)) * pixel_size_um)
    return {
        "length_um": length,
        "chord_um": chord,
        "tortuosity": length / chord if chord > 1e-6 * length else np.nan,
        "radius_mean_um": mean,
        "radius_sd_um": float(np.sqrt(max(_mean((radius - mean) ** 2, s_um), 0.0))),
        "radius_hydraulic_um": hydraulic,
        "viscosity_mpa_s": float(viscosity(blood, np.array([hydraulic]))[0]),
        # mPa s = 1e-3 Pa s, um / um^4 = 1e18 / m^3
        "resistance_pa_s_m3": 8.0 / np.pi * hindrance * length * 1e15,
    }


def _chord(segment: Segment) -> tuple[float, float]:
    return (
        float(segment.x_px[-1] - segment.x_px[0]),
        float(segment.y_px[-1] - segment.y_px[0]),
    )


def _n_points(segment: Segment) -> int:
    return max(2, round(float(segment.s_px[-1]) / TRUTH_STEP_PX) + 1)


def _segments(graph: Graph, shapes: list[dict[str, float]], flow: Flow, blood: Blood, image_id: str) -> pd.DataFrame:
    rows: list[dict[str, Any]] = []
    for index, (segment, shape) in enumerate(zip(graph.segments, shapes, strict=True)):
        discharge = flow.flow_m3_s[index]
        radius_m = shape["radius_hydraulic_um"] * 1e-6
        rows.append(
            {
                "image_id": image_id,
                "segment_id": index + 1,
                "network_id": int(flow.segment_network[index]) + 1,
                "node_a": segment.node_a + 1,
                "node_b": segment.node_b + 1,
                "vessel_class": segment.vessel.vessel_class,
                "class_probability": 1.0 if segment.vessel.vessel_class else np.nan,
                "n_points": _n_points(segment),
                **shape,
                "hematocrit": blood.hematocrit,
                "flow_nl_min": discharge * NL_MIN_PER_M3_S,
                "pressure_a_mmhg": flow.pressure_pa[segment.node_a] / PA_PER_MMHG,
                "pressure_b_mmhg": flow.pressure_pa[segment.node_b] / PA_PER_MMHG,
                "wall_shear_pa": 4e-3 * shape["viscosity_mpa_s"] * abs(discharge) / (np.pi * radius_m**3),
                "resistance_share": flow.share[index],
                "flags": "rim" if segment.cut_by_rim else "",
            }
        )
    return pd.DataFrame(rows, columns=SEGMENT_COLUMNS)


def _points(graph: Graph, pixel_size_um: float, optics: Optics | None, image_id: str) -> pd.DataFrame:
    tables = []
    for index, segment in enumerate(graph.segments):
        at = np.linspace(0.0, segment.s_px[-1], _n_points(segment))
        radius = np.interp(at, segment.s_px, segment.radius_px)
        vessel = segment.vessel
        contrast = np.full(len(at), np.nan) if optics is None else central_density(radius, vessel.gain, optics)
        tables.append(
            pd.DataFrame(
                {
                    "image_id": image_id,
                    "segment_id": index + 1,
                    "point": np.arange(1, len(at) + 1),
                    "s_um": at * pixel_size_um,
                    "x_px": np.interp(at, segment.s_px, segment.x_px),
                    "y_px": np.interp(at, segment.s_px, segment.y_px),
                    "radius_um": radius * pixel_size_um,
                    "radius_se_um": np.nan,
                    "contrast": contrast,
                    "flags": "",
                },
                columns=POINT_COLUMNS,
            )
        )
    return pd.concat(tables, ignore_index=True) if tables else pd.DataFrame(columns=POINT_COLUMNS)


def _nodes(graph: Graph, flow: Flow, image_id: str) -> pd.DataFrame:
    words = {1: "inlet", -1: "outlet", 0: ""}
    table = {
        "image_id": image_id,
        "node_id": np.arange(1, len(graph.node_kind) + 1),
        "network_id": flow.node_network + 1,
        "x_px": graph.node_x_px,
        "y_px": graph.node_y_px,
        "kind": list(graph.node_kind),
        "degree": graph.node_degree,
        "role": [words[role] for role in graph.role.tolist()],
        "pressure_mmhg": flow.pressure_pa / PA_PER_MMHG,
    }
    return pd.DataFrame(table, columns=NODE_COLUMNS)


def _networks(graph: Graph, segments: pd.DataFrame, flow: Flow, pixel_size_um: float, image_id: str) -> pd.DataFrame:
    rows: list[dict[str, Any]] = []
    for network, resistance in enumerate(flow.resistance_pa_s_m3.tolist()):
        members = [s for s, n in zip(graph.segments, flow.segment_network, strict=True) if n == network]
        nodes = flow.node_network == network
        classes = {s.vessel.vessel_class for s in members}
        solved = bool(np.isfinite(resistance))
        areas = [2 * _mean(s.radius_px, s.s_px) * s.s_px[-1] for s in members]
        volumes = [np.pi * _mean(s.radius_px**2, s.s_px) * s.s_px[-1] for s in members]
        rows.append(
            {
                "image_id": image_id,
                "network_id": network + 1,
                "vessel_class": (vessel_class := classes.pop() if len(classes) == 1 else ""),
                "class_probability": 1.0 if vessel_class else np.nan,
                "n_segments": len(members),
                "n_branchings": sum(graph.node_kind[i] == "branching" for i in np.flatnonzero(nodes)),
                "n_inlets": int(np.sum(graph.role[nodes] == 1)),
                "n_outlets": int(np.sum(graph.role[nodes] == -1)),
                "terminals": "file" if solved else "none",
                "length_um": float(segments["length_um"][segments["network_id"] == network + 1].sum()),
                "area_um2": float(sum(areas)) * pixel_size_um**2,
                "volume_um3": float(sum(volumes)) * pixel_size_um**3,
                "loops": len(members) - int(nodes.sum()) + 1,
                "resistance_pa_s_m3": resistance,
                "n_half_resistance": _to_half(flow.share[flow.segment_network == network]) if solved else np.nan,
                "flow_nl_min": float(flow.total_flow_m3_s[network]) * NL_MIN_PER_M3_S,
                "flags": "",
            }
        )
    return pd.DataFrame(rows, columns=NETWORK_COLUMNS)


def _to_half(share: FloatArray) -> int:
    """Fewest segments whose shares of the resistance come to half of it."""
    held = np.cumsum(np.sort(np.nan_to_num(share))[::-1])
    return int(np.searchsorted(held, 0.5 - HALF_ROUNDING)) + 1
