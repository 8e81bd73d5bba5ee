"""From a measured graph with terminals to flow, pressure, shares and each network's resistance."""

from collections.abc import Hashable, Iterable
from dataclasses import dataclass, replace
from typing import cast

import numpy as np
import pandas as pd

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.errors import DomainError, NetworkError
from vasohm.flags import Flag
from vasohm.flow.circulation import NO_FLOW_SHARE, Circulation
from vasohm.flow.development import Motion, describe_motion, tube_hematocrit
from vasohm.flow.hematocrit import find_flow
from vasohm.flow.kirchhoff import solve_flows
from vasohm.flow.medians import ln_median_shift, pressure_drives
from vasohm.flow.poiseuille import SegmentResistances
from vasohm.flow.rheology import BloodSettings, make_blood
from vasohm.flow.terminals import Terminals
from vasohm.network.graph import NodeKind, VesselClass, VesselGraph
from vasohm.network.groups import sum_by
from vasohm.network.radius import MeasuredGraph
from vasohm.units import NL_MIN_PER_M3_S, PA_PER_MMHG

UNSAID_SHARE = 0.1  # of a network's resistance


@dataclass(frozen=True, slots=True, eq=False)
class NetworkFlow:
    """Hydraulics of all networks of one image; NaN where a thing does not apply. Standard uncertainties are of ln R."""

    terminals: Terminals
    # segments
    hematocrit: FloatArray  # (n_segments,)
    radius_hydraulic_um: FloatArray
    radius_hydraulic_random_se_um: FloatArray
    radius_hydraulic_shared_se_um: FloatArray
    viscosity_mpa_s: FloatArray  # at the hydraulic radius
    resistance_pa_s_m3: FloatArray
    ln_resistance_random_se: FloatArray
    ln_resistance_shared_se: FloatArray
    hematocrit_tube: FloatArray
    flow_nl_min: FloatArray  # from node_a to node_b
    motion: Motion
    share: FloatArray  # d ln R_network / d ln R_segment
    segment_flags: IntArray
    # nodes
    pressure_mmhg: FloatArray  # (n_nodes,)
    # networks
    network_resistance_pa_s_m3: FloatArray  # (n_networks,)
    network_ln_resistance_random_se: FloatArray
    network_ln_resistance_shared_se: FloatArray
    network_flow_nl_min: FloatArray
    network_flags: IntArray
    hematocrit_turns: FloatArray  # (n_networks,) until hematocrit and flow agreed; NaN where cells were not parted

    def __post_init__(self) -> None:
        freeze(self)


