"""Networks against closed forms, a general graph library and what Kirchhoff's laws imply."""

import json
from fractions import Fraction
from math import factorial
from pathlib import Path

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from beds import published
from hypothesis import given, settings
from hypothesis import strategies as st

from vasohm.errors import DomainError, NetworkError
from vasohm.flow.hydraulics import SolvedNetwork, solve_network
from vasohm.flow.kirchhoff import solve_flows
from vasohm.units import NL_MIN_PER_M3_S, PA_PER_MMHG

EXACT = 1e-12  # closed forms on networks of up to a few thousand segments, in double precision
WHEATSTONE = [("a", "c"), ("a", "d"), ("c", "b"), ("d", "b"), ("c", "d")]


def edges(pairs, resistance=1.0, rel_se=None) -> pd.DataFrame:
    a, b = zip(*pairs, strict=True)
    table = pd.DataFrame({"node_a": pd.Series(a), "node_b": pd.Series(b)})
    table["resistance_pa_s_m3"] = np.broadcast_to(np.asarray(resistance, dtype=float), len(table))
    return table if rel_se is None else table.assign(resistance_se=rel_se)


def between(graph: nx.Graph, a, b) -> float:
    return solve_network(edges([(str(u), str(v)) for u, v in graph.edges]), str(a), str(b)).resistance_pa_s_m3


def test_series_and_parallel():
    found = solve_network(edges([("a", "m"), ("m", "b"), ("a", "b"), ("a", "b")], [1.0, 2.0, 3.0, 6.0]), "a", "b")
    assert found.resistance_pa_s_m3 == pytest.approx(1 / (1 / 3 + 1 / 3 + 1 / 6), rel=EXACT)
    flow = found.edges["flow_nl_min"] / NL_MIN_PER_M3_S
    np.testing.assert_allclose(flow, PA_PER_MMHG / np.array([3.0, 3.0, 3.0, 6.0]), rtol=EXACT)
    np.testing.assert_allclose(found.edges["pressure_drop_mmhg"], [1 / 3, 2 / 3, 1, 1], rtol=EXACT)
    assert dict(zip(found.nodes["node"], found.nodes["pressure_mmhg"], strict=True)) == pytest.approx(
        {"a": 1.0, "m": 2 / 3, "b": 0.0}
    )


def test_the_bridge_with_its_sensitivities_weights_and_doubt():
    """An unbalanced Wheatstone bridge, exact fractions; Cohn 1950 for the sensitivities."""
    rows = zip(
        [row for row in published("network_closed_form") if "Wheatstone" in row[0]["network"]],
        published("tellegen_cohn_sensitivity"),
        published("network_resistance_weights"),
        published("network_uncertainty_from_radius"),
        strict=True,
    )
    for (inputs, expected), (_, sensitivity), (_, weight), (of_radius, doubt) in rows:
        table = edges(WHEATSTONE, inputs["R"], 4 * of_radius["cv_r_each"])
        found = solve_network(table, "a", "b")
        assert found.resistance_pa_s_m3 == pytest.approx(expected, rel=EXACT)
        share = found.edges["resistance_share"]
        np.testing.assert_allclose(share, weight, rtol=EXACT, atol=EXACT)
        np.testing.assert_allclose(share * expected / np.array(inputs["R"]), sensitivity, rtol=EXACT, atol=EXACT)
        assert found.resistance_random_se == pytest.approx(doubt, rel=1e-9)


def grid(n: int) -> nx.Graph:
    return nx.grid_2d_graph(n, n)


def cube(n: int) -> nx.Graph:
    return nx.relabel_nodes(nx.path_graph(2), lambda k: (k,)) if n == 1 else nx.hypercube_graph(n)


