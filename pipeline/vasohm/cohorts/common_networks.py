"""What becomes of a network's resistance between two states, on the vessels that both pictures show."""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from vasohm.arrays import AnyArray, BoolArray, FloatArray, IntArray, freeze
from vasohm.cohorts.common_part import CommonPart, joined_flags
from vasohm.cohorts.states import N_CAUSES, State, ratio_shared_se, shared_causes
from vasohm.flags import Flag, code
from vasohm.flow.kirchhoff import solve_flows
from vasohm.network.groups import sum_by
from vasohm.uncertainty import ln_interval

LEAST_SHARE_OF_EDGE = 0.5  # of a segment's length: one that is matched less is left out in both states


@dataclass(frozen=True, slots=True, eq=False)
class CommonNetworks:
    """The networks of state a on the common part, in both states; rows of a's table of networks.

    Resistances are NaN where no common way leads from an inlet to an outlet.
    """

    resistance_a: FloatArray  # (n,) Pa.s/m3
    resistance_b: FloatArray
    random_se: FloatArray  # of ln(b / a)
    of_a: FloatArray  # (n, N_CAUSES) change of ln R for one standard uncertainty of each cause
    of_b: FloatArray
    n_segments: IntArray
    length_um: FloatArray  # in common
    network_b: IntArray  # network_id in b that shares most length; 0 where there is none
    ended: BoolArray  # whether inlets or outlets were put where the common part ends

    def __post_init__(self) -> None:
        freeze(self)


