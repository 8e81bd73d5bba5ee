"""Exact flow in a network of known resistances: pressures, flows, shares and the resistance of the whole."""

from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import spsolve

from vasohm_synthetic.arrays import BoolArray, FloatArray, IntArray

PA_PER_MMHG = 133.322387415
NL_MIN_PER_M3_S = 6e13


@dataclass(frozen=True, slots=True, eq=False)
class Flow:
    """Solution in SI units; NaN in networks without inlet or outlet."""

    node_network: IntArray
    segment_network: IntArray
    pressure_pa: FloatArray  # (n_nodes,)
    flow_m3_s: FloatArray  # (n_segments,) from node_a to node_b
    share: FloatArray  # (n_segments,) of the network's dissipated power
    resistance_pa_s_m3: FloatArray  # (n_networks,) drive / total flow
    total_flow_m3_s: FloatArray  # (n_networks,)


def networks_of(node_a: IntArray, node_b: IntArray, n_nodes: int) -> tuple[IntArray, IntArray]:
    """Number the connected networks from 0 by their first segment: of each node, of each segment."""
    if len(node_a) == 0:
        return np.zeros(n_nodes, np.int64), np.zeros(0, np.int64)
    links = coo_array((np.ones(len(node_a)), (node_a, node_b)), shape=(n_nodes, n_nodes))
    label = connected_components(links, directed=False)[1]
    rank: dict[int, int] = {}
    for name in label[node_a].tolist():
        rank.setdefault(name, len(rank))
    node_network = np.array([rank.get(name, -1) for name in label.tolist()], np.int64)
    return node_network, node_network[node_a]


def solve(ends: tuple[IntArray, IntArray], resistance: FloatArray, role: IntArray, drive_mmhg: float) -> Flow:
    """Join all inlets (role 1) of a network at the drive and all outlets (role -1) at zero pressure, and solve.

    Kirchhoff's laws as the weighted Laplacian; shares by Tellegen's theorem, R I^2 over their sum.
    """
    node_a, node_b = ends
    n_nodes = len(role)
    node_network, segment_network = networks_of(node_a, node_b, n_nodes)
    n_networks = int(segment_network.max()) + 1 if len(segment_network) else 0
    drive = drive_mmhg * PA_PER_MMHG
    pressure = np.full(n_nodes, np.nan)
    for network in range(n_networks):
        nodes = node_network == network
        if (role[nodes] == 1).any() and (role[nodes] == -1).any():
            pressure[nodes] = _pressures(nodes, (node_a, node_b), resistance, role, drive)
    flow = (pressure[node_a] - pressure[node_b]) / resistance
    power = resistance * flow**2
    total, spent = np.full(n_networks, np.nan), np.full(n_networks, np.nan)
    for network in range(n_networks):
        here = segment_network == network
        inflow = flow[here & (role[node_a] == 1)].sum() - flow[here & (role[node_b] == 1)].sum()
        if np.isfinite(inflow) and inflow > 0:
            total[network], spent[network] = inflow, power[here].sum()
    return Flow(
        node_network=node_network,
        segment_network=segment_network,
        pressure_pa=pressure,
        flow_m3_s=flow,
        share=power / spent[segment_network],
        resistance_pa_s_m3=drive / total,
        total_flow_m3_s=total,
    )


def _pressures(
    nodes: BoolArray, ends: tuple[IntArray, IntArray], resistance: FloatArray, role: IntArray, drive: float
) -> FloatArray:
    """Pressures of one network's nodes."""
    index = np.flatnonzero(nodes)
    local = np.full(len(nodes), -1)
    local[index] = np.arange(len(index))
    here = nodes[ends[0]]
    a, b, g = local[ends[0][here]], local[ends[1][here]], 1.0 / resistance[here]
    links = coo_array(
        (np.concatenate((g, g, -g, -g)), (np.concatenate((a, b, a, b)), np.concatenate((a, b, b, a)))),
        shape=(len(index),) * 2,
    ).tocsr()
    pressure = np.where(role[index] == 1, drive, 0.0)
    free = role[index] == 0
    if free.any():
        inner = links[free][:, free].tocsc()
        pressure[free] = spsolve(inner, -(links[free][:, ~free] @ pressure[~free]))
    return pressure
