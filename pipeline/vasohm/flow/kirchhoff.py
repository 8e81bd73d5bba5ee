"""Pressures and flows of any number of networks at once: Kirchhoff's laws on a graph, arrays only, SI units."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import TypeAlias

import numpy as np
from scipy.sparse import coo_array, csc_array, csr_array
from scipy.sparse.csgraph import connected_components, reverse_cuthill_mckee
from scipy.sparse.linalg import SuperLU, splu

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.errors import NetworkError

IMBALANCE = 1e-14  # of a node's flow, relative to that through its network, at which refinement ends
LARGEST_IMBALANCE = 1e-10  # beyond it a solution is none
LEAST_REFINEMENTS = 3  # flows that balance at once may still miss the drops of pressure
REFINEMENTS = 12  # 2 or 3 are usual; more than these tell that the factorisation has lost the thin segments
MOST_DECADES = 24.0  # up to here flows were right to 1e-7 of the whole; radii from 0.1 to 500 um span 15
DETERMINANT_STEP = 1e-3  # of ln conductance: differences of ln det to about its square
_TOO_WIDE = (
    "flows do not balance: the resistances span {span:.0f} decades; leave out or correct segments that are nearly "
    "closed or have almost no length."
)

Correction: TypeAlias = Callable[[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]


@dataclass(frozen=True, slots=True, eq=False)
class _Circuit:
    """The driven part of the networks: its segments, and which nodes have their pressure to be found."""

    a: IntArray
    b: IntArray
    resistance: FloatArray  # relative to their geometric mean
    free: IntArray
    place: IntArray  # (n_nodes,) index among the free nodes, -1 where the pressure is fixed

    @property
    def n_nodes(self) -> int:
        return len(self.place)

    def net_outflow(self, flow: FloatArray) -> FloatArray:
        return np.bincount(self.a, flow, self.n_nodes) - np.bincount(self.b, flow, self.n_nodes)


def solve_flows(
    ends: tuple[IntArray, IntArray], resistance: FloatArray, fixed_pressure: FloatArray, inflow: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Solve for the pressure at each node and the flow in each segment.

    Parameters
    ----------
    ends : two (n_segments,) int arrays
        The node each segment leaves and the node it reaches.
    resistance : (n_segments,) array
        Positive; NaN or infinite where a segment is closed.
    fixed_pressure : (n_nodes,) array
        NaN where the pressure is not given.
    inflow : (n_nodes,) array
        Flow entering from outside at nodes without given pressure.

    Returns
    -------
    (n_nodes,) and (n_segments,) arrays: pressure, NaN in pieces without any given pressure, and flow from the first
    node to the second, 0 where there is no drive.

    Raises
    ------
    NetworkError
        The resistances span so many decades that flows do not balance.

    Notes
    -----
    One sparse factorisation of the weighted Laplacian for all networks, then iterative refinement on the imbalance of
    flows at each node. Flows are summed over the refinements from differences of the corrections, not taken from
    differences of the final pressures, so that a wide segment between two nearly equal pressures keeps its digits.
    The Laplacian's diagonal forgets a thin segment beside a wide one (its digits are those of the sum); where that
    keeps flows from balancing, pressures and flows are solved for together, which keeps both resistances apart.
    """
    start, driven = _circuit(ends, resistance, fixed_pressure, inflow)
    flow = np.zeros(resistance.shape)
    if driven is None:
        return start, flow
    pressure, part = _balance(driven.circuit, start, driven.inflow, driven.piece)
    flow[driven.used] = part / driven.unit
    return pressure, flow


def summed_leverage(
    ends: tuple[IntArray, IntArray],
    resistance: FloatArray,
    boundary: tuple[FloatArray, FloatArray],
    weight: FloatArray,
    network: tuple[IntArray, IntArray],
) -> FloatArray:
    """Weighted sum of the leverages of each network's segments.

    A segment's leverage is the resistance of its network between the segment's two ends, the segment included and all
    given pressures held, over its own resistance: 1 for a bridge to a dead end, less the more ways lead around it.

    Parameters
    ----------
    ends, resistance
        As in `solve_flows`.
    boundary : two (n_nodes,) arrays
        The given pressures and inflows, as in `solve_flows`.
    weight : (n_segments,) array
        Not negative.
    network : (n_nodes,) and (n_segments,) int arrays
        The network of each node and segment, from 0.

    Returns
    -------
    (n_networks,) array; 0 for networks that nothing drives.

    Raises
    ------
    NetworkError
        The resistances span so many decades that the network falls apart.

    Notes
    -----
    Conductances g exp(t c) make the leverages' sum over c the derivative of ln det of the Laplacian at t = 0 (Jacobi's
    formula), here a central difference: two factorisations for all segments of all networks, whatever their number.
    The determinant is taken from the matrix of pressure and flow, which keeps thin segments beside wide ones apart.
    """
    of_node, of_segment = network
    n = int(max(of_node.max(initial=-1), of_segment.max(initial=-1))) + 1
    _, driven = _circuit(ends, resistance, *boundary)
    most = np.zeros(n)
    np.maximum.at(most, of_segment, weight)
    if driven is None or not most.any():
        return np.zeros(n)
    of_used = of_segment[driven.used]
    exponent = np.divide(weight, most[of_segment], out=np.zeros(weight.shape), where=most[of_segment] > 0)[driven.used]
    unknown = np.concatenate([of_used, of_node[driven.circuit.free]])
    sides = []
    for step in (DETERMINANT_STEP, -DETERMINANT_STEP):
        moved = replace(driven.circuit, resistance=driven.circuit.resistance * np.exp(-step * exponent))
        try:
            factors = _joint_factors(moved, _row_scale(driven.circuit))
        except RuntimeError:
            raise NetworkError(_TOO_WIDE.format(span=_decades(moved.resistance))) from None
        ln_pivot = np.log(np.abs(factors.U.diagonal()))[factors.perm_c]
        sides.append(np.bincount(unknown, ln_pivot, n) + step * np.bincount(of_used, exponent, n))
    return most * (sides[0] - sides[1]) / (2.0 * DETERMINANT_STEP)


