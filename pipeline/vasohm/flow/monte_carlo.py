"""Intervals of resistances: to first order, or from random draws of all that is uncertain where that is too coarse."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.flow.boundaries import make_boundary
from vasohm.flow.drawn import PIECES, cut_into_pieces, draw_ln_resistance
from vasohm.flow.elimination import Elimination, plan_elimination, reduce_to_kept
from vasohm.flow.hydraulics import NetworkFlow
from vasohm.flow.rheology import Blood, BloodSettings, make_blood
from vasohm.flow.terminals import Terminals
from vasohm.network.groups import sum_by
from vasohm.network.radius import MeasuredGraph
from vasohm.uncertainty import ln_interval, quadrature

LEAST_DRAWS = 200  # fewer leave 5 values or less beyond each bound of a 95 % interval
FIRST_ORDER_UP_TO = 0.05  # relative standard uncertainty of radii: up to it the first order is within 5 % of the width
BOUNDS = (0.025, 0.5, 0.975)
MOST_PRODUCTS = 5e8  # of all draws of a network: about 3 s
MOST_RADII = 2e7  # drawn for a network: about 4 s
SETS_AT_ONCE = 2_000_000  # values of conductances held at a time: 16 MB


@dataclass(frozen=True, slots=True)
class IntervalSettings:
    """How intervals are found.

    ``delta`` takes all to first order, ``monte-carlo`` draws every network that has a resistance, ``auto`` those whose
    radii are known to worse than `FIRST_ORDER_UP_TO`.
    """

    method: Literal["auto", "delta", "monte-carlo"]
    draws: int
    seed: int


@dataclass(frozen=True, slots=True, eq=False)
class ResistanceIntervals:
    """Bounds of the 95 % intervals in Pa·s/m³; NaN where there is no resistance or no bound."""

    segment_lo: FloatArray  # (n_segments,)
    segment_hi: FloatArray
    network_lo: FloatArray  # (n_networks,)
    network_hi: FloatArray
    network_flags: IntArray
    draws: IntArray  # (n_networks,) made; 0 where the interval is to first order
    seed: int
    notes: tuple[str, ...]

    def __post_init__(self) -> None:
        freeze(self)


def find_intervals(
    measured: MeasuredGraph, flow: NetworkFlow, blood: BloodSettings, settings: IntervalSettings
) -> ResistanceIntervals:
    """Bound every resistance.

    Parameters
    ----------
    measured : MeasuredGraph
        Radii and lengths with their doubt.
    flow : NetworkFlow
        Resistances at their medians, hematocrits and shares.
    blood : BloodSettings
        The viscosity law with its constants and their doubt.
    settings : IntervalSettings
        How, with how many draws, from which seed.

    Returns
    -------
    ResistanceIntervals

    Notes
    -----
    To first order ln R is normal with the variance that `NetworkFlow` states. Draws vary at once the radii along each
    segment (with their posterior covariance, in `vasohm.flow.drawn.PIECES` pieces), lengths, and what all segments
    share: pixel size, blur and its like, hematocrit, plasma viscosity; viscosity follows each radius, and flows part
    anew in each draw, with cells in each segment as in the solution and not parted anew. Resistances stay where they
    are in either way, at their medians: draws say how far the bounds lie from the median, and being free of it they do
    not depend on how the median is found (`vasohm.flow.medians`). Where radii are independent estimates and no
    posterior (`MeasuredGraph.noise_sign` -1), deviations are turned about (the basic bootstrap interval).

    The same seed gives the same draws: each network has numbers of its own, whatever the others do.

    References
    ----------
    JCGM 101:2008, Propagation of distributions using a Monte Carlo method, doi:10.59161/JCGM101-2008, 7.
    Davison AC, Hinkley DV (1997) Bootstrap methods and their application, doi:10.1017/CBO9780511802843, ch. 5.
    """
    segment_lo, segment_hi = ln_interval(
        flow.resistance_pa_s_m3, quadrature(flow.ln_resistance_random_se, flow.ln_resistance_shared_se)
    )
    own_se = quadrature(flow.network_ln_resistance_random_se, flow.network_ln_resistance_shared_se)
    network_lo, network_hi = ln_interval(flow.network_resistance_pa_s_m3, own_se)
    n = len(network_lo)
    draws, flags, notes = np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.int64), []
    wanted = _wanted(flow, settings)
    state = DrawnState(measured, flow.hematocrit, flow.resistance_pa_s_m3, flow.share)
    circuits = {int(k): _circuit(state, flow.terminals, int(k)) for k in np.flatnonzero(wanted)}
    made = {k: 0 if circuit is None else circuit.draws(settings.draws) for k, circuit in circuits.items()}
    flags[wanted] = int(Flag.FEWER_DRAWS)
    flags[[k for k, number in made.items() if number >= settings.draws]] = 0
    drawn = {k: circuit for k, circuit in circuits.items() if circuit is not None and made[k] >= LEAST_DRAWS}
    for k, of_segments, of_network in _draw(state, drawn, make_blood(blood), settings.seed, made):
        for place, low, high, value, ln_drawn in (
            (drawn[k].segment, segment_lo, segment_hi, flow.resistance_pa_s_m3, of_segments),
            (np.array([k]), network_lo, network_hi, flow.network_resistance_pa_s_m3, of_network[None]),
        ):
            low[place], high[place] = _bounds(value[place], measured.noise_sign * ln_drawn)
        draws[k] = made[k]
        flags[k] |= int(Flag.MONTE_CARLO)
    for number in sorted({made[k] for k in drawn}):
        which = ", ".join(str(k + 1) for k in sorted(drawn) if made[k] == number)
        notes.append(f"95 % intervals from {number} random draws (seed {settings.seed}): network {which}.")
    return ResistanceIntervals(
        segment_lo, segment_hi, network_lo, network_hi, flags, draws, settings.seed, tuple(notes)
    )


@dataclass(frozen=True, slots=True, eq=False)
class DrawnState:
    """An image's segments with one set of radii."""

    measured: MeasuredGraph
    hematocrit: FloatArray  # (n_segments,)
    resistance_pa_s_m3: FloatArray
    share: FloatArray