def solve_flow(measured: MeasuredGraph, terminals: Terminals, blood: BloodSettings) -> NetworkFlow:
    """Resistance of every segment and, with its terminals, of every network.

    Parameters
    ----------
    measured : MeasuredGraph
        Lengths, radii and their uncertainty.
    terminals : Terminals
        Inlets and outlets; a hematocrit given at a network's only inlet replaces that of `blood` there.
    blood : BloodSettings
        The viscosity law, with its constants, and the discharge hematocrit.

    Returns
    -------
    NetworkFlow

    Raises
    ------
    DomainError, PluginError
        See `vasohm.flow.rheology.make_blood`.
    NetworkError
        See `vasohm.flow.kirchhoff.solve_flows`.

    Notes
    -----
    A network's R is the power its segments dissipate over the square of the flow that enters it: with one pressure at
    all inlets and one at all outlets that is their difference over the flow. The shares w = R_i I_i² / (R I²) are
    d ln R / d ln R_i (exact for one drop of pressure, or flows given at all terminals) and sum to 1. The random part
    of var(ln R) is Σ w² var(ln R_i); what all segments share moves ln R by Σ w d ln R_i per cause.

    Segments stand at their medians, and so do their flows and the pressures. The network's R stands at its own median,
    off that of the segments together by `vasohm.flow.medians.ln_median_shift`; so does the flow of a network that
    pressures drive, which then is the drop of pressure over R.

    Where `blood` names a split law, cells part at branchings (`find_flow`). Intervals and shares hold the hematocrit of
    every segment where it has settled: how cells would part anew with other radii is left out of them.

    References
    ----------
    Cohn RM (1950) The resistance of an electrical network. Proc Am Math Soc 1:316-324,
    doi:10.1090/S0002-9939-1950-0035230-X.
    """
    state = find_flow(measured, terminals, blood, np.ones(measured.graph.n_segments))
    resistances, circulation = state.resistances, state.circulation
    random_se, shared = network_doubt(terminals, circulation, resistances)
    network_resistance, network_flow_m3_s = at_medians(measured, terminals, circulation, resistances)
    flow = circulation.flow_m3_s
    tube = (measured.length_um, resistances.radius_hydraulic_um, resistances.viscosity_mpa_s)
    motion = describe_motion(flow, tube, blood, drive_is_given(terminals)[terminals.segment_network])
    like_human_um = 2.0 * make_blood(blood).diameter_factor * resistances.radius_hydraulic_um
    flags = measured.segment_flags | resistances.flags | motion.flags | _flow_flags(measured.graph, flow)
    return NetworkFlow(
        terminals=terminals,
        hematocrit=resistances.hematocrit,
        radius_hydraulic_um=resistances.radius_hydraulic_um,
        radius_hydraulic_random_se_um=resistances.radius_hydraulic_random_se_um,
        radius_hydraulic_shared_se_um=resistances.radius_hydraulic_shared_se_um,
        viscosity_mpa_s=resistances.viscosity_mpa_s,
        resistance_pa_s_m3=resistances.resistance_pa_s_m3,
        ln_resistance_random_se=resistances.ln_random_se,
        ln_resistance_shared_se=np.sqrt(np.square(resistances.ln_shared).sum(axis=1)),
        hematocrit_tube=tube_hematocrit(like_human_um, resistances.hematocrit),
        flow_nl_min=flow * NL_MIN_PER_M3_S,
        motion=motion,
        share=circulation.share,
        segment_flags=flags,
        pressure_mmhg=circulation.pressure_pa / PA_PER_MMHG,
        network_resistance_pa_s_m3=network_resistance,
        network_ln_resistance_random_se=random_se,
        network_ln_resistance_shared_se=np.sqrt(np.square(shared).sum(axis=1)),
        network_flow_nl_min=network_flow_m3_s * NL_MIN_PER_M3_S,
        network_flags=circulation.network_flags,
        hematocrit_turns=state.hematocrit_turns,
    )


def tell_unsaid(measured: MeasuredGraph, flow: NetworkFlow) -> NetworkFlow:
    """Flag networks, meant as trees of one class each, in which vessels of no class hold much of the resistance.

    Not those whose terminals a person told: who knows where blood enters and leaves knows the network.
    """
    network = flow.terminals.segment_network
    n_networks = len(flow.network_flags)
    is_unsaid = measured.graph.vessel_class == VesselClass.NONE
    held = sum_by(network, np.where(is_unsaid, np.nan_to_num(flow.share), 0.0), n_networks)
    several = np.bincount(network, minlength=n_networks) > 1  # a vessel by itself mixes nothing
    by_shape = np.array(flow.terminals.source) == "auto"
    told = np.where(several & by_shape & (held > UNSAID_SHARE), int(Flag.CLASS_UNSAID), 0)
    return replace(flow, network_flags=flow.network_flags | told)


def drive_is_given(terminals: Terminals) -> BoolArray:
    """Whether a pressure or flow was given or estimated at a terminal of each network (n_networks,), not assumed."""
    given = (terminals.role != 0) & (np.isfinite(terminals.pressure_mmhg) | np.isfinite(terminals.flow_nl_min))
    return np.asarray(np.bincount(terminals.node_network[given], minlength=len(terminals.source)) > 0)