@dataclass(frozen=True, slots=True, eq=False)
class _Driven:
    """The driven circuit among all segments, its flows in units of the resistances' mean."""

    circuit: _Circuit
    used: IntArray  # its segments among all
    unit: float
    inflow: FloatArray  # (n_nodes,)
    piece: IntArray  # (n_nodes,)


def _circuit(
    ends: tuple[IntArray, IntArray], resistance: FloatArray, fixed_pressure: FloatArray, inflow: FloatArray
) -> tuple[FloatArray, _Driven | None]:
    """Pressures to start from, final where nothing drives, and the part that has flows to be found."""
    a, b = ends
    is_open = np.isfinite(resistance) & (resistance > 0) & (a != b)
    piece = _pieces(a[is_open], b[is_open], len(fixed_pressure))
    driven, rest_pressure = _drive(piece, fixed_pressure, inflow)
    is_fixed = np.isfinite(fixed_pressure)
    start = np.where(driven[piece], np.where(is_fixed, fixed_pressure, 0.0), rest_pressure[piece])
    used = np.flatnonzero(is_open & driven[piece[a]])
    if not used.size:
        return start, None
    if _decades(resistance[used]) > MOST_DECADES:
        raise NetworkError(_TOO_WIDE.format(span=_decades(resistance[used])))
    free = np.flatnonzero(driven[piece] & ~is_fixed)
    place = np.full(len(fixed_pressure), -1)
    free = free[_neighbours_together(a[used], b[used], free, place)]
    place[free] = np.arange(free.size)
    unit = float(np.exp(np.log(resistance[used]).mean()))
    circuit = _Circuit(a[used], b[used], resistance[used] / unit, free, place)
    return start, _Driven(circuit, used, unit, np.where(is_fixed, 0.0, inflow * unit), piece)


def _pieces(a: IntArray, b: IntArray, n_nodes: int) -> IntArray:
    links = coo_array((np.ones(a.size), (a, b)), shape=(n_nodes, n_nodes))
    return np.asarray(connected_components(links, directed=False)[1], dtype=np.int64)


def _neighbours_together(a: IntArray, b: IntArray, free: IntArray, place: IntArray) -> IntArray:
    """Order of the free nodes with neighbours near each other: elimination finds its own order faster from there."""
    if not free.size:
        return np.zeros(0, dtype=np.int64)
    place = np.array(place)
    place[free] = np.arange(free.size)
    inner = (place[a] >= 0) & (place[b] >= 0)
    links = (np.concatenate([place[a[inner]], place[b[inner]]]), np.concatenate([place[b[inner]], place[a[inner]]]))
    pattern = csr_array(coo_array((np.ones(len(links[0])), links), shape=(free.size, free.size)))
    return np.asarray(reverse_cuthill_mckee(pattern, symmetric_mode=True), dtype=np.int64)


def _drive(piece: IntArray, fixed_pressure: FloatArray, inflow: FloatArray) -> tuple[BoolArray, FloatArray]:
    """Tell which pieces anything drives, and the pressure of those at rest (NaN where none is given)."""
    n_pieces = int(piece.max(initial=-1)) + 1
    least, most, given = np.full(n_pieces, np.inf), np.full(n_pieces, -np.inf), np.zeros(n_pieces)
    is_fixed = np.isfinite(fixed_pressure)
    np.minimum.at(least, piece[is_fixed], fixed_pressure[is_fixed])
    np.maximum.at(most, piece[is_fixed], fixed_pressure[is_fixed])
    np.add.at(given, piece[~is_fixed], np.abs(inflow[~is_fixed]))
    known = most >= least
    return known & ((most > least) | (given > 0)), np.where(known, least, np.nan)


