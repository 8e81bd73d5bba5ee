"""Blood through given resistances: pressures, flows and shares of all networks of one image at once."""

from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.flow.boundaries import Boundary, make_boundary
from vasohm.flow.kirchhoff import solve_flows
from vasohm.flow.terminals import Terminals, missing_terminals
from vasohm.network.graph import VesselGraph
from vasohm.network.groups import sum_by

NO_FLOW_SHARE = 1e-13  # of the network's flow: a hundred times what rounding leaves in a dead end


@dataclass(frozen=True, slots=True, eq=False)
class Circulation:
    """Pressures, flows and shares for given segment resistances, in SI units; NaN in networks without solution."""

    boundary: Boundary  # without the networks that lack an inlet or an outlet
    pressure_pa: FloatArray  # (n_nodes,)
    flow_m3_s: FloatArray  # (n_segments,)
    share: FloatArray  # (n_segments,)
    network_flow_m3_s: FloatArray  # (n_networks,)
    network_resistance_pa_s_m3: FloatArray
    network_flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


def entering_hematocrit(terminals: Terminals, hematocrit: float) -> FloatArray:
    """Discharge hematocrit (n_segments,): that of a network's only inlet where it is given, else the given one."""
    inlets = np.flatnonzero(terminals.role > 0)
    n = len(terminals.source)
    network = terminals.node_network[inlets]
    alone = inlets[(np.bincount(network, minlength=n) == 1)[network]]
    by_network = np.full(n, float(hematocrit))
    own = alone[np.isfinite(terminals.hematocrit[alone])]
    by_network[terminals.node_network[own]] = terminals.hematocrit[own]
    return by_network[terminals.segment_network]


def circulate(graph: VesselGraph, resistance_pa_s_m3: FloatArray, terminals: Terminals) -> Circulation:
    """Let blood flow from inlets to outlets in all networks at once.

    Parameters
    ----------
    graph : VesselGraph
        Which segments meet where.
    resistance_pa_s_m3 : (n_segments,) array
        NaN where a segment is closed.
    terminals : Terminals
        Inlets and outlets; a network that lacks either is left unsolved and flagged.

    Returns
    -------
    Circulation
    """
    made = make_boundary(terminals)
    n = len(terminals.source)
    of_node, of_segment = terminals.node_network, terminals.segment_network
    has = [np.bincount(of_node[terminals.role == sign], minlength=n) > 0 for sign in (1, -1)]
    complete = has[0] & has[1]
    boundary = replace(
        made,
        pressure_pa=np.where(complete[of_node], made.pressure_pa, np.nan),
        inflow_m3_s=np.where(complete[of_node], made.inflow_m3_s, 0.0),
    )
    ends = (graph.node_a, graph.node_b)
    pressure, flow = solve_flows(ends, resistance_pa_s_m3, boundary.pressure_pa, boundary.inflow_m3_s)
    net = np.bincount(ends[0], flow, graph.n_nodes) - np.bincount(ends[1], flow, graph.n_nodes)
    through = sum_by(of_node, np.where(terminals.role != 0, np.maximum(net, 0.0), 0.0), n)
    flow = np.where(np.abs(flow) <= NO_FLOW_SHARE * through[of_segment], 0.0, flow)
    power = np.nan_to_num(resistance_pa_s_m3) * flow**2
    dissipated = sum_by(of_segment, power, n)
    flows = complete & (dissipated > 0)
    share = np.divide(power, dissipated[of_segment], out=np.full(flow.shape, np.nan), where=flows[of_segment])
    is_loop = ends[0] == ends[1]
    return Circulation(
        boundary=boundary,
        pressure_pa=pressure,
        flow_m3_s=np.where(complete[of_segment] | is_loop, flow, np.nan),
        share=share,
        network_flow_m3_s=np.where(flows, through, np.nan),
        network_resistance_pa_s_m3=np.divide(dissipated, through**2, out=np.full(n, np.nan), where=flows),
        network_flags=_network_flags(terminals, boundary, (has[0], has[1]), flows),
    )


def _network_flags(
    terminals: Terminals, boundary: Boundary, has: tuple[BoolArray, BoolArray], flows: BoolArray
) -> IntArray:
    stalled = has[0] & has[1] & ~flows
    flags = terminals.network_flags | missing_terminals(*has)
    flags = flags | np.where(boundary.assumed & flows, int(Flag.TERMINALS_JOINED), 0)
    flags = flags | np.where(_is_backwards(terminals, boundary), int(Flag.BACKWARDS), 0)
    return np.asarray(flags | np.where(stalled, int(Flag.NO_FLOW), 0), dtype=np.int64)


def _is_backwards(terminals: Terminals, boundary: Boundary) -> BoolArray:
    """Whether all of a network's inlets have a pressure below that of all its outlets."""
    n = len(terminals.source)
    highest_inlet, lowest_outlet = np.full(n, -np.inf), np.full(n, np.inf)
    is_in, is_out = terminals.role > 0, terminals.role < 0
    given, network = boundary.pressure_pa, terminals.node_network
    np.maximum.at(highest_inlet, network[is_in], np.nan_to_num(given[is_in], nan=np.inf))
    np.minimum.at(lowest_outlet, network[is_out], np.nan_to_num(given[is_out], nan=-np.inf))
    return np.asarray(np.isfinite(highest_inlet) & (highest_inlet < lowest_outlet))