CLOSED_FORMS = {
    "complete graph": lambda i: (nx.complete_graph(i["n"]), 0, 1),
    "cycle": lambda i: (nx.cycle_graph(i["n"]), 0, i["distance"]),
    "complete bipartite K_m,n, opp": lambda i: (nx.complete_bipartite_graph(i["m"], i["n"]), 0, i["m"]),
    "complete bipartite K_m,n, both": lambda i: (nx.complete_bipartite_graph(i["m"], i["n"]), 0, 1),
    "n-cube, unit edges, anti": lambda i: (cube(i["n"]), (0,) * i["n"], (1,) * i["n"]),
    "n-cube, unit edges, adj": lambda i: (cube(i["n"]), (0,) * i["n"], (1,) + (0,) * (i["n"] - 1)),
    "cube, face": lambda _: (cube(3), (0, 0, 0), (1, 1, 0)),
    "n x n node square grid, unit edges, corner to opp": lambda i: (grid(i["n"]), (0, 0), (i["n"] - 1,) * 2),
    "n x n node square grid, unit edges, corner to adj": lambda i: (grid(i["n"]), (0, 0), (0, i["n"] - 1)),
}


@pytest.mark.parametrize("name", CLOSED_FORMS)
def test_networks_of_unit_segments(name):
    rows = [row for row in published("network_closed_form") if row[0]["network"].startswith(name)]
    assert rows
    for inputs, expected in rows:
        graph, a, b = CLOSED_FORMS[name](inputs)
        assert between(graph, a, b) == pytest.approx(expected, rel=EXACT)


def test_the_antipodal_cube_formula_in_more_dimensions():
    """sum_k k! (n - k - 1)! / n! (Nedermeyer & Smorodinsky 1996, from memory; a closed form by symmetry)."""
    for n in (7, 9):
        formula = sum(Fraction(factorial(k) * factorial(n - k - 1), factorial(n)) for k in range(n))
        assert between(cube(n), (0,) * n, (1,) * n) == pytest.approx(float(formula), rel=EXACT)


def test_a_long_ladder_comes_to_the_square_root_of_3_less_1():
    """Across the end rung of unit rails and rungs: 1, 3/4, 11/15, 41/56 … (recursion R' = (2 + R) / (3 + R))."""
    exact = Fraction(1)
    for rungs in (1, 2, 3, 4, 5, 6):
        assert between(nx.ladder_graph(rungs), 0, rungs) == pytest.approx(float(exact), rel=EXACT)
        exact = (2 + exact) / (3 + exact)
    assert between(nx.ladder_graph(2000), 0, 2000) == pytest.approx(np.sqrt(3) - 1, rel=EXACT)


