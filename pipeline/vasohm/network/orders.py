"""Orders of the vessels of trees, by Strahler and by diameter, and how number, length, radius and resistance go on."""

from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components, dijkstra

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.network.graph import NodeKind, VesselClass
from vasohm.network.groups import mean_by, sum_by
from vasohm.network.radius import MeasuredGraph

SCHEMES = ("strahler", "diameter")
MOST_TURNS = 100
ROUNDING = 1e-9  # vessels of one calibre are not above their own mean


@dataclass(frozen=True, slots=True, eq=False)
class Orders:
    """Orders of all segments, and what each order of each network holds.

    A network that is no tree, or whose root cannot be told, has no orders: 0 for its segments, no rows of orders, and a
    row of ratios that are NaN, with the flag that says why.
    """

    strahler: IntArray  # (n_segments,) from 1 at the tips; 0 where there is none
    diameter: IntArray
    # one row an order: sorted by network, scheme, order
    network: IntArray
    scheme: IntArray  # index in SCHEMES
    order: IntArray
    n_segments: IntArray
    n_elements: IntArray  # segments of one order in series are one element
    length_um: FloatArray  # mean of the elements
    length_sd_um: FloatArray  # NaN for one element
    radius_um: FloatArray
    radius_sd_um: FloatArray
    resistance_series: FloatArray  # mean of the elements, whose segments are in series
    ln_series_random_se: FloatArray
    ln_series_shared_se: FloatArray
    resistance_parallel: FloatArray  # of all elements side by side
    ln_parallel_random_se: FloatArray
    ln_parallel_shared_se: FloatArray
    # one row a network and scheme
    ratio_network: IntArray
    ratio_scheme: IntArray
    highest: IntArray
    bifurcation_ratio: FloatArray
    bifurcation_ratio_se: FloatArray
    length_ratio: FloatArray
    length_ratio_se: FloatArray
    radius_ratio: FloatArray
    radius_ratio_se: FloatArray
    ratio_flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Rooting:
    """How blood comes to the segments: what the orders need to know beside the geometry."""

    segment_network: IntArray  # (n_segments,)
    node_network: IntArray  # (n_nodes,)
    role: IntArray  # (n_nodes,) +1 inlet, -1 outlet, 0 neither
    radius_um: FloatArray  # (n_segments,)
    resistance: FloatArray  # (n_segments,)
    ln_random_se: FloatArray  # (n_segments,) standard uncertainties of ln R
    ln_shared_se: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class _Trees:
    """Segments of the trees, each with the segment it comes from."""

    depth: IntArray  # (n_segments,) segments on the way to the root, 0 at it; -1 outside of trees
    parent: IntArray  # (n_segments,) -1 where there is none


def find_orders(measured: MeasuredGraph, rooting: Rooting) -> Orders:
    """Order the segments of every tree, from its tips to its root.

    Parameters
    ----------
    measured : MeasuredGraph
        Segments and their lengths.
    rooting : Rooting
        Networks, inlets and outlets, mean radii, resistances.

    Returns
    -------
    Orders

    Notes
    -----
    The root is a network's only inlet or only outlet; the wider of both where it has one of each; its widest end where
    it has neither.

    Strahler: a tip has order 1; a segment has the highest order of those it gives rise to, one more where two or more
    of them have it. Diameter-defined: orders begin as Strahler's; then a segment above children of highest order n is
    raised to n + 1 only where its diameter is above ((D_n + S_n) + (D_n+1 - S_n+1)) / 2, with mean D and standard
    deviation S of the segments of each order in its network, until no order changes. An order that has no segments left
    is not raised to.

    Segments of one order in series are one element; where several children have their parent's order, the widest
    carries the element on. Ratios are exp of the slope of ln number, ln mean length and ln mean radius of the
    elements over the order (Horton's laws), the first with its sign turned; their standard errors are those of the
    slopes, NaN for two orders.

    The doubt of an order's resistance is that of its segments, weighted by what each adds to it: random parts in
    quadrature; shared parts as if every cause moved all segments the same way, which is at most too much.

    References
    ----------
    Horton RE (1945) Geol Soc Am Bull 56:275-370; Strahler AN (1957) Trans Am Geophys Union 38:913-920,
    doi:10.1029/TR038i006p00913; Jiang ZL, Kassab GS, Fung YC (1994) Diameter-defined Strahler system and connectivity
    matrix of the pulmonary arterial tree. J Appl Physiol 76:882-892, doi:10.1152/jappl.1994.76.2.882.
    """
    n_networks = int(rooting.segment_network.max(initial=-1)) + 1
    trees, flags = _root(measured, rooting, n_networks)
    strahler = _strahler(trees)
    diameter, unsettled = _by_diameter(trees, strahler, rooting, n_networks)
    rows, ratios = [], []
    for scheme, order in enumerate((strahler, diameter)):
        elements = _elements(trees, order, measured, rooting)
        counted = _by_order(elements, order, rooting)
        rows.append((np.full(len(counted[0]), scheme), *counted))
        why = flags | np.where(unsettled & (scheme == 1), int(Flag.ORDER_UNSETTLED), 0)
        ratios.append((np.arange(n_networks), np.full(n_networks, scheme), *_horton(counted, n_networks), why))
    scheme_of, network, level, *held = (np.concatenate(column) for column in zip(*rows, strict=True))
    sort = np.lexsort((level, scheme_of, network))
    told = [np.concatenate(column) for column in zip(*ratios, strict=True)]
    by_network = np.lexsort((told[1], told[0]))
    return Orders(
        strahler,
        diameter,
        *(values[sort] for values in (network, scheme_of, level, *held)),
        *(values[by_network] for values in told),
    )