def ratio_bounds(
    before: DrawnState,
    after: DrawnState,
    terminals: Terminals,
    blood: Blood,
    asked: tuple[ResistanceIntervals, BoolArray],
) -> tuple[FloatArray, FloatArray]:
    """Bounds (n_networks,) of the 95 % interval of ln(R after / R before), off its median; NaN where nothing was drawn.

    Parameters
    ----------
    before, after : DrawnState
        The same vessels with two sets of radii; what errs in one errs in the other.
    terminals : Terminals
        Inlets and outlets of both.
    blood : Blood
        The viscosity law of both.
    asked : ResistanceIntervals and (n_networks,) bool array
        How often networks were drawn and from which seed; and which of them now.
    """
    intervals, wanted = asked
    low, high = (np.full(len(intervals.draws), np.nan) for _ in range(2))
    both = np.minimum(np.nan_to_num(before.share), np.nan_to_num(after.share))
    made = {int(k): int(intervals.draws[k]) for k in np.flatnonzero(wanted)}
    sides = [replace(state, share=both) for state in (before, after)]
    found = {k: _circuit(sides[0], terminals, k) for k in made}
    circuits = {k: circuit for k, circuit in found.items() if circuit is not None and circuit.segment.size}
    pairs = (_draw(side, circuits, blood, intervals.seed, made) for side in sides)
    for (k, _, ln_before), (_, _, ln_after) in zip(*pairs, strict=True):
        with np.errstate(invalid="ignore"):
            ln_ratio = before.measured.noise_sign * (ln_after - ln_before)
        bounds = _bounds(np.ones(1), ln_ratio[None, ~np.isnan(ln_ratio)])  # closed before and after: no ratio
        low[k], high[k] = np.log(bounds[0][0]), np.log(bounds[1][0])
    return low, high


def _draw(
    state: DrawnState, circuits: "Mapping[int, _Circuit]", blood: Blood, seed: int, draws: Mapping[int, int]
) -> Iterator[tuple[int, FloatArray, FloatArray]]:
    """By network: deviations of ln R of its segments (n, draws), and ln R of the network (draws,).

    Each network has random numbers of its own, whatever the others do.
    """
    if not circuits:
        return
    chosen = np.unique(np.concatenate([circuit.segment for circuit in circuits.values()]))
    pieces = cut_into_pieces(state.measured, blood, state.hematocrit, chosen)
    for k, circuit in circuits.items():
        numbers = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(k,)))
        own = pieces.only(np.searchsorted(chosen, circuit.segment))
        of_segments = draw_ln_resistance(own, numbers, draws[k])
        yield k, of_segments, _ln_network(circuit, state.resistance_pa_s_m3[circuit.segment], of_segments)


def relative_radius_se(flow: NetworkFlow) -> FloatArray:
    """Relative standard uncertainty (n_networks,) of hydraulic radii, mean square weighted by share; NaN without R."""
    n = len(flow.terminals.source)
    se_um = quadrature(flow.radius_hydraulic_random_se_um, flow.radius_hydraulic_shared_se_um)
    carries = np.nan_to_num(flow.share) > 0
    square = flow.share[carries] * np.square(se_um[carries] / flow.radius_hydraulic_um[carries])
    mean = np.sqrt(sum_by(flow.terminals.segment_network[carries], square, n))
    return np.where(np.isfinite(flow.network_resistance_pa_s_m3), mean, np.nan)


def _wanted(flow: NetworkFlow, settings: IntervalSettings) -> BoolArray:
    known = np.isfinite(flow.network_resistance_pa_s_m3)
    if settings.method == "auto":
        return known & ~(np.nan_to_num(relative_radius_se(flow)) <= FIRST_ORDER_UP_TO)
    return known & (settings.method == "monte-carlo")