def test_symmetric_trees():
    """Murray 1926: where children's radii follow r^3, each generation adds the root's resistance."""
    for inputs, expected in published("symmetric_tree_resistance"):
        generations = inputs["generations_after_root"]
        n = 2 ** (generations + 1) - 1
        child = np.arange(n)  # segment i leads to node i; the root segment leads from "in" to node 0
        level = np.floor(np.log2(child + 1))
        radius_ratio = 2.0 ** (-1 / inputs["junction_exponent"])
        length, radius = inputs["length_ratio"] ** level, radius_ratio**level
        table = pd.DataFrame({"node_a": (child - 1) // 2, "node_b": child, "resistance_pa_s_m3": length / radius**4})
        leaves = child[child >= n // 2]
        found = solve_network(table, -1, leaves)
        assert found.resistance_pa_s_m3 == pytest.approx(expected, rel=1e-10)
        assert found.edges["resistance_share"].sum() == pytest.approx(1.0, rel=EXACT)
        if inputs["case"] == "Murray, L prop r":
            per_level = found.edges["resistance_share"].groupby(level).sum()
            np.testing.assert_allclose(per_level, 1 / (generations + 1), rtol=1e-10)


@st.composite
def networks(draw) -> pd.DataFrame:
    """A connected network of 3 to 12 nodes with parallel segments, of resistances over four decades."""
    n = draw(st.integers(3, 12))
    parents = [draw(st.integers(0, k - 1)) for k in range(1, n)]
    more = draw(st.lists(st.tuples(st.integers(0, n - 1), st.integers(0, n - 1)), max_size=15))
    pairs = [*zip(parents, range(1, n), strict=True), *(pair for pair in more if pair[0] != pair[1])]
    exponent = st.floats(-2, 2, allow_nan=False)
    return edges(pairs, [10.0 ** draw(exponent) for _ in pairs])


def library_resistance(table: pd.DataFrame, a, b) -> float:
    graph = nx.MultiGraph()
    for row in table.itertuples():
        graph.add_edge(row.node_a, row.node_b, weight=row.resistance_pa_s_m3)
    return nx.resistance_distance(graph, a, b, weight="weight", invert_weight=True)


@given(networks())
@settings(max_examples=60, deadline=None)
def test_networks_agree_with_a_graph_library(table):
    """The resistance distance of networkx, from a pseudoinverse; its dense algebra is good to about 1e-8 here."""
    assert solve_network(table, 0, 1).resistance_pa_s_m3 == pytest.approx(library_resistance(table, 0, 1), rel=1e-7)


def test_networks_agree_with_a_pore_network_library():
    """Pressures and flow of random networks as a library for porous materials has them, to 1e-9."""
    path = Path(__file__).parents[1] / "data" / "pore_networks.json"
    for network in json.loads(path.read_text(encoding="utf-8"))["networks"]:
        pairs = list(zip(network["node_a"], network["node_b"], strict=True))
        found = solve_network(edges(pairs, network["resistance"]), 0, 1)
        assert found.resistance_pa_s_m3 == pytest.approx(1.0 / network["flow"], rel=1e-9)
        pressure = found.nodes.set_index("node")["pressure_mmhg"].loc[range(len(network["pressure"]))]
        np.testing.assert_allclose(pressure, network["pressure"], atol=1e-9)


@given(networks())
@settings(max_examples=40, deadline=None)
def test_networks_agree_with_a_dense_nodal_analysis(table):
    """Pressures and flows by textbook nodal analysis with a dense solver, scaled rows: 1e-9 of the whole."""
    found = solve_network(table, 0, 1)
    n = int(table[["node_a", "node_b"]].to_numpy().max()) + 1
    incidence = np.zeros((len(table), n))
    incidence[np.arange(len(table)), table["node_a"]] += 1
    incidence[np.arange(len(table)), table["node_b"]] -= 1
    root = np.sqrt(1 / table["resistance_pa_s_m3"].to_numpy())[:, None] * incidence
    free = np.arange(2, n)
    pressure = np.zeros(n)
    pressure[0] = PA_PER_MMHG
    # least dissipation (Thomson): the free pressures that make the weighted drops least, by orthogonal factors
    pressure[free] = np.linalg.lstsq(root[:, free], -root[:, 0] * PA_PER_MMHG, rcond=None)[0]
    flow = incidence @ pressure / table["resistance_pa_s_m3"].to_numpy()
    through = flow[table["node_a"] == 0].sum() - flow[table["node_b"] == 0].sum()
    assert found.resistance_pa_s_m3 == pytest.approx(PA_PER_MMHG / through, rel=1e-9)
    np.testing.assert_allclose(found.edges["flow_nl_min"] / NL_MIN_PER_M3_S, flow, atol=1e-9 * through)


@given(networks())
@settings(max_examples=30, deadline=None)
def test_the_sum_of_foster(table):
    """Foster 1949: over all segments, R_between_their_ends / R_segment sums to nodes - 1."""
    total = sum(
        solve_network(table, row.node_a, row.node_b).resistance_pa_s_m3 / row.resistance_pa_s_m3
        for row in table.itertuples()
    )
    n_nodes = len(set(table["node_a"]) | set(table["node_b"]))
    assert total == pytest.approx(n_nodes - 1, rel=1e-10)


def test_the_sum_of_foster_on_a_grid():
    ((_, expected),) = published("foster_theorem")
    lattice = nx.grid_2d_graph(3, 4)
    assert sum(between(lattice, a, b) for a, b in lattice.edges) == pytest.approx(expected, rel=EXACT)


@given(networks(), st.integers(0, 100), st.floats(1.01, 100))
@settings(max_examples=40, deadline=None)
def test_narrowing_any_segment_never_lowers_resistance(table, which, factor):
    """Rayleigh's monotonicity law."""
    before = solve_network(table, 0, 1).resistance_pa_s_m3
    narrowed = table.copy()
    narrowed.loc[which % len(table), "resistance_pa_s_m3"] *= factor
    assert solve_network(narrowed, 0, 1).resistance_pa_s_m3 >= before * (1 - 1e-12)


@given(networks())
@settings(max_examples=15, deadline=None)
def test_shares_are_derivatives_and_sum_to_1(table):
    """Cohn 1950: d ln R / d ln R_i, here by central differences (error of second order in the step)."""
    found = solve_network(table, 0, 1)
    share = found.edges["resistance_share"]
    assert share.sum() == pytest.approx(1.0, rel=EXACT)
    step = 1e-4
    for i in range(len(table)):
        side = []
        for sign in (-1, 1):
            moved = table.copy()
            moved.loc[i, "resistance_pa_s_m3"] *= np.exp(sign * step)
            side.append(np.log(solve_network(moved, 0, 1).resistance_pa_s_m3))
        assert (side[1] - side[0]) / (2 * step) == pytest.approx(share[i], abs=10 * step**2)


@given(networks(), st.randoms(use_true_random=False))
@settings(max_examples=40, deadline=None)
def test_names_order_and_direction_do_not_matter(table, random):
    before = solve_network(table, 0, 1)
    order = list(range(len(table)))
    random.shuffle(order)
    other = table.iloc[order].rename(columns={"node_a": "node_b", "node_b": "node_a"})
    other = other.assign(node_a="n" + other["node_a"].astype(str), node_b="n" + other["node_b"].astype(str))
    after = solve_network(other.reset_index(drop=True), ["n1"], ["n0"])
    assert after.resistance_pa_s_m3 == pytest.approx(before.resistance_pa_s_m3, rel=EXACT)
    scale = before.edges["flow_nl_min"].abs().max()  # inlet and outlet swapped and ends swapped: the signs cancel
    np.testing.assert_allclose(
        after.edges["flow_nl_min"], before.edges["flow_nl_min"].iloc[order], rtol=1e-9, atol=1e-12 * scale
    )


def balance(found: SolvedNetwork) -> pd.Series:
    table = found.edges
    return (
        table.groupby("node_a")["flow_nl_min"].sum().sub(table.groupby("node_b")["flow_nl_min"].sum(), fill_value=0.0)
    )


def exact_resistance(pairs, resistance, n: int) -> float:
    """R between nodes 0 and n - 1 by elimination in rational numbers: a slow and obvious twin."""
    matrix = [[Fraction(0)] * n for _ in range(n)]
    for (a, b), value in zip(pairs, resistance, strict=True):
        g = 1 / Fraction(float(value))
        matrix[a][a] += g
        matrix[b][b] += g
        matrix[a][b] -= g
        matrix[b][a] -= g
    for k in range(1, n - 1):  # inner nodes only
        for i in range(n):
            if i != k and matrix[i][k] != 0 and (i > k or i == 0):
                factor = matrix[i][k] / matrix[k][k]
                matrix[i] = [x - factor * y for x, y in zip(matrix[i], matrix[k], strict=True)]
    return float(1 / matrix[0][0])


@pytest.mark.parametrize("decades", [12, 16])
def test_resistances_over_many_decades(decades):
    """A Laplacian alone loses thin segments beside wide ones; 1e-9 of R is asked at 16 decades, 1e-12 at 12."""
    rng = np.random.default_rng(decades)
    n = 14
    for _ in range(10):
        pairs = [(k, k + 1) for k in range(n - 1)] + [tuple(sorted(rng.choice(n, 2, replace=False))) for _ in range(12)]
        resistance = 10 ** rng.uniform(-decades / 2, decades / 2, len(pairs))
        found = solve_network(edges([(int(a), int(b)) for a, b in pairs], resistance), 0, n - 1)
        expected = exact_resistance(pairs, resistance, n)
        assert found.resistance_pa_s_m3 == pytest.approx(expected, rel={12: EXACT, 16: 1e-9}[decades])
        inner = balance(found).drop([0, n - 1])
        assert inner.abs().max() <= 1e-9 * balance(found)[0]


def test_absurd_spans_are_refused_in_words():
    with pytest.raises(NetworkError, match=r"span 40 decades; leave out or correct"):
        solve_network(edges([("a", "b"), ("b", "c")], [1e-20, 1e20]), "a", "c")


def test_a_path_of_a_hundred_thousand_segments():
    """No recursion, and 12 decades along a path: R is the plain sum."""
    n = 100_000
    resistance = 10 ** np.random.default_rng(0).uniform(-6, 6, n)
    table = pd.DataFrame({"node_a": np.arange(n), "node_b": np.arange(1, n + 1), "resistance_pa_s_m3": resistance})
    assert solve_network(table, 0, n).resistance_pa_s_m3 == pytest.approx(resistance.sum(), rel=1e-10)


def test_a_star_of_ten_thousand():
    found = solve_network(edges([("hub", k) for k in range(10_000)]), 0, range(1, 10_000))
    assert found.resistance_pa_s_m3 == pytest.approx(1 + 1 / 9999, rel=EXACT)


def test_dead_ends_rings_and_loops_carry_nothing_and_do_no_harm():
    harmless = [("b", "dead"), ("dead", "end"), ("b", "b"), ("x", "y"), ("y", "x"), ("b", "p"), ("p", "q"), ("q", "b")]
    found = solve_network(edges([("a", "b"), ("b", "c"), *harmless]), "a", "c")
    assert found.resistance_pa_s_m3 == pytest.approx(2.0, rel=EXACT)
    assert (found.edges["flow_nl_min"].iloc[2:] == 0).all()
    assert (found.edges["resistance_share"].iloc[2:] == 0).all()
    pressure = found.nodes.set_index("node")["pressure_mmhg"]
    assert pressure["end"] == pytest.approx(0.5)
    assert np.isnan(pressure["x"])


@pytest.mark.parametrize(
    ("table", "inlets", "outlets", "error", "words"),
    [
        (edges([("a", "b")]).drop(columns="node_b"), "a", "b", NetworkError, "edges lacks node_b; it has node_a"),
        (edges([("a", None)]), "a", "b", NetworkError, "row 0 of edges has an empty node_a or node_b"),
        (edges([("a", "b")]), "a", ["b", "a"], NetworkError, "node 'a' is inlet and outlet at once"),
        (edges([("a", "b")]), "z", "b", NetworkError, "inlet 'z' is at no segment's end"),
        (edges([("a", "b")]), "a", [], NetworkError, "no outlet was given"),
        (edges([("a", "b"), ("c", "d")]), "a", "d", NetworkError, "no way leads from the inlets to the outlets"),
        (edges([("a", "b")], 0.0), "a", "b", DomainError, "resistance_pa_s_m3 is 0.0 in row 0 of edges"),
        (edges([("a", "b"), ("b", "c")], [1, np.nan]), "a", "c", DomainError, "resistance_pa_s_m3 is nan in row 1"),
        (edges([("a", "b")], 1.0, -0.1), "a", "b", DomainError, "resistance_se is -0.1 in row 0"),
    ],
)
def test_questions_without_answer_are_refused_by_name(table, inlets, outlets, error, words):
    with pytest.raises(error, match=words):
        solve_network(table, inlets, outlets)


def test_a_drive_must_drive():
    with pytest.raises(DomainError, match=r"drive_mmhg is 0.0"):
        solve_network(edges([("a", "b")]), "a", "b", drive_mmhg=0.0)


def test_unknown_uncertainty_stays_unknown():
    assert np.isnan(solve_network(edges([("a", "b")]), "a", "b").resistance_random_se)


def test_pressure_and_flow_are_solved_together_where_the_laplacian_fails():
    """A floating wide segment between two thin ones, 17 decades apart: the flow is the sum's, to all digits."""
    resistance = np.array([1.0, 1e-17, 1.0])
    ends = (np.array([0, 1, 2]), np.array([1, 2, 3]))
    pressure, flow = solve_flows(ends, resistance, np.array([1.0, np.nan, np.nan, 0.0]), np.zeros(4))
    np.testing.assert_allclose(flow, 0.5, rtol=EXACT)
    np.testing.assert_allclose(pressure, [1.0, 0.5, 0.5, 0.0], rtol=EXACT)
