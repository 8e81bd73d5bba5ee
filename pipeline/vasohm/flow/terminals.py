"""Where blood enters and leaves each network."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.image.disc import OpticDisc
from vasohm.network.along import arc_shares
from vasohm.network.graph import NodeKind, VesselClass, VesselGraph, label_networks
from vasohm.network.groups import mean_by, sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph

REACH_PX = 10.0  # a terminal takes an end or rim node no further away
MARGIN_DD = 0.25  # ends no further than this many disc diameters outside the optic disc's margin come out of the disc
TRUNK_SHARE = 0.5  # of the radius of a tree's widest end there; narrower ones are twigs that end at the disc
ROLES = {"inlet": 1, "outlet": -1}
ESTIMATED = "estimated"  # source of networks whose ends `vasohm.flow.estimated_ends` is to find, or has found


@dataclass(frozen=True, slots=True)
class NetworkSettings:
    """Which terminals are used, and the pressure between inlets and outlets where they say none."""

    terminals: Literal["auto", "file", "none", "estimate"]
    drive_mmhg: float


@dataclass(frozen=True, slots=True)
class TerminalPoint:
    """One row of a terminals file; None where a cell is empty.

    Flow is positive into the network at an inlet and out of it at an outlet. A pressure rules out a flow.
    """

    x_px: float
    y_px: float
    role: Literal["inlet", "outlet"]
    pressure_mmhg: float | None
    flow_nl_min: float | None
    hematocrit: float | None


@dataclass(frozen=True, slots=True, eq=False)
class Terminals:
    """Inlets and outlets by node, and how each network came by them."""

    node_network: IntArray  # (n_nodes,) network index of each node, from 0
    segment_network: IntArray  # (n_segments,)
    role: IntArray  # (n_nodes,) +1 inlet, -1 outlet, 0 neither
    pressure_mmhg: FloatArray  # (n_nodes,) NaN where not given
    flow_nl_min: FloatArray  # (n_nodes,) NaN where not given
    hematocrit: FloatArray  # (n_nodes,) NaN where not given
    source: tuple[str, ...]  # per network: file | auto | none | estimated
    network_flags: IntArray  # (n_networks,)
    notes: tuple[str, ...]  # terminals left out, or contradicted by an estimate, by position
    flags: Flag  # of the image
    drive_mmhg: float  # between inlets and outlets where no pressure and no flow is given

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class _Given:
    """What the points say, by node."""

    role: IntArray
    pressure_mmhg: FloatArray
    flow_nl_min: FloatArray
    hematocrit: FloatArray
    notes: tuple[str, ...]


def place_terminals(
    measured: MeasuredGraph,
    points: Sequence[TerminalPoint],
    settings: NetworkSettings,
    disc: OpticDisc | None = None,
) -> Terminals:
    """Give each network its inlets and outlets.

    Parameters
    ----------
    measured : MeasuredGraph
        Its node positions are matched with the points; its radii and classes, and the disc, tell the root of a tree.
    points : sequence of TerminalPoint
        Each takes the nearest end or rim node within `REACH_PX` (the lower index where two are equally near); one that
        finds none, or whose node is taken already, is left out and told in `notes`.
    settings : NetworkSettings
        ``file`` uses the points alone and ``none`` nothing. ``auto`` uses the points where there are any; else the
        root of each tree is its inlet and its other ends are outlets, the other way round where more than half of the
        tree's length is venule. A network with loops shows no inlet by its shape and gets none.
        ``estimate`` does as ``auto``, and marks for `vasohm.flow.estimated_ends` the networks that have an end of
        which neither the points nor the shape say anything.
    disc : OpticDisc, optional
        Where the vessels of a retina come from.

    Returns
    -------
    Terminals

    Notes
    -----
    Without a disc the root of a tree is its widest end. With one it is the end nearest to the disc, the widest where
    several are equally near. Trunks that come out of the disc apart from each other are branches of one central vessel
    and stand under its pressure: all ends inside the disc or at most `MARGIN_DD` disc diameters off its margin, and at
    least `TRUNK_SHARE` times as wide as the widest of them, are roots together. A tree that ends nowhere else has the
    widest of its ends as root. The resistance of a tree with one root is the same whatever its class.
    """
    node_network, segment_network = label_networks(measured.graph)
    n_networks = int(segment_network.max(initial=-1)) + 1
    by_shape = settings.terminals in {"auto", "estimate"} and not points
    given = _match(measured, () if settings.terminals == "none" else points)
    role, mesh = given.role, np.zeros(n_networks, dtype=bool)
    if by_shape:
        role, mesh = _roles_by_shape(measured, (node_network, segment_network, n_networks), disc)
    has = [np.bincount(node_network[role == sign], minlength=n_networks) > 0 for sign in (1, -1)]
    source = np.where(has[0] | has[1], "auto" if by_shape else "file", "none")
    flags = missing_terminals(has[0], has[1]) | np.where(mesh, int(Flag.MESH), 0)
    if settings.terminals == "estimate":
        bare = open_ends(measured.graph) & (role == 0)
        unknown = np.bincount(node_network[bare], minlength=n_networks) > 0
        source = np.where(unknown, ESTIMATED, source)
        flags = np.where(unknown, int(Flag.TERMINALS_ESTIMATED), flags)
    return Terminals(
        node_network=node_network,
        segment_network=segment_network,
        role=role,
        pressure_mmhg=given.pressure_mmhg,
        flow_nl_min=given.flow_nl_min,
        hematocrit=given.hematocrit,
        source=tuple(source.tolist()),
        network_flags=np.asarray(flags, dtype=np.int64),
        notes=given.notes,
        flags=Flag.TERMINAL_MISSED if given.notes else Flag.NONE,
        drive_mmhg=settings.drive_mmhg,
    )


def missing_terminals(has_inlet: BoolArray, has_outlet: BoolArray) -> IntArray:
    """Return flags (n_networks,) of what a network lacks to have a resistance."""
    lacks = [has_inlet & ~has_outlet, has_outlet & ~has_inlet, ~has_inlet & ~has_outlet]
    return np.select(lacks, [int(Flag.NO_OUTLET), int(Flag.NO_INLET), int(Flag.NO_TERMINALS)], default=0)


def open_ends(graph: VesselGraph) -> BoolArray:
    """Whether blood can enter or leave at each node (n_nodes,): an end, or a rim where the field of view cuts."""
    return np.isin(graph.node_kind, (NodeKind.END, NodeKind.RIM))


def _match(measured: MeasuredGraph, points: Sequence[TerminalPoint]) -> _Given:
    graph = measured.graph
    ends = np.flatnonzero(open_ends(graph))
    role = np.zeros(graph.n_nodes, dtype=np.int64)
    pressure, flow, hematocrit = (np.full(graph.n_nodes, np.nan) for _ in range(3))
    notes = []
    for point in points:
        away = np.hypot(graph.node_x_px[ends] - point.x_px, graph.node_y_px[ends] - point.y_px)
        told = f"{point.role} at x {point.x_px:g}, y {point.y_px:g} px left out:"
        nearest = away.min(initial=np.inf)
        if not nearest <= REACH_PX:
            found = f"the nearest is {nearest:.1f} px away" if ends.size else "the image has none"
            notes.append(f"{told} no vessel end within {REACH_PX:g} px ({found}).")
            continue
        node = ends[np.argmin(away)]
        if role[node]:
            notes.append(f"{told} the nearest vessel end has a terminal already.")
            continue
        role[node] = ROLES[point.role]
        for array, value in (
            (pressure, point.pressure_mmhg),
            (flow, point.flow_nl_min if point.pressure_mmhg is None else None),
            (hematocrit, point.hematocrit),
        ):
            array[node] = np.nan if value is None else value
    return _Given(role, pressure, flow, hematocrit, tuple(notes))


def _roles_by_shape(
    measured: MeasuredGraph, networks: tuple[IntArray, IntArray, int], disc: OpticDisc | None
) -> tuple[IntArray, BoolArray]:
    """Role of each node, and which networks have loops; `networks` is that of nodes, of segments, and their number."""
    graph = measured.graph
    node_network, segment_network, n = networks
    n_nodes_each = np.bincount(node_network, minlength=n)
    mesh = np.bincount(segment_network, minlength=n) - n_nodes_each + 1 > 0
    ends = np.flatnonzero(open_ends(graph) & ~mesh[node_network] & (n_nodes_each[node_network] > 1))
    network = node_network[ends]
    radius = np.nan_to_num(end_radius(measured)[ends])
    off_dd = np.zeros(len(ends)) if disc is None else _off_disc(graph, ends, disc)
    root = np.zeros(len(ends), dtype=bool)
    order = np.lexsort((ends, -radius, off_dd, network))
    root[order[np.unique(network[order], return_index=True)[1]]] = True
    if disc is not None:
        root |= _trunks(network, radius, off_dd == 0, n)
    sign = np.where(_is_venular(measured, segment_network, n), -1, 1)[network]
    role = np.zeros(graph.n_nodes, dtype=np.int64)
    role[ends] = np.where(root, sign, -sign)
    return role, mesh


def _off_disc(graph: VesselGraph, nodes: IntArray, disc: OpticDisc) -> FloatArray:
    """How far nodes lie off the disc and the band around it, in disc diameters; 0 inside."""
    away_px = np.hypot(graph.node_x_px[nodes] - disc.x_px, graph.node_y_px[nodes] - disc.y_px)
    return np.asarray(np.maximum(away_px / (2 * disc.radius_px) - 0.5 - MARGIN_DD, 0.0))


def _trunks(network: IntArray, radius: FloatArray, at_disc: BoolArray, n_networks: int) -> BoolArray:
    """Which ends at the disc are wide enough to come out of it; none of networks that have no other ends."""
    widest = np.zeros(n_networks)
    np.maximum.at(widest, network[at_disc], radius[at_disc])
    leaves = np.bincount(network[~at_disc], minlength=n_networks) > 0
    return np.asarray(at_disc & (radius >= TRUNK_SHARE * widest[network]) & leaves[network])


def end_radius(measured: MeasuredGraph) -> FloatArray:
    """Mean radius (n_nodes,) over the half next to each node of the segment that ends there; for ends of degree 1."""
    graph = measured.graph
    segment = owner(graph.offsets)
    near_a = measured.s_um <= 0.5 * measured.length_um[segment]
    share = arc_shares(measured)
    radius = np.full(graph.n_nodes, np.nan)
    for node, near in ((graph.node_a, near_a), (graph.node_b, ~near_a)):
        half = mean_by(segment, measured.radius_um, share * near, graph.n_segments)
        whole = mean_by(segment, measured.radius_um, share, graph.n_segments)
        radius[node] = np.where(np.isfinite(half), half, whole)
    return radius


def _is_venular(measured: MeasuredGraph, segment_network: IntArray, n_networks: int) -> BoolArray:
    """Tell whether more than half of a network's length is venule."""
    venule = np.where(measured.graph.vessel_class == VesselClass.VENULE, measured.length_um, 0.0)
    half = 0.5 * sum_by(segment_network, measured.length_um, n_networks)
    return np.asarray(sum_by(segment_network, venule, n_networks) > half)
