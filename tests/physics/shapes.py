"""Shape of vessel beds made by hand, without a picture of their own."""

import numpy as np

from vasohm.image.disc import OpticDisc
from vasohm.network.morphometry import Morphometry, ShapeSettings, Surroundings, describe_shape
from vasohm.network.radius import MeasuredGraph

SETTINGS = ShapeSettings((0.5, 1.0), "knudtson", (10.0, 25.0), "none")


def shape_of(
    measured: MeasuredGraph,
    *,
    mask: np.ndarray | None = None,
    fov: np.ndarray | None = None,
    disc: OpticDisc | None = None,
    role: np.ndarray | None = None,
    flow: np.ndarray | None = None,
    resistance: np.ndarray | None = None,
    doubt: tuple[np.ndarray, np.ndarray] | None = None,
    settings: ShapeSettings = SETTINGS,
) -> Morphometry:
    """Describe a bed: no vessel pixels, all of the picture seen, no flow known, no doubt of R unless given."""
    graph = measured.graph
    none = np.zeros(graph.n_segments)
    random_se, shared_se = (none, none) if doubt is None else doubt
    field = np.ones(graph.shape, dtype=bool) if fov is None else fov
    around = Surroundings(
        vessels=np.zeros_like(field) if mask is None else mask,
        fov=field,
        disc=disc,
        role=np.zeros(graph.n_nodes, dtype=np.int64) if role is None else role,
        flow_nl_min=np.full(graph.n_segments, np.nan) if flow is None else flow,
        resistance_pa_s_m3=np.ones(graph.n_segments) if resistance is None else resistance,
        ln_resistance_random_se=random_se,
        ln_resistance_shared_se=shared_se,
    )
    return describe_shape(measured, around, settings)
