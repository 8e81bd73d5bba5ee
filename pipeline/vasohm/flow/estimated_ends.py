"""Flows at ends that nobody knows, so that wall shear and pressures come nearest to what is usual in such vessels."""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.sparse import block_array, coo_array, csc_array, csr_array, diags_array
from scipy.sparse.linalg import splu

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.errors import DomainError, NetworkError
from vasohm.flags import Flag
from vasohm.flow.circulation import entering_hematocrit
from vasohm.flow.kirchhoff import solve_flows
from vasohm.flow.poiseuille import SegmentResistances, measure_resistance
from vasohm.flow.rheology import BloodSettings, make_blood
from vasohm.flow.terminals import ESTIMATED, Terminals, end_radius, open_ends
from vasohm.network.radius import MeasuredGraph
from vasohm.units import M_PER_UM, NL_MIN_PER_M3_S, PA_PER_MMHG, PA_S_PER_MPA_S

FIRST_DOUBLING, MOST_DOUBLINGS = 3, 40  # of the weight of shear, from an eighth of the pressures' to its own
MOST_TURNS = 50  # of directions at one weight; 2 to 10 are usual
STILL = 1e-9  # of the largest drop of pressure, or of the largest flow: a smaller one has no direction


@dataclass(frozen=True, slots=True)
class EndTargets:
    """What wall shear and pressures are drawn to, by `VesselClass` (the first is for vessels without a class)."""

    wall_shear_pa: tuple[float, ...]
    wall_shear_sd_pa: float  # how far true ones lie from the target: the weight is its square's inverse
    pressure_mmhg: tuple[float, ...]
    pressure_sd_mmhg: float


@dataclass(frozen=True, slots=True, eq=False)
class EndProblem:
    """One network whose ends are not all known, in SI units."""

    ends: tuple[IntArray, IntArray]  # (n_segments,) node each segment leaves and reaches
    resistance: FloatArray  # (n_segments,) positive and finite
    shear_per_drop: FloatArray  # (n_segments,) wall shear over the drop of pressure along the segment
    length: FloatArray  # (n_segments,) the weight of a segment's misfit
    shear_target: FloatArray  # (n_segments,) size, 0 or more
    shear_sd: float
    pressure_target: FloatArray  # (n_nodes,)
    pressure_sd: float
    fixed_pressure: FloatArray  # (n_nodes,) NaN where not given
    inflow: FloatArray  # (n_nodes,) given flow from outside; NaN where it is not known
    held: FloatArray  # (n_segments,) +1 or -1 where the direction of flow is known, else 0
    start: FloatArray  # (n_segments,) directions to begin with where targets and given values tell none

    def __post_init__(self) -> None:
        freeze(self)


def estimate_ends(
    measured: MeasuredGraph, terminals: Terminals, blood: BloodSettings, targets: EndTargets | None
) -> Terminals:
    """Give every open end of the networks marked ``estimated`` a flow.

    Parameters
    ----------
    measured : MeasuredGraph
        Lengths and radii.
    terminals : Terminals
        From `place_terminals`; pressures, flows and roles that they give are kept.
    blood : BloodSettings
        The viscosity law and the hematocrit.
    targets : EndTargets or None
        What the study says; None where it does not ask for estimates.

    Returns
    -------
    Terminals
        With role and flow at each open end of those networks, and one pressure where none was given. A network that
        has fewer than two open ends, or whose equations have no solution, goes back to ``none``; so does one in which
        blood would leave by a given inlet or enter by a given outlet, which `notes` tell.

    Raises
    ------
    DomainError
        Networks are to be estimated and there are no targets.

    Notes
    -----
    Pressures p and wall shears τ minimise Σ_k w_k ((p_k - p0_k) / s_p)² + Σ_j l_j ((τ_j ∓ τ0_j) / s_τ)², l_j being a
    segment's length and w_k half of the lengths that meet at a node, while the flows balance at every node that is not
    an unknown end. See `nearest_pressures` for the directions. The resistance of such a network is the power that its
    segments dissipate over the square of the estimated total inflow; its interval holds the doubt of radii, lengths,
    scale and blood, not that of the estimate.

    References
    ----------
    Fry BC, Lee J, Smith NP, Secomb TW (2012) Estimation of blood flow rates in large microvascular networks.
    Microcirculation 19:530-538, doi:10.1111/j.1549-8719.2012.00184.x.
    """
    wanted = [network for network, source in enumerate(terminals.source) if source == ESTIMATED]
    if not wanted:
        return terminals
    if targets is None:
        msg = 'terminals = "estimate" needs targets: give target_wall_shear_pa and target_pressure_mmhg in [network].'
        raise DomainError(msg)
    hematocrit = entering_hematocrit(terminals, blood.hematocrit)
    segments = measure_resistance(measured, make_blood(blood), hematocrit, np.ones(measured.graph.n_segments))
    role, pressure, flow = (np.array(a) for a in (terminals.role, terminals.pressure_mmhg, terminals.flow_nl_min))
    source, flags, notes = list(terminals.source), np.array(terminals.network_flags), terminals.notes
    for network in wanted:
        nodes = np.flatnonzero(terminals.node_network == network)
        problem = _problem(measured, terminals, segments, targets, nodes)
        try:
            level, inflow = _solve(problem)
        except (RuntimeError, NetworkError):  # one end alone, or a part that closed segments cut off
            source[network], flags[network], role[nodes] = "none", int(Flag.NO_TERMINALS), 0
            continue
        turned = _turned_round(measured, role, nodes, inflow)
        if turned:
            source[network], flags[network], role[nodes] = "none", int(Flag.NO_TERMINALS), 0
            notes += turned
            continue
        unknown = np.isnan(problem.inflow)
        bare = unknown & (role[nodes] == 0)
        role[nodes[bare]] = np.sign(inflow[bare]).astype(np.int64)
        flow[nodes[unknown]] = np.abs(inflow[unknown]) * NL_MIN_PER_M3_S
        if np.isnan(pressure[nodes]).all():  # one pressure keeps the level; at the largest outflow rounding is least
            lowest = int(np.argmin(inflow))
            pressure[nodes[lowest]], flow[nodes[lowest]] = level[lowest] / PA_PER_MMHG, np.nan
    return replace(
        terminals,
        role=role,
        pressure_mmhg=pressure,
        flow_nl_min=flow,
        source=tuple(source),
        network_flags=flags,
        notes=notes,
    )