def _flow_flags(graph: VesselGraph, flow: FloatArray) -> IntArray:
    is_ring = graph.node_kind[graph.node_a] == NodeKind.LOOP
    loop = np.where((graph.node_a == graph.node_b) & ~is_ring, int(Flag.SELF_LOOP), 0)
    return loop | np.where(flow == 0, int(Flag.NO_FLOW), 0)


def at_medians(
    measured: MeasuredGraph, terminals: Terminals, circulation: Circulation, resistances: SegmentResistances
) -> tuple[FloatArray, FloatArray]:
    """Resistance and flow (n_networks,) of each network at their medians, from those of segments at theirs."""
    shift = ln_median_shift(measured.graph, terminals, circulation.boundary, resistances, circulation.share)
    factor = np.exp(measured.noise_sign * shift)
    flow = circulation.network_flow_m3_s
    by_pressure = pressure_drives(terminals, circulation.boundary)
    return circulation.network_resistance_pa_s_m3 * factor, np.where(by_pressure, flow / factor, flow)


def network_doubt(
    terminals: Terminals, circulation: Circulation, resistances: SegmentResistances
) -> tuple[FloatArray, FloatArray]:
    """Random standard uncertainty (n_networks,) of ln R and its change (n_networks, n_causes + 3) per shared cause."""
    n = len(terminals.source)
    known = np.isfinite(circulation.network_resistance_pa_s_m3)
    blank = np.where(known, 0.0, np.nan)
    carries = np.nan_to_num(circulation.share) > 0
    network, share = terminals.segment_network[carries], circulation.share[carries]
    random_se = np.sqrt(sum_by(network, np.square(share * resistances.ln_random_se[carries]), n))
    shared = [sum_by(network, share * cause, n) for cause in resistances.ln_shared[carries].T]
    return random_se + blank, np.stack(shared, axis=1) + blank[:, None]


@dataclass(frozen=True, slots=True, eq=False)
class SolvedNetwork:
    """What `solve_network` finds.

    `edges` has the given columns and `flow_nl_min` (positive from node_a to node_b), `resistance_share` (they sum to 1)
    and `pressure_drop_mmhg` (from node_a to node_b); `nodes` has `node` and `pressure_mmhg` (NaN in pieces that touch
    neither inlet nor outlet). `resistance_random_se` is relative, NaN where the segments' uncertainty was not given.
    """

    resistance_pa_s_m3: float
    resistance_random_se: float
    edges: pd.DataFrame
    nodes: pd.DataFrame


def solve_network(
    edges: pd.DataFrame,
    inlets: Hashable | Iterable[Hashable],
    outlets: Hashable | Iterable[Hashable],
    drive_mmhg: float = 1.0,
) -> SolvedNetwork:
    """Solve a network of resistances between its joined inlets and its joined outlets.

    Parameters
    ----------
    edges : DataFrame
        One row a segment: `node_a`, `node_b` (any labels), `resistance_pa_s_m3` (positive) and optionally
        `resistance_se`, the relative standard uncertainty of independent errors.
    inlets, outlets : label or iterable of labels
        A text or tuple is one label. All inlets share one pressure, all outlets another.
    drive_mmhg : float
        Pressure at the inlets above that at the outlets (which is 0), in mmHg, positive.

    Returns
    -------
    SolvedNetwork

    Raises
    ------
    NetworkError
        A column is missing, a terminal is in no segment or is inlet and outlet at once, or no way leads from the inlets
        to the outlets.
    DomainError
        A resistance or drive that is not positive and finite, or a negative uncertainty.

    References
    ----------
    Cohn RM (1950) The resistance of an electrical network. Proc Am Math Soc 1:316-324,
    doi:10.1090/S0002-9939-1950-0035230-X.
    """
    resistance, rel_se = _checked_edges(edges)
    _require_positive(np.array([drive_mmhg], dtype=np.float64), "drive_mmhg", "")
    ends, labels = _number_nodes(edges)
    at_inlet, at_outlet = _terminal_nodes(inlets, labels, "inlet"), _terminal_nodes(outlets, labels, "outlet")
    both = np.intersect1d(at_inlet, at_outlet)
    if both.size:
        msg = f"node {labels[both[0]]!r} is inlet and outlet at once; give it one role."
        raise NetworkError(msg)
    fixed = np.full(len(labels), np.nan)
    fixed[at_inlet], fixed[at_outlet] = drive_mmhg * PA_PER_MMHG, 0.0
    pressure, flow = solve_flows(ends, resistance, fixed, np.zeros(len(labels)))
    net = np.bincount(ends[0], flow, len(labels)) - np.bincount(ends[1], flow, len(labels))
    through = float(net[at_inlet].sum())
    if not through > 0:
        msg = f"no way leads from the inlets to the outlets of these {len(edges)} segments; check the node labels."
        raise NetworkError(msg)
    flow = np.where(np.abs(flow) <= NO_FLOW_SHARE * through, 0.0, flow)
    power = resistance * flow**2
    share = power / power.sum()
    solved = edges.assign(
        flow_nl_min=flow * NL_MIN_PER_M3_S,
        resistance_share=share,
        pressure_drop_mmhg=resistance * flow / PA_PER_MMHG,
    )
    return SolvedNetwork(
        resistance_pa_s_m3=drive_mmhg * PA_PER_MMHG / through,
        resistance_random_se=float(np.sqrt(np.sum(np.square(share * rel_se)))),
        edges=solved,
        nodes=pd.DataFrame({"node": labels, "pressure_mmhg": pressure / PA_PER_MMHG}),
    )