def _root(measured: MeasuredGraph, rooting: Rooting, n_networks: int) -> tuple[_Trees, IntArray]:
    """Find each tree's root and follow it to the tips."""
    graph = measured.graph
    n = graph.n_segments
    node_network = rooting.node_network
    n_nodes = np.bincount(node_network, minlength=n_networks)
    loops = np.bincount(rooting.segment_network, minlength=n_networks) - n_nodes + 1 > 0
    root = _roots(measured, rooting, n_networks)
    flags = np.select([loops, root < 0], [int(Flag.ORDER_LOOPS), int(Flag.ORDER_ROOTLESS)], default=0)
    depth, parent = np.full(n, -1, np.int64), np.full(n, -1, np.int64)
    rooted = flags == 0
    in_tree = rooted[rooting.segment_network]
    if not in_tree.any():
        return _Trees(depth, parent), flags
    a, b = graph.node_a[in_tree], graph.node_b[in_tree]
    start = graph.n_nodes  # one node more, above all roots
    links = coo_array(
        (np.ones(len(a) + rooted.sum()), (np.append(a, root[rooted]), np.append(b, np.full(rooted.sum(), start)))),
        shape=(start + 1, start + 1),
    ).tocsr()
    steps = dijkstra(links, directed=False, indices=[start], unweighted=True)[0]
    steps = np.where(np.isfinite(steps), steps, -1).astype(np.int64)
    upper = np.where(steps[graph.node_a] < steps[graph.node_b], graph.node_a, graph.node_b)
    lower = graph.node_a + graph.node_b - upper
    into = np.full(graph.n_nodes, -1, np.int64)
    into[lower[in_tree]] = np.flatnonzero(in_tree)
    depth[in_tree] = steps[upper[in_tree]] - 1
    parent[in_tree] = into[upper[in_tree]]
    return _Trees(depth, parent), flags


def _roots(measured: MeasuredGraph, rooting: Rooting, n_networks: int) -> IntArray:
    """Root node (n_networks,) of each network; -1 where it cannot be told.

    It is the only inlet or the only outlet; of a tree that is mostly of one class it must be the one that its trunk
    has: several trunks that leave the disc together and end in one place are no tree that begins there.
    """
    graph = measured.graph
    nodes = np.concatenate((graph.node_a, graph.node_b))
    widest = np.zeros(graph.n_nodes)
    np.maximum.at(widest, nodes, np.tile(rooting.radius_um, 2))
    is_end = np.isin(graph.node_kind, (NodeKind.END, NodeKind.RIM))

    def count(chosen: BoolArray) -> IntArray:
        return np.bincount(rooting.node_network[chosen], minlength=n_networks)

    inlets, outlets = rooting.role > 0, rooting.role < 0
    n_in, n_out = count(inlets), count(outlets)
    network = rooting.node_network
    arteriolar, venular = (
        _mostly(measured, rooting, kind, n_networks) for kind in (VesselClass.ARTERIOLE, VesselClass.VENULE)
    )
    only = (inlets & ((n_in == 1) & ~venular)[network]) | (outlets & ((n_out == 1) & ~arteriolar)[network])
    only |= is_end & ((n_in == 0) & (n_out == 0))[network]
    candidates = np.flatnonzero(only)
    order = candidates[np.lexsort((candidates, -widest[candidates], network[candidates]))]
    found, first = np.unique(network[order], return_index=True)
    root = np.full(n_networks, -1, np.int64)
    root[found] = order[first]
    return root


