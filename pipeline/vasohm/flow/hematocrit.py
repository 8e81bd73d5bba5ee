"""Hematocrit and flow that agree with each other: cells part with the flow, and viscosity follows the cells."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.flow.circulation import Circulation, circulate, entering_hematocrit
from vasohm.flow.phase_separation import SPLIT_LAWS, SplitLaw, Stream, carry_cells
from vasohm.flow.poiseuille import SegmentResistances, measure_resistance
from vasohm.flow.rheology import Blood, BloodSettings, make_blood
from vasohm.flow.terminals import Terminals
from vasohm.network.graph import VesselGraph
from vasohm.network.radius import MeasuredGraph

AGREEMENT = 1e-6  # of hematocrits, at which a network has settled: far below what any is known to
LEAST_FLOW_SHARE = 1e-6  # of the network's flow: what carries less may turn back and forth and does not count
MOST_TURNS = 300  # 10 in trees, 50 to 120 in meshes; one that swings longer between states has no settled one
LEAST_STEP = 1e-3  # of the way to the new hematocrit, however often a segment has overshot
MOST_ROUNDS = 8  # of whole resistances and hematocrits: 2 or 3 are usual
ROUND_AGREEMENT = 1e-5  # of hematocrits between two rounds
GROWTH = 1.2  # of the step after each turn in the same direction


@dataclass(frozen=True, slots=True, eq=False)
class Settled:
    """Hematocrits and the circulation that they belong to."""

    hematocrit: FloatArray  # (n_segments,) the start's where nothing flows
    resistance_pa_s_m3: FloatArray  # (n_segments,) that the circulation was found with
    circulation: Circulation
    turns: IntArray  # (n_networks,) after which the network had settled; -1 where it never did

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class FlowState:
    """What segments resist, what flows through them, and how long their hematocrits took to agree with it."""

    resistances: SegmentResistances
    circulation: Circulation
    hematocrit_turns: FloatArray  # (n_networks,) NaN where cells were not parted, or found no state

    def __post_init__(self) -> None:
        freeze(self)


def find_flow(
    measured: MeasuredGraph, terminals: Terminals, blood: BloodSettings, radius_factor: FloatArray
) -> FlowState:
    """Resistances, flows and hematocrits of one image that agree with each other.

    Parameters
    ----------
    measured : MeasuredGraph
        Lengths, radii and their uncertainty.
    terminals : Terminals
        Inlets and outlets, with the hematocrit that enters where they give one.
    blood : BloodSettings
        Law, hematocrit that enters elsewhere, and how cells part, if they do.
    radius_factor : (n_segments,) array
        Factor on all radii of a segment; 1 leaves them as measured.

    Returns
    -------
    FlowState
        NaN in networks whose hematocrit found no state, which are flagged. Segments through which nothing flows keep
        the hematocrit that enters their network.

    Raises
    ------
    DomainError, PluginError
        See `vasohm.flow.rheology.make_blood`.
    NetworkError
        See `vasohm.flow.kirchhoff.solve_flows`.
    """
    made = make_blood(blood)
    hematocrit = entering_hematocrit(terminals, blood.hematocrit)
    resistances = measure_resistance(measured, made, hematocrit, radius_factor)
    if blood.split_law is None:
        circulation = circulate(measured.graph, resistances.resistance_pa_s_m3, terminals)
        return FlowState(resistances, circulation, np.full(len(terminals.source), np.nan))
    entering = np.where(np.isfinite(terminals.hematocrit), terminals.hematocrit, blood.hematocrit)
    total = np.zeros(len(terminals.source))
    for _ in range(MOST_ROUNDS):
        radius_um = resistances.radius_hydraulic_um
        settled = settle_hematocrit(
            measured.graph,
            terminals,
            SPLIT_LAWS[blood.split_law],
            resistance_of=_at_hydraulic_radius(made, resistances),
            radius_um=radius_um,
            entering_hematocrit=entering,
            start=hematocrit,
        )
        moved = np.abs(settled.hematocrit - hematocrit) > ROUND_AGREEMENT
        moved &= _carries(settled.circulation, terminals.segment_network)
        moving = np.bincount(terminals.segment_network[moved], minlength=len(terminals.source)) > 0
        hematocrit, total = settled.hematocrit, total + settled.turns
        if not np.any(moving & (settled.turns >= 0)):
            break
        resistances = measure_resistance(measured, made, hematocrit, radius_factor)
    lost = (settled.turns < 0) | moving
    flows = np.isfinite(settled.circulation.network_resistance_pa_s_m3)
    turns = np.where(flows & ~lost, total, np.nan)
    known = replace(resistances, hematocrit=hematocrit, resistance_pa_s_m3=settled.resistance_pa_s_m3)
    if not lost.any():
        return FlowState(known, settled.circulation, turns)
    return FlowState(*_blank(known, settled.circulation, terminals, lost), turns)


def _at_hydraulic_radius(blood: Blood, resistances: SegmentResistances) -> Callable[[FloatArray], FloatArray]:
    """Resistances at other hematocrits, to first order: viscosity moves as it does at the hydraulic radius."""
    known = np.isfinite(resistances.resistance_pa_s_m3)
    radius_um = np.where(known, resistances.radius_hydraulic_um, 1.0)
    per_viscosity = resistances.resistance_pa_s_m3 / blood.viscosity(radius_um, resistances.hematocrit)

    def resistance_of(hematocrit: FloatArray) -> FloatArray:
        return np.asarray(np.where(known, per_viscosity * blood.viscosity(radius_um, hematocrit), np.nan))

    return resistance_of


def _blank(
    resistances: SegmentResistances, circulation: Circulation, terminals: Terminals, lost: BoolArray
) -> tuple[SegmentResistances, Circulation]:
    """Take all numbers out of the lost networks and flag them."""
    by_segment = np.where(lost[terminals.segment_network], np.nan, 0.0)
    by_node, by_network = np.where(lost[terminals.node_network], np.nan, 0.0), np.where(lost, np.nan, 0.0)
    return replace(
        resistances,
        hematocrit=resistances.hematocrit + by_segment,
        resistance_pa_s_m3=resistances.resistance_pa_s_m3 + by_segment,
        ln_random_se=resistances.ln_random_se + by_segment,
        ln_shared=resistances.ln_shared + by_segment[:, None],
        radius_hydraulic_um=resistances.radius_hydraulic_um + by_segment,
        radius_hydraulic_random_se_um=resistances.radius_hydraulic_random_se_um + by_segment,
        radius_hydraulic_shared_se_um=resistances.radius_hydraulic_shared_se_um + by_segment,
        viscosity_mpa_s=resistances.viscosity_mpa_s + by_segment,
    ), replace(
        circulation,
        pressure_pa=circulation.pressure_pa + by_node,
        flow_m3_s=circulation.flow_m3_s + by_segment,
        share=circulation.share + by_segment,
        network_flow_m3_s=circulation.network_flow_m3_s + by_network,
        network_resistance_pa_s_m3=circulation.network_resistance_pa_s_m3 + by_network,
        network_flags=circulation.network_flags | np.where(lost, int(Flag.HEMATOCRIT_UNSETTLED), 0),
    )


def settle_hematocrit(
    graph: VesselGraph,
    terminals: Terminals,
    law: SplitLaw,
    *,
    resistance_of: Callable[[FloatArray], FloatArray],
    radius_um: FloatArray,
    entering_hematocrit: FloatArray,
    start: FloatArray,
) -> Settled:
    """Part the cells at diverging branchings until flow and hematocrit agree.

    Parameters
    ----------
    graph : VesselGraph
        Which segments meet where.
    terminals : Terminals
        Inlets and outlets; a network that lacks either keeps the hematocrits it starts with.
    law : SplitLaw
        How cells part.
    resistance_of : function
        Resistances (n_segments,) in Pa·s/m³ at given hematocrits (n_segments,).
    radius_um : (n_segments,) array
        By which cells part.
    entering_hematocrit : (n_nodes,) array
        Of the blood that enters at each terminal.
    start : (n_segments,) array
        Hematocrits to begin with; the nearer, the fewer turns.

    Returns
    -------
    Settled
        Cells are conserved at every node to rounding, with the flows of the same circulation.

    Notes
    -----
    In each turn the flows follow from the hematocrits and new hematocrits from the flows; a segment goes the whole way
    to its new one, or half as far as before where the way has turned round. A network has settled where no segment's
    hematocrit is further off than `AGREEMENT`. Several states may agree with themselves;
    the one found is next to the start.

    References
    ----------
    Pries AR, Secomb TW, Gaehtgens P, Gross JF (1990) Blood flow in microvascular networks: experiments and simulation.
    Circ Res 67:826-834, doi:10.1161/01.RES.67.4.826.
    """
    n, of_segment = len(terminals.source), terminals.segment_network
    hematocrit = np.array(start, dtype=np.float64)
    turns, step, last = np.full(n, -1), np.ones(hematocrit.shape), np.zeros(hematocrit.shape)
    feeding = entering_hematocrit
    for turn in range(MOST_TURNS):
        resistance = resistance_of(hematocrit)
        circulation = circulate(graph, resistance, terminals)
        stream = _stream(graph, terminals, circulation, radius_um, entering_hematocrit)
        carried, feeding = carry_cells(stream, law, feeding)
        change = np.where(np.isfinite(carried), carried - hematocrit, 0.0)
        counts = _carries(circulation, of_segment)
        off = np.zeros(n)
        np.maximum.at(off, of_segment[counts], np.abs(change[counts]))
        turns = np.where(off > AGREEMENT, -1, np.where(turns < 0, turn + 1, turns))
        if np.all(turns >= 0):
            break
        turned = change * last < 0
        step = np.where(turned, np.maximum(0.5 * step, LEAST_STEP), np.minimum(GROWTH * step, 1.0))
        last = change
        hematocrit = hematocrit + step * change
    return Settled(np.where(np.isfinite(carried), carried, hematocrit), resistance, circulation, turns)


def _carries(circulation: Circulation, of_segment: IntArray) -> BoolArray:
    """Whether enough flows through each segment (n_segments,) that its hematocrit must settle."""
    least = LEAST_FLOW_SHARE * np.nan_to_num(circulation.network_flow_m3_s)[of_segment]
    return np.asarray(np.abs(np.nan_to_num(circulation.flow_m3_s)) > least)


def _stream(
    graph: VesselGraph,
    terminals: Terminals,
    circulation: Circulation,
    radius_um: FloatArray,
    entering_hematocrit: FloatArray,
) -> Stream:
    return Stream(
        ends=(graph.node_a, graph.node_b),
        flow=circulation.flow_m3_s,
        pressure=circulation.pressure_pa,
        is_terminal=terminals.role != 0,
        entering_hematocrit=entering_hematocrit,
        diameter_um=2.0 * np.where(np.isfinite(radius_um) & (radius_um > 0), radius_um, 1.0),
    )