def _checked_edges(edges: pd.DataFrame) -> tuple[FloatArray, FloatArray]:
    lacking = [name for name in ("node_a", "node_b", "resistance_pa_s_m3") if name not in edges]
    if lacking:
        msg = f"edges lacks {', '.join(lacking)}; it has {', '.join(map(str, edges.columns)) or 'no columns'}."
        raise NetworkError(msg)
    resistance = edges["resistance_pa_s_m3"].to_numpy(dtype=np.float64)
    _require_positive(resistance, "resistance_pa_s_m3", " in row {row} of edges")
    if "resistance_se" not in edges:
        return resistance, np.full(len(edges), np.nan)
    rel_se = edges["resistance_se"].to_numpy(dtype=np.float64)
    if (rel_se < 0).any():
        row = int(np.argmax(rel_se < 0))
        msg = f"resistance_se is {rel_se[row]} in row {row} of edges; a standard uncertainty is 0 or more."
        raise DomainError(msg)
    return resistance, rel_se


def _require_positive(value: FloatArray, name: str, place: str) -> None:
    wrong = ~(np.isfinite(value) & (value > 0))
    if wrong.any():
        row = int(np.argmax(wrong))
        msg = f"{name} is {value[row]}{place.format(row=row)}; it must be positive and finite."
        raise DomainError(msg)


def _number_nodes(edges: pd.DataFrame) -> tuple[tuple[IntArray, IntArray], list[Hashable]]:
    code, labels = pd.factorize(pd.concat([edges["node_a"], edges["node_b"]], ignore_index=True))
    if (code < 0).any():
        row = int(np.argmax(code < 0)) % len(edges)
        msg = f"row {row} of edges has an empty node_a or node_b; give every node a label."
        raise NetworkError(msg)
    code = np.asarray(code, dtype=np.int64)
    return (code[: len(edges)], code[len(edges) :]), list(labels)


def _terminal_nodes(given: Hashable | Iterable[Hashable], labels: list[Hashable], name: str) -> IntArray:
    is_group = isinstance(given, Iterable) and not isinstance(given, str | tuple)
    wanted = list(cast("Iterable[Hashable]", given)) if is_group else [cast("Hashable", given)]
    if not wanted:
        msg = f"no {name} was given; name at least one node."
        raise NetworkError(msg)
    place = {label: node for node, label in enumerate(labels)}
    for label in wanted:
        if label not in place:
            msg = f"{name} {label!r} is at no segment's end; name a node of node_a or node_b."
            raise NetworkError(msg)
    return np.unique([place[label] for label in wanted])