def _bounds(value: FloatArray, ln_drawn: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Bounds (n,) of values at their medians, from (n, draws) deviations of their logarithm."""
    with np.errstate(invalid="ignore", over="ignore"):
        low, middle, high = np.quantile(ln_drawn, BOUNDS, axis=1) if ln_drawn.size else np.full((3, len(value)), np.nan)
        bounds = value * np.exp(low - middle), value * np.exp(high - middle)
    bounded = np.isfinite(bounds[0]) & np.isfinite(bounds[1])
    return np.where(bounded, bounds[0], np.nan), np.where(bounded, bounds[1], np.nan)


@dataclass(frozen=True, slots=True, eq=False)
class _Circuit:
    """The segments of one network that carry blood, and what its terminals give; nodes are those that are kept."""

    segment: IntArray  # among all
    plan: Elimination
    pressure_pa: FloatArray  # (n_kept,) NaN where not given
    inflow_m3_s: FloatArray  # (n_kept,)

    def draws(self, asked: int) -> int:
        """Number of draws that stays within what a network may cost."""
        products = self.plan.work + len(self.pressure_pa) ** 3
        return int(min(asked, MOST_PRODUCTS // products, MOST_RADII // (self.segment.size * PIECES)))


def _circuit(state: DrawnState, terminals: Terminals, network: int) -> _Circuit | None:
    """Plan how the network's inner nodes are taken out; None where that costs too much."""
    graph, boundary = state.measured.graph, make_boundary(terminals)
    segment = np.flatnonzero((terminals.segment_network == network) & (np.nan_to_num(state.share) > 0))
    ends = np.concatenate([graph.node_a[segment], graph.node_b[segment]])
    node, place = np.unique(ends, return_inverse=True)
    pressure, inflow = boundary.pressure_pa[node], boundary.inflow_m3_s[node]
    fixed = np.isfinite(pressure)
    levels, level = np.unique(pressure[fixed], return_inverse=True)
    keep = np.flatnonzero(fixed | (inflow != 0))
    number = np.arange(node.size)
    if len(levels) == 2 and keep.size == fixed.sum():  # one drop of pressure: each side is one node
        first = np.array([np.flatnonzero(fixed)[level == side][0] for side in range(2)])
        number[fixed], keep = first[level], first
    ends = number[place]
    try:
        plan = plan_elimination(
            (ends[: segment.size], ends[segment.size :]), node.size, keep, MOST_PRODUCTS / LEAST_DRAWS
        )
    except OverflowError:
        return None
    return _Circuit(segment, plan, pressure[keep], np.where(fixed, 0.0, inflow)[keep])


def _ln_network(circuit: _Circuit, resistance: FloatArray, ln_drawn: FloatArray) -> FloatArray:
    """Ln R (draws,) of the network, its segments deviating by `ln_drawn` (n, draws) from `resistance` (n,)."""
    unit = float(np.exp(np.log(resistance).mean()))
    each = max(1, SETS_AT_ONCE // circuit.plan.n_slots)
    found = []
    for first in range(0, ln_drawn.shape[1], each):
        conductance = np.exp(-ln_drawn[:, first : first + each]) * (unit / resistance)[:, None]
        found.append(_resistance_between(circuit, reduce_to_kept(circuit.plan, conductance), unit))
    with np.errstate(divide="ignore"):
        return np.log(np.concatenate(found) * unit)


def _resistance_between(circuit: _Circuit, conductance: FloatArray, unit: float) -> FloatArray:
    """Dissipated power over squared inflow (draws,), from conductances (draws, n_kept, n_kept) between terminals."""
    laplacian = -conductance
    own = np.arange(conductance.shape[1])
    laplacian[:, own, own] = conductance.sum(axis=2)
    pressure = np.tile(circuit.pressure_pa, (len(conductance), 1))
    free, fixed = np.flatnonzero(np.isnan(circuit.pressure_pa)), np.flatnonzero(np.isfinite(circuit.pressure_pa))
    if free.size:
        # a terminal that a draw closes altogether takes no flow: its equation is left out
        shut = laplacian[:, free, free] <= 0
        square = laplacian[:, free[:, None], free]
        square[:, np.arange(free.size), np.arange(free.size)] += shut
        right = circuit.inflow_m3_s[free] * unit - laplacian[:, free[:, None], fixed] @ circuit.pressure_pa[fixed]
        pressure[:, free] = np.linalg.solve(square, np.where(shut, 0.0, right)[:, :, None])[:, :, 0]
    net = (laplacian @ pressure[:, :, None])[:, :, 0]
    power, through = np.sum(pressure * net, axis=1), np.sum(np.maximum(net, 0.0), axis=1)
    return np.divide(power, through**2, out=np.full(len(power), np.inf), where=through > 0)
