"""Vessel beds made by hand, and the published values that the tests of physics hold against."""

import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from vasohm.flags import Flag
from vasohm.flow.hydraulics import NetworkFlow, solve_flow
from vasohm.flow.rheology import BloodSettings
from vasohm.flow.terminals import NetworkSettings, TerminalPoint, place_terminals
from vasohm.network.graph import Crossings, NodeKind, VesselGraph
from vasohm.network.radius import MeasuredGraph

CHECKS = json.loads((Path(__file__).parents[1] / "data" / "check_values.json").read_text(encoding="utf-8"))


def published(key: str, units: str = "") -> list[tuple[dict, float]]:
    """Inputs and output of the published values under a key, of one unit where a key holds several."""
    return [(value["inputs"], value["output"]) for value in CHECKS[key]["values"] if value["units"].startswith(units)]


@dataclass(frozen=True, eq=False)
class IndependentErrors:
    """Every point's ln r errs on its own."""

    offsets: np.ndarray
    ln_se: np.ndarray

    def segment_variance(self, gradient: np.ndarray) -> np.ndarray:
        return np.add.reduceat(np.square(gradient * self.ln_se), self.offsets[:-1])


@dataclass(frozen=True, eq=False)
class CommonErrors:
    """All points of a segment err together."""

    offsets: np.ndarray
    ln_se: np.ndarray

    def segment_variance(self, gradient: np.ndarray) -> np.ndarray:
        return np.square(np.add.reduceat(gradient * self.ln_se, self.offsets[:-1]))


@dataclass(frozen=True, eq=False)
class Vessel:
    """One segment: the nodes it joins, its path in pixels (n, 2) as x and y, and its radius at each point."""

    a: int
    b: int
    path_px: np.ndarray
    radius_um: np.ndarray


def straight(
    nodes: Sequence[tuple[float, float]], a: int, b: int, radius_um: float | np.ndarray, n: int = 41
) -> Vessel:
    """Return a straight vessel between two nodes."""
    at = np.linspace(0, 1, np.size(radius_um) if np.ndim(radius_um) else n)[:, None]
    path = np.asarray(nodes[a]) * (1 - at) + np.asarray(nodes[b]) * at
    return Vessel(a, b, path, np.broadcast_to(np.asarray(radius_um, dtype=float), len(path)))


