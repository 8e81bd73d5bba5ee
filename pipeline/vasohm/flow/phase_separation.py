"""How red cells part where blood divides, and the hematocrit of every segment that follows from given flows."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from scipy.sparse import coo_array, csc_array, eye_array
from scipy.sparse.linalg import splu
from scipy.special import expit, logit

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.flow.rheology import HIGHEST_HEMATOCRIT

TURNS = 100  # of feeding hematocrit and shares, which act on each other weakly: 5 to 15 are usual
STILL = 1e-10  # change of a feeding hematocrit at which they agree


@dataclass(frozen=True, slots=True)
class SplitLaw:
    """A published relation of the share of cells that a daughter draws to its share of the flow.

    logit FQ_E = A + B logit((FQ_B - X0) / (1 - 2 X0)), no cells up to FQ_B = X0 and all from 1 - X0 on.
    `constants(feed_um, own_um, other_um, hematocrit)` returns A, B and X0 from three diameters and the discharge
    hematocrit of the feeding vessel, elementwise. Diameters are those measured: unlike in the viscosity law they are
    not scaled by the volume of red cells.
    """

    constants: Callable[[FloatArray, FloatArray, FloatArray, FloatArray], tuple[FloatArray, FloatArray, FloatArray]]
    citation: str


def _constants_1990(
    feed_um: FloatArray, own_um: FloatArray, other_um: FloatArray, hematocrit: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    return -6.96 * np.log(own_um / other_um) / feed_um, 1.0 + 6.98 * (1.0 - hematocrit) / feed_um, 0.4 / feed_um


def _constants_2005(
    feed_um: FloatArray, own_um: FloatArray, other_um: FloatArray, hematocrit: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    plasma = (1.0 - hematocrit) / feed_um
    asymmetry = (own_um**2 - other_um**2) / (own_um**2 + other_um**2)
    return -13.29 * asymmetry * plasma, 1.0 + 6.98 * plasma, 0.964 * plasma


SPLIT_LAWS: Mapping[str, SplitLaw] = MappingProxyType(
    {
        "1990": SplitLaw(
            _constants_1990,
            "Pries AR, Secomb TW, Gaehtgens P, Gross JF (1990) Blood flow in microvascular networks: experiments and "
            "simulation. Circ Res 67:826-834, doi:10.1161/01.RES.67.4.826",
        ),
        "2005": SplitLaw(
            _constants_2005,
            "Pries AR, Secomb TW (2005) Microvascular blood viscosity in vivo and the endothelial surface layer. "
            "Am J Physiol Heart Circ Physiol 289:H2657-H2664, doi:10.1152/ajpheart.00297.2005",
        ),
    }
)


def cell_share(
    law: SplitLaw,
    flow_share: FloatArray,
    diameters_um: tuple[FloatArray, FloatArray, FloatArray],
    hematocrit: FloatArray,
) -> FloatArray:
    """Share of the cells that a daughter draws, by its share of the flow.

    Parameters
    ----------
    law : SplitLaw
        One of `SPLIT_LAWS`.
    flow_share : array
        Flow of the daughter over that of both, 0 to 1.
    diameters_um : three arrays
        Of the feeding vessel, of this daughter and of the other one.
    hematocrit : array
        Discharge hematocrit of the feeding vessel.

    Returns
    -------
    array
        From 0 to 1; those of two daughters sum to 1. In feeding vessels so thin that no share of the flow is left
        between X0 and 1 - X0, all cells follow the larger flow.
    """
    offset, slope, least = law.constants(*diameters_um, hematocrit)
    room = 1.0 - 2.0 * least
    by_flow = 0.5 * (1.0 + np.sign(flow_share - 0.5))  # where the law leaves no room
    within = np.where(room > 0, (flow_share - least) / np.where(room > 0, room, 1.0), by_flow)
    return np.asarray(expit(offset + slope * logit(np.clip(within, 0.0, 1.0))))


@dataclass(frozen=True, slots=True, eq=False)
class Stream:
    """Flows of one solution and what enters with them; cells follow where `flow` is neither 0 nor NaN."""

    ends: tuple[IntArray, IntArray]  # (n_segments,) node each segment leaves and reaches
    flow: FloatArray  # (n_segments,) from the first node to the second
    pressure: FloatArray  # (n_nodes,) falls along the flow: it tells the order in which nodes are fed
    is_terminal: BoolArray  # (n_nodes,) blood may enter or leave here
    entering_hematocrit: FloatArray  # (n_nodes,) of what enters there
    diameter_um: FloatArray  # (n_segments,)


@dataclass(frozen=True, slots=True, eq=False)
class _Parting:
    """The segments that carry blood, by the node that feeds them, and the flow through each node."""

    up: IntArray
    down: IntArray
    flow: FloatArray  # positive
    through: FloatArray  # (n_nodes,) all that leaves, terminals included; 1 where nothing does
    source: FloatArray  # (n_nodes,) cells that enter from outside
    divides: BoolArray  # whether cells and plasma part on the way into the segment
    diameters_um: tuple[FloatArray, FloatArray, FloatArray]  # of the feeding vessel, this one and the others

    @property
    def n_nodes(self) -> int:
        return len(self.through)


def carry_cells(stream: Stream, law: SplitLaw, feeding: FloatArray | None = None) -> tuple[FloatArray, FloatArray]:
    """Discharge hematocrit of every segment, with as many cells leaving each node as enter it.

    Parameters
    ----------
    stream : Stream
        Flows, and the hematocrit of what enters.
    law : SplitLaw
        How cells part at diverging branchings.
    feeding : (n_nodes,) array, optional
        Hematocrit that passes each node, to begin with; the nearer, the fewer turns.

    Returns
    -------
    (n_segments,) and (n_nodes,) arrays: hematocrit of each segment, NaN where nothing flows, and of what passes each
    node.

    Notes
    -----
    What meets at a node mixes; a feeding diameter is then the flow-weighted mean. Where more than two vessels leave a
    node, each is split off against the others taken together (flow shares against all of them, the root mean square of
    their diameters), and the shares of cells are scaled to sum to 1. A terminal that lies between vessels has no
    feeding vessel that could be seen: cells there follow the flow. No vessel is given more cells than a discharge
    hematocrit of `HIGHEST_HEMATOCRIT` holds; the excess goes to those that leave beside it.

    For given shares the cells entering each node solve a linear system, triangular in the order of falling pressure,
    so that one sparse elimination serves all networks; shares and feeding hematocrits are taken in turns until they
    agree.
    """
    hematocrit = np.full(stream.flow.shape, np.nan)
    feeding = np.array(stream.entering_hematocrit if feeding is None else feeding)
    used = np.flatnonzero(np.nan_to_num(stream.flow) != 0)
    if not used.size:
        return hematocrit, feeding
    parting = _parting(stream, used)
    order = np.argsort(-np.nan_to_num(stream.pressure), kind="stable")
    place = np.empty(order.size, dtype=np.int64)
    place[order] = np.arange(order.size)
    flow_share = parting.flow / parting.through[parting.up]
    for _ in range(TURNS):
        share = _shares(parting, law, flow_share, feeding)
        cells = _cells_through(parting, share, order, place)
        last, feeding = feeding, cells / parting.through
        if np.max(np.abs(feeding - last)) <= STILL:
            break
    hematocrit[used] = np.clip(share * cells[parting.up] / parting.flow, 0.0, HIGHEST_HEMATOCRIT)
    return hematocrit, feeding


def _parting(stream: Stream, used: IntArray) -> _Parting:
    n = len(stream.pressure)
    flow, forward = np.abs(stream.flow[used]), stream.flow[used] > 0
    a, b = (node[used] for node in stream.ends)
    up, down = np.where(forward, a, b), np.where(forward, b, a)
    diameter = stream.diameter_um[used]
    leaving, arriving = np.bincount(up, flow, n), np.bincount(down, flow, n)
    outside = np.where(stream.is_terminal, leaving - arriving, 0.0)  # what enters there, or leaves where negative
    through = leaving + np.maximum(-outside, 0.0)
    feed = np.divide(np.bincount(down, flow * diameter, n), arriving, out=np.ones(n), where=arriving > 0)
    daughters, squares = np.bincount(up, minlength=n), np.bincount(up, diameter**2, n)
    divides = ((daughters > 1) & (arriving > 0) & ~stream.is_terminal)[up]
    others = np.maximum(squares[up] - diameter**2, 0.0) / np.maximum(daughters[up] - 1, 1)
    return _Parting(
        up=up,
        down=down,
        flow=flow,
        through=np.where(through > 0, through, 1.0),
        source=np.maximum(outside, 0.0) * stream.entering_hematocrit,
        divides=divides,
        diameters_um=(feed[up], diameter, np.where(divides, np.sqrt(others), diameter)),
    )


def _shares(parting: _Parting, law: SplitLaw, flow_share: FloatArray, feeding: FloatArray) -> FloatArray:
    """Share of the cells through its feeding node that each segment takes."""
    up, n, at = parting.up, parting.n_nodes, np.flatnonzero(parting.divides)
    feed_um, own_um, other_um = (diameter[at] for diameter in parting.diameters_um)
    own, hematocrit, node = flow_share[at], feeding[up[at]], up[at]
    drawn = cell_share(law, own, (feed_um, own_um, other_um), hematocrit)
    total = np.bincount(node, drawn, n)[node]
    drawn = np.divide(drawn, total, out=np.array(own), where=total > 0)
    # the most that a vessel can hold, as a share of the cells; together the daughters always hold them all
    most = np.divide(HIGHEST_HEMATOCRIT * own, hematocrit, out=np.full(own.shape, np.inf), where=hematocrit > 0)
    excess = np.bincount(node, np.maximum(drawn - most, 0.0), n)[node]
    room = np.where(np.isfinite(most), np.maximum(most - drawn, 0.0), 0.0)
    all_room = np.bincount(node, room, n)[node]
    filled = np.divide(room * excess, all_room, out=np.zeros(own.shape), where=all_room > 0)
    share = np.array(flow_share)
    share[at] = np.where(excess > 0, np.minimum(drawn, most) + filled, drawn)
    return share


def _cells_through(parting: _Parting, share: FloatArray, order: IntArray, place: IntArray) -> FloatArray:
    """Cells (n_nodes,) that pass each node in a unit of time."""
    n = parting.n_nodes
    handed_on = coo_array((share, (place[parting.down], place[parting.up])), shape=(n, n))
    matrix = csc_array(eye_array(n) - handed_on)
    factors = splu(matrix, permc_spec="NATURAL", diag_pivot_thresh=0.0)
    cells = np.empty(n)
    cells[order] = factors.solve(parting.source[order])
    return cells
