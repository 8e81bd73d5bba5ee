"""What the terminals prescribe: a pressure or a flow at every inlet and outlet."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flow.terminals import Terminals
from vasohm.units import NL_MIN_PER_M3_S, PA_PER_MMHG


@dataclass(frozen=True, slots=True, eq=False)
class Boundary:
    """Pressures (NaN where free) and flows from outside (0 where none) at the nodes, in SI units."""

    pressure_pa: FloatArray  # (n_nodes,)
    inflow_m3_s: FloatArray  # (n_nodes,)
    assumed: BoolArray  # (n_networks,) several inlets or outlets were joined to one pressure

    def __post_init__(self) -> None:
        freeze(self)


def make_boundary(terminals: Terminals) -> Boundary:
    """Complete what the terminals say to a problem that has one solution.

    Where no terminal of a network has a pressure or flow, its inlets are joined to the drive and its outlets to 0.
    Where some have pressures, those without anything take the mean of the given ones on their own side; a side with
    none given lies by the drive below the inlets or above the outlets. Where every terminal has a flow, the outlets'
    flows are scaled to the inlets' sum, since two measured sums never agree, and the first outlet is held at 0.
    """
    network, role = terminals.node_network, terminals.role
    n = len(terminals.source)
    pressure = np.array(terminals.pressure_mmhg)
    flow = np.where(np.isnan(pressure), terminals.flow_nl_min, np.nan)
    bare = (role != 0) & np.isnan(pressure) & np.isnan(flow)
    is_in, is_out = role > 0, role < 0
    inlet, outlet = (_mean_given(network, pressure, side, n) for side in (is_in, is_out))
    drive = terminals.drive_mmhg
    low = np.where(np.isnan(outlet), np.where(np.isnan(inlet), 0.0, inlet - drive), outlet)
    high = np.where(np.isnan(inlet), np.where(np.isnan(outlet), drive, outlet + drive), inlet)
    pressure = np.where(bare, np.where(is_in, high[network], low[network]), pressure)
    inflow = np.where(np.isfinite(flow), role * flow, 0.0)
    inflow, pressure = _close(network, inflow, pressure, is_out)
    joined = [np.bincount(network[bare & side], minlength=n) > 1 for side in (is_in, is_out)]
    return Boundary(pressure * PA_PER_MMHG, inflow / NL_MIN_PER_M3_S, joined[0] | joined[1])


def _mean_given(network: IntArray, pressure: FloatArray, side: BoolArray, n_networks: int) -> FloatArray:
    given = side & np.isfinite(pressure)
    count = np.bincount(network[given], minlength=n_networks)
    total = np.bincount(network[given], pressure[given], n_networks)
    return np.divide(total, count, out=np.full(n_networks, np.nan), where=count > 0)


def _close(
    network: IntArray, inflow: FloatArray, pressure: FloatArray, is_out: BoolArray
) -> tuple[FloatArray, FloatArray]:
    """Balance and pin the networks that have flows alone."""
    n = int(network.max(initial=-1)) + 1
    has_pressure = np.bincount(network[np.isfinite(pressure)], minlength=n) > 0
    has_flow = np.bincount(network[inflow != 0], minlength=n) > 0
    loose = (has_flow & ~has_pressure)[network]
    entering = np.bincount(network, np.where(is_out, 0.0, inflow), n)
    leaving = -np.bincount(network, np.where(is_out, inflow, 0.0), n)
    factor = np.divide(entering, leaving, out=np.zeros(n), where=leaving > 0)
    inflow = np.where(loose & is_out, inflow * factor[network], inflow)
    outlets = np.flatnonzero(loose & is_out)
    _, first = np.unique(network[outlets], return_index=True)
    pressure = np.array(pressure)
    pressure[outlets[first]] = 0.0
    inflow[outlets[first]] = 0.0
    return inflow, pressure