def _turned_round(measured: MeasuredGraph, role: IntArray, nodes: IntArray, inflow: FloatArray) -> tuple[str, ...]:
    """Tell which given inlets blood would leave by, and which given outlets it would enter by."""
    graph = measured.graph
    against = role[nodes] * inflow < -STILL * np.abs(inflow).max(initial=0.0)
    return tuple(
        f"{'inlet' if role[node] > 0 else 'outlet'} at x {graph.node_x_px[node]:g}, y {graph.node_y_px[node]:g} px: "
        f"by the estimate of unknown ends blood would {'leave' if role[node] > 0 else 'enter'} there, so its network "
        "gets no resistance; check this role and the targets, or give pressures or flows."
        for node in nodes[against]
    )


def _problem(
    measured: MeasuredGraph, terminals: Terminals, segments: SegmentResistances, targets: EndTargets, nodes: IntArray
) -> EndProblem:
    graph = measured.graph
    place = np.full(graph.n_nodes, -1)
    place[nodes] = np.arange(nodes.size)
    used = np.flatnonzero((place[graph.node_a] >= 0) & np.isfinite(segments.resistance_pa_s_m3))
    a, b = place[graph.node_a[used]], place[graph.node_b[used]]
    resistance = segments.resistance_pa_s_m3[used]
    radius_m = segments.radius_hydraulic_um[used] * M_PER_UM
    shear_per_flow = 4.0 / np.pi * segments.viscosity_mpa_s[used] * PA_S_PER_MPA_S / radius_m**3
    role, is_open = terminals.role[nodes], open_ends(graph)[nodes]
    fixed = terminals.pressure_mmhg[nodes] * PA_PER_MMHG
    told = role * terminals.flow_nl_min[nodes] / NL_MIN_PER_M3_S
    inflow = np.where(is_open & np.isnan(fixed), told, 0.0)
    kind = graph.vessel_class[used]
    length = measured.length_um[used]
    pressure_target = np.array(targets.pressure_mmhg) * PA_PER_MMHG
    at_node = np.bincount(np.concatenate([a, b]), np.tile(length, 2), nodes.size)
    of_segments = np.tile(pressure_target[kind] * length, 2)
    mean_target = np.bincount(np.concatenate([a, b]), of_segments, nodes.size) / np.where(at_node > 0, at_node, 1.0)
    widest = np.argmax(np.where(is_open, np.nan_to_num(end_radius(measured)[nodes]), -1.0))
    drive = np.where(is_open, np.where(np.arange(nodes.size) == widest, 1.0, 0.0), np.nan)
    _, start = solve_flows((a, b), resistance, drive, np.zeros(nodes.size))
    return EndProblem(
        ends=(a, b),
        resistance=resistance,
        shear_per_drop=shear_per_flow / resistance,
        length=length,
        shear_target=np.array(targets.wall_shear_pa)[kind],
        shear_sd=targets.wall_shear_sd_pa,
        pressure_target=mean_target,
        pressure_sd=targets.pressure_sd_mmhg * PA_PER_MMHG,
        fixed_pressure=fixed,
        inflow=inflow,
        held=np.sign(role[a] * is_open[a] - role[b] * is_open[b]).astype(np.float64),
        start=np.sign(start),
    )


def _solve(problem: EndProblem) -> tuple[FloatArray, FloatArray]:
    """Pressure at the nodes, and flow from outside into each, balanced at all that are no unknown end."""
    unknown = np.isnan(problem.inflow)
    if np.sum(unknown | (problem.inflow != 0) | np.isfinite(problem.fixed_pressure)) < 2:
        raise NetworkError("blood cannot enter and leave by one end")
    pressure = nearest_pressures(problem)
    fixed = np.where(unknown, pressure, problem.fixed_pressure)
    level, flow = solve_flows(problem.ends, problem.resistance, fixed, np.where(unknown, 0.0, problem.inflow))
    n = len(fixed)
    return level, np.bincount(problem.ends[0], flow, n) - np.bincount(problem.ends[1], flow, n)


