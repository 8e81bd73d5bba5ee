"""From segments at their medians to a network at its median: what doubt does to resistances in series and parallel."""

import numpy as np

from vasohm.arrays import BoolArray, FloatArray
from vasohm.flow.boundaries import Boundary
from vasohm.flow.kirchhoff import summed_leverage
from vasohm.flow.poiseuille import LARGEST_LN_CORRECTION, SegmentResistances
from vasohm.flow.terminals import Terminals
from vasohm.network.graph import VesselGraph
from vasohm.network.groups import sum_by


def ln_median_shift(
    graph: VesselGraph, terminals: Terminals, boundary: Boundary, resistances: SegmentResistances, share: FloatArray
) -> FloatArray:
    """How far the median of ln R of each network lies above ln R of its segments at their medians.

    Parameters
    ----------
    graph : VesselGraph
        Which segments meet where.
    terminals : Terminals
        The networks.
    boundary : Boundary
        Given pressures and flows of the networks that have a solution.
    resistances : SegmentResistances
        Segments at their medians, with the random part of their doubt.
    share : (n_segments,) array
        d ln R of the network / d ln R of the segment; NaN where there is none.

    Returns
    -------
    (n_networks,) array; 0 for networks without a solution.

    Raises
    ------
    NetworkError
        See `vasohm.flow.kirchhoff.solve_flows`.

    Notes
    -----
    Medians do not add: a sum of skewed resistances has its median above the sum of their medians, and a sum of
    conductances likewise. To second order in independent errors of ln R_i with variance V_i the shift is ½ Σ V_i h_i,
    h_i = d² ln R / d (ln R_i)². With the share w and the leverage e of a segment (`summed_leverage`) it is h = w (2 e +
    w - 1) where a drop of pressure drives the network, and h = w (2 e - 1 - w) where given flows do: the derivative of
    the flow in a segment is that flow over the sum of its resistance and that of all other ways between its ends
    (Thévenin). In series h = w (1 - w), in parallel h = -w (1 - w). Both are exact where the shares are. Each ½ V_i is
    bounded by `LARGEST_LN_CORRECTION`, as a segment's own correction is, so that the shift is too.
    """
    n = len(terminals.source)
    weight = np.nan_to_num(share)
    variance = np.where(weight > 0, np.nan_to_num(np.square(resistances.ln_random_se)), 0.0)
    weight = weight * np.minimum(variance, 2.0 * LARGEST_LN_CORRECTION)
    leverage = summed_leverage(
        (graph.node_a, graph.node_b),
        resistances.resistance_pa_s_m3,
        (boundary.pressure_pa, boundary.inflow_m3_s),
        weight,
        (terminals.node_network, terminals.segment_network),
    )
    own = np.where(pressure_drives(terminals, boundary)[terminals.segment_network], 1.0, -1.0) * np.nan_to_num(share)
    return np.asarray(leverage + 0.5 * sum_by(terminals.segment_network, weight * (own - 1.0), n))


def pressure_drives(terminals: Terminals, boundary: Boundary) -> BoolArray:
    """Whether each network (n_networks,) has two pressures given that differ; otherwise flows drive it, or nothing."""
    n = len(terminals.source)
    fixed = np.isfinite(boundary.pressure_pa)
    least, most = np.full(n, np.inf), np.full(n, -np.inf)
    np.minimum.at(least, terminals.node_network[fixed], boundary.pressure_pa[fixed])
    np.maximum.at(most, terminals.node_network[fixed], boundary.pressure_pa[fixed])
    return np.asarray(most > least)