def common_networks(a: State, b: State, common: CommonPart) -> CommonNetworks:
    """Solve a's networks on the common part with the resistances of both states.

    Notes
    -----
    The graph, the inlets and the outlets are those of a; inlets are joined at one pressure and outlets at another. A
    segment counts with the stretches that are in common; one with less than half of its length in common is left out.
    A node that only such segments bring blood to becomes an inlet, one that only such segments take blood from an
    outlet, both by the flow in a.
    d ln R of a network is the sum of its segments' shares times d ln R of theirs (Cohn, Proc Am Math Soc 1950;1:316).
    """
    segments, nodes, networks = a.tables["segments"], a.tables["nodes"], a.tables["networks"]
    n = len(networks)
    of_segment = _places(segments["network_id"], networks["network_id"])
    node_a, node_b = (_places(segments[name], nodes["node_id"]) for name in ("node_a", "node_b"))
    used = common.share_a[common.segment_a] >= LEAST_SHARE_OF_EDGE
    used &= np.isfinite(common.resistance_a) & np.isfinite(common.resistance_b)
    row, of_row = common.segment_a[used], of_segment[common.segment_a[used]]
    ends = _Ends(node_a, node_b, nodes["role"].to_numpy(object), a.column("segments", "flow_nl_min"))
    inlet, outlet = ends.of_part(np.isin(np.arange(len(segments)), row))
    pressure = np.where(inlet, 1.0, np.where(outlet, 0.0, np.nan))
    of_node = _places(nodes["network_id"], networks["network_id"])
    found, shares = [], []
    for resistance in (common.resistance_a[used], common.resistance_b[used]):
        summed = sum_by(row, resistance, len(segments))
        closed = np.where(summed > 0, summed, np.nan)
        _, flow = solve_flows((node_a, node_b), closed, pressure, np.zeros(len(nodes)))
        inflow = np.bincount(node_a, flow, len(nodes)) - np.bincount(node_b, flow, len(nodes))
        through = sum_by(of_node, np.where(inlet, inflow, 0.0), n)
        through = np.where(through > 0, through, np.nan)
        found.append(1.0 / through)
        shares.append(np.nan_to_num(flow[row] ** 2 * resistance / through[of_row]))
    random = [share * se[used] for share, se in zip(shares, (common.random_a, common.random_b), strict=True)]
    unknown = np.where(np.isfinite(found[0] + found[1]), 0.0, np.nan)
    return CommonNetworks(
        resistance_a=found[0] + unknown,
        resistance_b=found[1] + unknown,
        random_se=np.sqrt(sum_by(of_row, random[0] ** 2 + random[1] ** 2, n)) + unknown,
        of_a=_summed(of_row, shares[0], common.of_resistance_a[used], n),
        of_b=_summed(of_row, shares[1], common.of_resistance_b[used], n),
        n_segments=np.bincount(of_segment[np.unique(row)], minlength=n),
        length_um=sum_by(of_row, common.length_um[used], n),
        network_b=_networks_b(b, common, of_segment, n),
        ended=sum_by(of_node, 1.0 * ((inlet | outlet) & (ends.role == "")), n) > 0,
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Ends:
    """Where blood enters and leaves state a, and which way it flows in its segments."""

    node_a: IntArray
    node_b: IntArray
    role: AnyArray  # (n_nodes,) inlet, outlet or empty
    flow: FloatArray  # (n_segments,) from node_a to node_b; NaN or 0 where nothing flows

    def of_part(self, kept: BoolArray) -> tuple[BoolArray, BoolArray]:
        """Inlets and outlets of the kept segments."""
        n = len(self.role)
        into = np.where(self.flow > 0, self.node_b, self.node_a)
        out_of = np.where(self.flow > 0, self.node_a, self.node_b)
        flows = np.nan_to_num(self.flow) != 0
        touched = np.bincount(np.concatenate((self.node_a[kept], self.node_b[kept])), minlength=n) > 0
        gains = [np.bincount(into[flows & which], minlength=n) > 0 for which in (kept, ~kept)]
        losses = [np.bincount(out_of[flows & which], minlength=n) > 0 for which in (kept, ~kept)]
        inner = touched & (self.role == "")
        inlet = (self.role == "inlet") | (inner & gains[1] & ~gains[0])
        outlet = (self.role == "outlet") | (inner & losses[1] & ~losses[0])
        return inlet & ~outlet, outlet & ~inlet


def network_rows(a: State, b: State, networks: CommonNetworks) -> pd.DataFrame:
    """Rows of network_pairs.csv without what names the pair, for the networks that have anything in common."""
    shown = np.flatnonzero(networks.n_segments > 0)
    table = a.tables["networks"].iloc[shown]
    ratio = (networks.resistance_b / networks.resistance_a)[shown]
    shared = ratio_shared_se(networks.of_a[shown], networks.of_b[shown], shared_causes(a, b))
    random = networks.random_se[shown]
    low, high = ln_interval(ratio, np.hypot(random, shared))
    flags = [
        joined_flags(
            of_a, "" if np.isfinite(value) else code(Flag.NO_COMMON_WAY), code(Flag.COMMON_ENDS) if cut else ""
        )
        for of_a, value, cut in zip(table["flags"], ratio, networks.ended[shown], strict=True)
    ]
    return pd.DataFrame(
        {
            "network_id_a": table["network_id"].to_numpy(np.int64),
            "network_id_b": networks.network_b[shown],
            "vessel_class": table["vessel_class"].to_numpy(object),
            "n_segments": networks.n_segments[shown],
            "common_length_um": networks.length_um[shown],
            "common_fraction": np.minimum(networks.length_um[shown] / table["length_um"].to_numpy(np.float64), 1.0),
            "resistance_a_pa_s_m3": networks.resistance_a[shown],
            "resistance_b_pa_s_m3": networks.resistance_b[shown],
            "resistance_ratio": ratio,
            "resistance_ratio_lo": low,
            "resistance_ratio_hi": high,
            "ln_ratio_random_se": random,
            "ln_ratio_shared_se": shared + 0.0 * ratio,
            "flags": flags,
        }
    )


def _places(ids: "pd.Series[float]", known: "pd.Series[float]") -> IntArray:
    """Row of each id in the table that it belongs to."""
    return pd.Index(known.to_numpy(np.int64)).get_indexer(pd.Index(ids.to_numpy(np.int64))).astype(np.int64)


def _summed(of_row: IntArray, share: FloatArray, causes: FloatArray, n: int) -> FloatArray:
    return np.stack([sum_by(of_row, share * causes[:, cause], n) for cause in range(N_CAUSES)], axis=1)


def _networks_b(b: State, common: CommonPart, of_segment: IntArray, n: int) -> IntArray:
    """Return the network of b with which each network of a has the greatest length in common."""
    ids = b.tables["segments"]["network_id"].to_numpy(np.int64)[common.segment_b]
    table = pd.DataFrame({"a": of_segment[common.segment_a], "b": ids, "length": common.length_um})
    summed = table.groupby(["a", "b"])["length"].sum().sort_values(kind="stable")
    most = np.zeros(n, np.int64)
    for network_a, network_b in summed.index:  # the last, longest one stays
        most[network_a] = network_b
    return most