def nearest_pressures(problem: EndProblem) -> FloatArray:
    """Pressures (n_nodes,) that bring wall shear and pressure nearest to their targets.

    Raises
    ------
    RuntimeError
        The equations are singular: a part of the network has neither an unknown end nor a given pressure.

    Notes
    -----
    The sizes of shear have targets, their directions do not. As published, shear begins with little weight, which is
    doubled up to its whole; at each weight the pressures are found for the last directions and the directions taken
    from the pressures until they stay (each such turn lowers the misfit or leaves it, so they come to rest, if not at
    the best of all directions). The first directions are those of pressures that have no regard to shear; where
    pressure targets and given ends tell none, of blood that enters by the widest end and leaves by all others.
    A uniform target of pressure cannot tell a flow from its mirror image: then directions as a whole are a guess,
    though the resistance is the same either way. One sparse factorisation a weight (Lagrange multipliers for the
    balance of flows), one solution a turn.
    """
    alone = _Nearest(problem, 0.0)
    pressure = alone.pressure(problem.held)
    direction = _directions(problem, pressure)
    stiffer = np.log2(_Nearest.stiffness(problem))
    doublings = int(np.clip(np.ceil(stiffer) + FIRST_DOUBLING, 0, MOST_DOUBLINGS))
    for step in range(doublings, -1, -1):
        nearest = _Nearest(problem, 0.5**step)
        for _ in range(MOST_TURNS):
            pressure = nearest.pressure(direction)
            found = _directions(problem, pressure)
            if np.array_equal(found, direction):
                break
            direction = found
    return pressure


def _directions(problem: EndProblem, pressure: FloatArray) -> FloatArray:
    drop = pressure[problem.ends[0]] - pressure[problem.ends[1]]
    least = STILL * max(float(np.abs(pressure).max(initial=0.0)), problem.pressure_sd)
    found = np.where(np.abs(drop) > least, np.sign(drop), 0.0)
    return np.where(problem.held != 0, problem.held, found if found.any() else problem.start)


class _Nearest:
    """The least-squares problem at one weight of shear, factorised; multipliers keep the flows balanced."""

    def __init__(self, problem: EndProblem, shear_weight: float) -> None:
        a, b = problem.ends
        n = len(problem.fixed_pressure)
        self.problem = problem
        self.free = np.flatnonzero(np.isnan(problem.fixed_pressure))
        segment = np.arange(a.size)
        signs = np.repeat([1.0, -1.0], a.size)
        self.drop = csr_array(coo_array((signs, (np.tile(segment, 2), np.concatenate([a, b]))), shape=(a.size, n)))
        unit = problem.pressure_sd**2 / problem.length.sum()  # keeps the entries near 1
        self.per_shear = unit * shear_weight * problem.length * problem.shear_per_drop / problem.shear_sd**2
        self.per_pressure = unit * 0.5 * (abs(self.drop).T @ problem.length) / problem.pressure_sd**2
        pull = self.drop.T @ diags_array(self.per_shear * problem.shear_per_drop) @ self.drop
        balance = self.drop.T @ diags_array(1.0 / problem.resistance) @ self.drop
        kept = self.free[~np.isnan(problem.inflow[self.free])]
        scale = 1.0 / balance.diagonal()[kept]
        self.balance = diags_array(scale) @ csr_array(balance)[kept]
        self.inflow = scale * problem.inflow[kept]
        self.pull = csr_array(pull + diags_array(self.per_pressure))[self.free]
        square, sides = (csr_array(csc_array(part)[:, self.free]) for part in (self.pull, self.balance))
        blocks: list[list[Any]] = [[square, sides.T], [sides, None]]
        self.factors = splu(csc_array(block_array(blocks)))

    @staticmethod
    def stiffness(problem: EndProblem) -> float:
        """How much more a drop of pressure costs by its shear than by the pressures, over all segments."""
        shear = np.sum(problem.length * np.square(problem.shear_per_drop / problem.shear_sd))
        return float(shear / np.sum(problem.length / problem.pressure_sd**2))

    def pressure(self, direction: FloatArray) -> FloatArray:
        """Pressures (n_nodes,) nearest to the targets for these directions of flow."""
        problem = self.problem
        fixed = np.nan_to_num(problem.fixed_pressure)
        shear = self.drop.T @ (self.per_shear * direction * problem.shear_target)
        right = (shear + self.per_pressure * problem.pressure_target)[self.free] - self.pull @ fixed
        found = self.factors.solve(np.concatenate([right, self.inflow - self.balance @ fixed]))
        pressure = np.array(problem.fixed_pressure)
        pressure[self.free] = found[: self.free.size]
        return pressure