def _mostly(measured: MeasuredGraph, rooting: Rooting, kind: VesselClass, n_networks: int) -> BoolArray:
    """Whether more than half of a network's length (n_networks,) is of a class."""
    of_kind = np.where(measured.graph.vessel_class == kind, measured.length_um, 0.0)
    whole = sum_by(rooting.segment_network, measured.length_um, n_networks)
    return np.asarray(sum_by(rooting.segment_network, of_kind, n_networks) > 0.5 * whole)


def _levels(trees: _Trees) -> list[IntArray]:
    """Segments of the trees by depth, the deepest first."""
    inside = np.flatnonzero(trees.depth >= 0)
    by_depth = inside[np.argsort(-trees.depth[inside], kind="stable")]
    return np.split(by_depth, np.flatnonzero(np.diff(trees.depth[by_depth])) + 1) if len(by_depth) else []


def _strahler(trees: _Trees) -> IntArray:
    order = np.where(trees.depth >= 0, 1, 0)
    for level in _levels(trees):
        above, highest, holders = _highest_child(trees, order, level)
        order[above] = np.where(holders > 1, highest + 1, highest)
    return order


def _highest_child(trees: _Trees, order: IntArray, level: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Parents of the segments of a level, the highest order among their children, and how many of these have it."""
    children = level[trees.parent[level] >= 0]
    above, parent = np.unique(trees.parent[children], return_inverse=True)
    highest = np.zeros(len(above), np.int64)
    np.maximum.at(highest, parent, order[children])
    return above, highest, np.bincount(parent[order[children] == highest[parent]], minlength=len(above))


def _by_diameter(trees: _Trees, strahler: IntArray, rooting: Rooting, n_networks: int) -> tuple[IntArray, BoolArray]:
    """Diameter-defined orders, and which networks came to none (their segments have 0)."""
    order, levels = strahler, _levels(trees)
    most = int(strahler.max(initial=0)) + 2
    changing = np.zeros(n_networks, dtype=bool)
    for _ in range(MOST_TURNS):
        limit = _limits(order, rooting, (n_networks, most))
        new = np.where(trees.depth >= 0, 1, 0)
        for level in levels:
            above, highest, _ = _highest_child(trees, new, level)
            new[above] = highest + (rooting.radius_um[above] > limit[rooting.segment_network[above], highest])
        changed = new != order
        changing = np.bincount(rooting.segment_network[changed], minlength=n_networks) > 0
        order = new
        if not changed.any():
            break
    return np.where(changing[rooting.segment_network], 0, order) if len(order) else order, changing


def _limits(order: IntArray, rooting: Rooting, shape: tuple[int, int]) -> FloatArray:
    """Radius (n_networks, n_orders) above which a segment over order n has order n + 1; infinite where none has it."""
    group = rooting.segment_network * shape[1] + order
    size = shape[0] * shape[1]
    count = np.bincount(group, minlength=size)
    mean, sd = _mean_sd(group, rooting.radius_um, size)
    sd = np.where(count > 1, sd, 0.0)
    upper, lower = (mean + sd).reshape(shape), (mean - sd).reshape(shape)
    limit = np.full(shape, np.inf)
    limit[:, :-1] = 0.5 * (upper[:, :-1] + lower[:, 1:]) * (1 + ROUNDING)
    return np.where(np.isfinite(limit), limit, np.inf)


def _mean_sd(group: IntArray, values: FloatArray, n_groups: int) -> tuple[FloatArray, FloatArray]:
    """Mean of each group and standard deviation of a sample, NaN for less than one and two members."""
    count = np.bincount(group, minlength=n_groups)
    mean = mean_by(group, values, np.ones(len(values)), n_groups)
    square = sum_by(group, np.square(values - mean[group]), n_groups)
    return mean, np.sqrt(np.divide(square, count - 1, out=np.full(n_groups, np.nan), where=count > 1))


@dataclass(frozen=True, slots=True, eq=False)
class _Elements:
    segment: IntArray  # (n,) segments that have an order
    element: IntArray  # (n,) the element that each belongs to; below, one entry an element
    network: IntArray
    order: IntArray
    length_um: FloatArray
    radius_um: FloatArray
    resistance: FloatArray


def _elements(trees: _Trees, order: IntArray, measured: MeasuredGraph, rooting: Rooting) -> _Elements:
    """Join segments of one order in series."""
    n = len(order)
    child = np.flatnonzero((trees.parent >= 0) & (order > 0))
    child = child[order[child] == order[trees.parent[child]]]
    child = child[np.lexsort((child, -rooting.radius_um[child], trees.parent[child]))]
    _, first = np.unique(trees.parent[child], return_index=True)
    child = child[first]
    links = coo_array((np.ones(len(child)), (child, trees.parent[child])), shape=(n, n))
    _, label = connected_components(links, directed=False) if n else (0, np.zeros(0, np.int64))
    ordered = np.flatnonzero(order > 0)
    names, first, element = np.unique(label[ordered], return_index=True, return_inverse=True)
    length = measured.length_um[ordered]
    return _Elements(
        segment=ordered,
        element=element,
        network=rooting.segment_network[ordered][first],
        order=order[ordered][first],
        length_um=sum_by(element, length, len(names)),
        radius_um=mean_by(element, rooting.radius_um[ordered], length, len(names)),
        resistance=sum_by(element, rooting.resistance[ordered], len(names)),
    )


def _by_order(elements: _Elements, order: IntArray, rooting: Rooting) -> tuple[FloatArray, ...]:
    """Network and order of each row; numbers of segments and elements; means and deviations; resistances, doubt."""
    most = int(order.max(initial=0)) + 1
    key = elements.network * most + elements.order
    rows, group = np.unique(key, return_inverse=True)
    n = len(rows)
    length = _mean_sd(group, elements.length_um, n)
    radius = _mean_sd(group, elements.radius_um, n)
    conductance = 1.0 / elements.resistance
    total, in_parallel = sum_by(group, elements.resistance, n), sum_by(group, conductance, n)
    row, part = group[elements.element], rooting.resistance[elements.segment]
    doubt = (rooting.ln_random_se[elements.segment], rooting.ln_shared_se[elements.segment])
    of_series = _weighted_doubt(row, part / total[row], doubt, n)
    of_parallel = _weighted_doubt(row, part * conductance[elements.element] ** 2 / in_parallel[row], doubt, n)
    counts, n_elements = np.bincount(row, minlength=n), np.bincount(group, minlength=n)
    resistances = (total / n_elements, *of_series, 1.0 / in_parallel, *of_parallel)
    return (rows // most, rows % most, counts, n_elements, *length, *radius, *resistances)


def _weighted_doubt(
    row: IntArray, weight: FloatArray, doubt: tuple[FloatArray, FloatArray], n: int
) -> tuple[FloatArray, FloatArray]:
    """Random and shared standard uncertainty (n,) of sums whose parts move them by these weights."""
    random_se, shared_se = doubt
    return np.sqrt(sum_by(row, np.square(weight * random_se), n)), sum_by(row, weight * shared_se, n)


def _horton(counted: tuple[FloatArray, ...], n_networks: int) -> tuple[FloatArray, ...]:
    """Highest order (n_networks,), then each ratio of neighbouring orders and its standard error."""
    network, order, _, number, length, _, radius, *_ = counted
    highest = np.zeros(n_networks, np.int64)
    np.maximum.at(highest, network, order)
    found: list[FloatArray] = [highest]
    for values, sign in ((number, -1.0), (length, 1.0), (radius, 1.0)):
        slope, se = _slopes(network, order, np.log(values), n_networks)
        ratio = np.exp(sign * slope)
        found += [ratio, ratio * se]
    return tuple(found)


def _slopes(group: IntArray, x: IntArray, y: FloatArray, n_groups: int) -> tuple[FloatArray, FloatArray]:
    """Slope of y over x in each group, NaN for one value of x; its standard error, NaN for two."""
    count, one = np.bincount(group, minlength=n_groups), np.ones(len(x))
    dx = x - mean_by(group, x, one, n_groups)[group]
    dy = y - mean_by(group, y, one, n_groups)[group]
    spread = sum_by(group, dx * dx, n_groups)
    nan = np.full(n_groups, np.nan)
    slope = np.divide(sum_by(group, dx * dy, n_groups), spread, out=nan.copy(), where=spread > 0)
    rest = sum_by(group, np.square(dy - slope[group] * dx), n_groups)
    return slope, np.sqrt(np.divide(rest, (count - 2) * spread, out=nan, where=(count > 2) & (spread > 0)))