def _balance(
    circuit: _Circuit, start: FloatArray, inflow: FloatArray, piece: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Let the free pressures take the values at which what enters each node leaves it."""
    start_drop = start[circuit.a] - start[circuit.b]
    if not circuit.free.size:
        return start, start_drop / circuit.resistance
    for correct in _corrections(circuit):
        pressure, drop, flow = start, start_drop, start_drop / circuit.resistance
        last = np.inf
        for turn in range(REFINEMENTS):
            excess = inflow - circuit.net_outflow(flow)
            imbalance = _imbalance(excess, circuit, inflow, piece)
            ended = imbalance <= IMBALANCE or (imbalance <= LARGEST_IMBALANCE and imbalance > 0.5 * last)
            if ended and turn >= LEAST_REFINEMENTS:
                return pressure, flow
            if not np.isfinite(imbalance):
                break
            last = imbalance
            with np.errstate(over="ignore", invalid="ignore"):  # what is not finite ends in the next method
                step, flow_step = correct(excess, drop - circuit.resistance * flow)
                pressure, flow = pressure + step, flow + flow_step
                drop = drop + (step[circuit.a] - step[circuit.b])
    raise NetworkError(_TOO_WIDE.format(span=_decades(circuit.resistance)))


def _decades(resistance: FloatArray) -> float:
    return float(np.log10(resistance.max() / resistance.min()))


def _imbalance(excess: FloatArray, circuit: _Circuit, inflow: FloatArray, piece: IntArray) -> float:
    """Largest excess of a free node over the flow through its piece."""
    outside = np.where(circuit.place >= 0, np.abs(inflow), np.abs(excess))
    through = np.maximum(np.bincount(piece, outside), np.finfo(float).tiny)
    return float(np.max(np.abs(excess[circuit.free]) / through[piece[circuit.free]]))


def _corrections(circuit: _Circuit) -> Iterator[Correction]:
    """Ways from an imbalance of nodes and a misfit of drops to steps of pressure and flow: fast, then sturdy."""
    for method in (_by_pressure, _by_pressure_and_flow):
        try:
            yield method(circuit)
        except RuntimeError:  # the factorisation met a pivot that rounding has made zero
            continue


def _by_pressure(circuit: _Circuit) -> Correction:
    a, b, place = circuit.a, circuit.b, circuit.place
    conductance = 1.0 / circuit.resistance
    total = np.bincount(a, conductance, circuit.n_nodes) + np.bincount(b, conductance, circuit.n_nodes)
    scale = 1.0 / np.sqrt(total[circuit.free])
    inner = (place[a] >= 0) & (place[b] >= 0)
    row, column, own = place[a[inner]], place[b[inner]], np.arange(circuit.free.size)
    entry = -conductance[inner] * scale[row] * scale[column]
    rows, columns = np.concatenate([row, column, own]), np.concatenate([column, row, own])
    matrix = coo_array((np.concatenate([entry, entry, np.ones(own.size)]), (rows, columns)))
    factors = splu(
        csc_array(matrix), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True}
    )

    def correct(excess: FloatArray, misfit: FloatArray) -> tuple[FloatArray, FloatArray]:
        del misfit  # flow follows the drop of pressure in every step
        step = np.zeros(circuit.n_nodes)
        step[circuit.free] = scale * factors.solve(scale * excess[circuit.free])
        return step, conductance * (step[a] - step[b])

    return correct


def _by_pressure_and_flow(circuit: _Circuit) -> Correction:
    n, scale = circuit.resistance.size, _row_scale(circuit)
    factors = _joint_factors(circuit, scale)

    def correct(excess: FloatArray, misfit: FloatArray) -> tuple[FloatArray, FloatArray]:
        found = factors.solve(np.concatenate([scale * misfit, excess[circuit.free]]))
        step = np.zeros(circuit.n_nodes)
        step[circuit.free] = found[n:]
        return step, found[:n]

    return correct


def _row_scale(circuit: _Circuit) -> FloatArray:
    """Factor on each segment's equation that keeps its entries at 1 or below."""
    return 1.0 / np.maximum(circuit.resistance, 1.0)


def _joint_factors(circuit: _Circuit, scale: FloatArray) -> SuperLU:
    """Factorise the equations of all segments' drops and all free nodes' balance; flows first, then pressures."""
    n, place = circuit.resistance.size, circuit.place
    segment = np.arange(n)
    rows, columns, entries = [segment], [segment], [scale * circuit.resistance]
    for node, sign in ((circuit.a, 1.0), (circuit.b, -1.0)):
        inner = place[node] >= 0
        unknown = n + place[node[inner]]
        rows += [segment[inner], unknown]
        columns += [unknown, segment[inner]]
        entries += [-sign * scale[inner], np.full(unknown.size, sign)]
    where = (np.concatenate(rows), np.concatenate(columns))
    return splu(csc_array(coo_array((np.concatenate(entries), where))))