def bed(
    nodes: Sequence[tuple[float, float]],
    vessels: Sequence[Vessel],
    *,
    kinds: Sequence[NodeKind] | None = None,
    classes: Sequence[int] | None = None,
    pixel_size_um: float = 1.0,
    pixel_size_rel_se: float = np.nan,
    ln_se: float | np.ndarray = 0.0,
    length_rel_se: float = 0.0,
    shared: np.ndarray | None = None,
    noise_sign: int = -1,
    errors: type = IndependentErrors,
    plasma_layer_um: float = 0.0,
) -> MeasuredGraph:
    """Return a measured graph with exactly these vessels; node kinds follow from the degree unless given."""
    a, b = (np.array([getattr(vessel, end) for vessel in vessels], dtype=np.int64) for end in "ab")
    counts = np.array([len(vessel.path_px) for vessel in vessels], dtype=np.int64)
    offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    path = np.concatenate([np.zeros((0, 2)), *(vessel.path_px for vessel in vessels)])
    arcs = [
        np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(vessel.path_px, axis=0).T))]) * pixel_size_um
        for vessel in vessels
    ]
    length = np.array([arc[-1] for arc in arcs])
    degree = np.bincount(np.concatenate([a, b]), minlength=len(nodes))
    kind = np.where(degree == 1, NodeKind.END, NodeKind.BRANCHING) if kinds is None else np.array(kinds)
    n_points, n = int(offsets[-1]), len(vessels)
    point_se = np.broadcast_to(np.asarray(ln_se, dtype=float), n_points).copy()
    columns = np.zeros((n_points, 0)) if shared is None else shared
    none = np.zeros(0, dtype=np.int64)
    xy = np.array(nodes, dtype=float).reshape(-1, 2)
    graph = VesselGraph(
        shape=(512, 512),
        node_x_px=xy[:, 0].copy(),
        node_y_px=xy[:, 1].copy(),
        node_kind=kind.astype(np.int64),
        node_a=a,
        node_b=b,
        offsets=offsets,
        x_px=path[:, 0].copy(),
        y_px=path[:, 1].copy(),
        seed_radius_px=np.ones(n_points),
        vessel_class=np.zeros(n, dtype=np.int64) if classes is None else np.array(classes, dtype=np.int64),
        class_probability=np.full(n, np.nan),
        segment_flags=np.zeros(n, dtype=np.int64),
        crossings=Crossings(np.zeros(0), np.zeros(0), none, none.copy(), np.zeros(0), np.zeros(0, dtype=bool)),
    )
    first, last = offsets[:-1], offsets[1:] - 1
    radius_um = np.concatenate([np.zeros(0), *(vessel.radius_um for vessel in vessels)])
    return MeasuredGraph(
        graph=graph,
        pixel_size_um=pixel_size_um,
        pixel_size_rel_se=pixel_size_rel_se,
        s_um=np.concatenate([np.zeros(0), *arcs]),
        radius_um=radius_um,
        column=1.0 - plasma_layer_um / radius_um,
        ln_radius_random_se=point_se,
        shared=columns,
        shared_causes=tuple(f"cause {k}" for k in range(columns.shape[1])),
        covariance=errors(offsets, point_se),
        noise_sign=noise_sign,
        contrast=np.ones(n_points),
        point_flags=np.zeros(n_points, dtype=np.int64),
        length_um=length,
        length_random_se_um=length_rel_se * length,
        chord_um=np.hypot(*(path[last] - path[first]).T) * pixel_size_um if n else np.zeros(0),
        segment_flags=np.zeros(n, dtype=np.int64),
        blur_px=1.0,
        blur_se_px=0.02,
        profile="cylinder",
        image_contrast=0.2,
        flags=Flag.NONE,
    )


def newtonian(viscosity_mpa_s: float = 3.0) -> BloodSettings:
    """Blood of one viscosity."""
    return BloodSettings("constant", 0.45, 0.0, 1.2, viscosity_mpa_s, {})


def blood(law: str, hematocrit: float = 0.45, hematocrit_se: float = 0.0) -> BloodSettings:
    """Blood after a published law, plasma of 1.2 mPa.s."""
    return BloodSettings(law, hematocrit, hematocrit_se, 1.2, 3.0, {})


Y_NODES = [(0.0, 100.0), (100.0, 100.0), (200.0, 50.0), (200.0, 150.0)]
AUTO = NetworkSettings("auto", 1.0)


def y_vessels(radii: Sequence[float] = (10.0, 8.0, 6.0)) -> list[Vessel]:
    """Return a parent to the right and its two children, 100 to 112 px long."""
    return [straight(Y_NODES, a, b, r) for (a, b), r in zip([(0, 1), (1, 2), (1, 3)], radii, strict=True)]


def y_bed(**more: Any) -> MeasuredGraph:
    """Return a bed of one bifurcation; `more` goes to `bed`."""
    return bed(Y_NODES, y_vessels(), **more)


def point(
    x: float,
    y: float,
    role: str,
    *,
    pressure: float | None = None,
    flow: float | None = None,
    hematocrit: float | None = None,
) -> TerminalPoint:
    """Return a line of a terminals file."""
    return TerminalPoint(x, y, role, pressure, flow, hematocrit)


def flow_of(
    measured: MeasuredGraph,
    points: Sequence[TerminalPoint] = (),
    settings: NetworkSettings = AUTO,
    how: BloodSettings | None = None,
) -> NetworkFlow:
    """Solve a bed, of constant viscosity unless told how, with inlets and outlets from its shape unless given."""
    return solve_flow(measured, place_terminals(measured, points, settings), how or newtonian())
