"""How cells part against published values, and what must hold whatever the network: no cell is lost or made."""

import dataclasses
from types import MappingProxyType

import numpy as np
import pytest
from beds import bed, blood, published, straight
from hypothesis import given, settings
from hypothesis import strategies as st

from vasohm.flags import Flag
from vasohm.flow import rheology
from vasohm.flow.development import tube_hematocrit
from vasohm.flow.hematocrit import AGREEMENT, ROUND_AGREEMENT, settle_hematocrit
from vasohm.flow.hydraulics import solve_flow
from vasohm.flow.phase_separation import SPLIT_LAWS, Stream, carry_cells, cell_share
from vasohm.flow.rheology import HIGHEST_HEMATOCRIT, ViscosityLaw, apparent_viscosity
from vasohm.flow.scenarios import Scenario, run_scenarios
from vasohm.flow.terminals import NetworkSettings, TerminalPoint, place_terminals
from vasohm.network.graph import NodeKind

FORMULA = 1e-9  # published formulas in double precision, evaluated by another program
ROUNDING = 1e-12  # of all cells that enter: sums of some hundred terms
AUTO = NetworkSettings("auto", 1.0)
Y_NODES = [(0.0, 100.0), (100.0, 100.0), (200.0, 50.0), (200.0, 150.0)]


def split(law: str = "2005", hematocrit: float = 0.45, viscosity: str = "pries-in-vivo"):
    return dataclasses.replace(blood(viscosity, hematocrit), split_law=law)


def point(x, y, role, *, pressure=None, flow=None, hematocrit=None) -> TerminalPoint:
    return TerminalPoint(x, y, role, pressure, flow, hematocrit)


def solve(measured, how, points=()):
    return solve_flow(measured, place_terminals(measured, points, AUTO), how)


def y_bed(radii=(10.0, 8.0, 4.0)):
    pairs = [(0, 1), (1, 2), (1, 3)]
    return bed(Y_NODES, [straight(Y_NODES, a, b, r) for (a, b), r in zip(pairs, radii, strict=True)])


def cell_balance(measured, found) -> np.ndarray:
    """Cells that leave less those that enter each node, over all that pass the network."""
    cells = np.nan_to_num(found.flow_nl_min * found.hematocrit)
    n = measured.graph.n_nodes
    net = np.bincount(measured.graph.node_a, cells, n) - np.bincount(measured.graph.node_b, cells, n)
    return net / (0.5 * np.abs(net).sum())


@pytest.mark.parametrize("year", ["1990", "2005"])
def test_the_share_of_cells_takes_its_published_values(year):
    """A wrong constant, a sign of the asymmetry or a lost factor of 1 - 2 X0 fails here."""
    rows = [row for row in published("phase_separation") if year in row[0]["version"]]
    assert len(rows) >= 15
    for inputs, expected in rows:
        feed, own, other = (np.array(float(inputs[f"D_{name}_um"])) for name in ("F", "alpha", "beta"))
        hematocrit, flow_share = np.array(inputs["H_D"]), np.array(inputs["FQ_alpha"])
        drawn = cell_share(SPLIT_LAWS[year], flow_share, (feed, own, other), hematocrit)
        rest = cell_share(SPLIT_LAWS[year], 1.0 - flow_share, (feed, other, own), hematocrit)
        assert drawn == pytest.approx(expected["FQ_E_alpha"], rel=FORMULA)
        assert drawn + rest == pytest.approx(1.0, rel=FORMULA)
        found = (hematocrit * drawn / flow_share, hematocrit * rest / (1.0 - flow_share))
        assert found == pytest.approx((expected["H_alpha"], expected["H_beta"]), rel=FORMULA)


def test_where_no_share_is_left_all_cells_follow_the_larger_flow():
    """Feeding vessels below 0.8 um (1990): X0 above one half; half of the flow takes half of the cells."""
    thin = (np.full(3, 0.7), np.ones(3), np.ones(3))
    drawn = cell_share(SPLIT_LAWS["1990"], np.array([0.4, 0.5, 0.6]), thin, np.full(3, 0.45))
    np.testing.assert_array_equal(drawn, [0.0, 0.5, 1.0])


@pytest.mark.parametrize("law", SPLIT_LAWS)
def test_one_bifurcation_of_an_image_by_hand(law):
    """Flows of the image, the law at them, and cells over flow: each by itself."""
    measured = y_bed()
    found = solve(measured, split(law))
    share = found.flow_nl_min[1:] / found.flow_nl_min[0]
    feed, wide, thin = (np.array(2 * r) for r in found.radius_hydraulic_um)
    drawn = cell_share(SPLIT_LAWS[law], share, (feed, np.array([wide, thin]), np.array([thin, wide])), np.array(0.45))
    np.testing.assert_allclose(found.hematocrit, [0.45, *(0.45 * drawn / share)], rtol=FORMULA)
    assert found.hematocrit[2] < 0.45 - 1e-3 < 0.45 < found.hematocrit[1]
    # viscosity and resistance are those of the parted cells
    expected = apparent_viscosity("pries-in-vivo", found.radius_hydraulic_um, found.hematocrit)
    tolerance = 5 * ROUND_AGREEMENT  # of ln viscosity per hematocrit, below 5 in the law's range
    np.testing.assert_allclose(found.viscosity_mpa_s, expected, rtol=tolerance)
    drop = (found.pressure_mmhg[1] - found.pressure_mmhg[2:]) / found.flow_nl_min[1:]
    np.testing.assert_allclose(drop / drop[0], found.resistance_pa_s_m3[1:] / found.resistance_pa_s_m3[1], rtol=1e-9)
    assert found.hematocrit_turns[0] > 0
    assert np.isnan(solve(measured, blood("pries-in-vivo")).hematocrit_turns[0])


def test_converging_vessels_mix():
    """The Y backwards: two inlets with hematocrits of their own; cells over flow in what they join to."""
    measured = y_bed((10.0, 8.0, 6.0))
    points = [
        point(0, 100, "outlet"),
        point(200, 50, "inlet", hematocrit=0.5),
        point(200, 150, "inlet", hematocrit=0.2),
    ]
    found = solve(measured, split(), points)
    flow = np.abs(found.flow_nl_min)
    np.testing.assert_array_equal(found.hematocrit[1:], [0.5, 0.2])
    assert found.hematocrit[0] == pytest.approx((0.5 * flow[1] + 0.2 * flow[2]) / flow[0], rel=FORMULA)


def test_four_like_daughters_share_alike_and_three_unlike_ones_lose_no_cell():
    """More than two daughters: by symmetry a quarter each; else shares that sum to 1, the least for the least flow."""
    angle = np.linspace(-1.0, 1.0, 4)
    nodes = [(0.0, 0.0), (100.0, 0.0), *((100 + 100 * np.cos(t), 100 * np.sin(t)) for t in angle)]
    vessels = [straight(nodes, 0, 1, 12.0)]
    alike = bed(nodes, [*vessels, *(straight(nodes, 1, k, 5.0) for k in range(2, 6))])
    np.testing.assert_allclose(solve(alike, split()).hematocrit, 0.45, rtol=FORMULA)
    unlike = bed(nodes[:5], [*vessels, *(straight(nodes, 1, k, r) for k, r in zip((2, 3, 4), (3, 6, 9), strict=True))])
    found = solve(unlike, split())
    assert (np.diff(found.hematocrit[1:]) > 0).all()
    assert np.abs(cell_balance(unlike, found)[1]) < ROUNDING


@st.composite
def meshes(draw):
    """A grid of vessels with random radii, some of them missing, an inlet and an outlet or two at the rim."""
    n = draw(st.integers(3, 5))
    rng = np.random.default_rng(draw(st.integers(0, 10_000)))
    nodes = [(40.0 * x, 40.0 * y) for y in range(n) for x in range(n)]
    pairs = [(k, k + 1) for k in range(n * n) if k % n < n - 1]
    pairs += [(k, k + n) for k in range(n * (n - 1)) if rng.random() < 0.8]
    radius = rng.lognormal(np.log(6.0), 0.35, len(pairs))
    ends = rng.choice(n * n, 4, replace=False)
    kinds = [NodeKind.END if k in ends else NodeKind.BRANCHING for k in range(n * n)]
    measured = bed(nodes, [straight(nodes, a, b, r, n=3) for (a, b), r in zip(pairs, radius, strict=True)], kinds=kinds)
    given = [0.45, 0.3, None, None]
    roles = ["inlet", "inlet", "outlet", "outlet"]
    points = [point(*nodes[k], role, hematocrit=h) for k, role, h in zip(ends, roles, given, strict=True)]
    return measured, points, ends


@given(meshes(), st.sampled_from(sorted(SPLIT_LAWS)))
@settings(max_examples=12, deadline=None)
def test_no_cell_is_lost_or_made_in_any_mesh(mesh, law):
    measured, points, ends = mesh
    found = solve(measured, split(law), points)
    known = np.isfinite(found.network_resistance_pa_s_m3)
    np.testing.assert_array_equal(found.hematocrit_turns > 0, known)
    cells = found.hematocrit[known[found.terminals.segment_network]]
    assert ((cells >= 0) & (cells <= HIGHEST_HEMATOCRIT)).all()
    if known.any():
        assert np.abs(np.delete(cell_balance(measured, found), ends)).max() < ROUNDING


def test_the_settled_state_agrees_with_itself():
    """Flows at the stated resistances give the stated hematocrits back, to what agreement means."""
    measured = y_bed()
    found = solve(measured, split())
    terminals = place_terminals(measured, [], AUTO)
    again = settle_hematocrit(
        measured.graph,
        terminals,
        SPLIT_LAWS["2005"],
        resistance_of=lambda _: found.resistance_pa_s_m3,
        radius_um=found.radius_hydraulic_um,
        entering_hematocrit=np.full(4, 0.45),
        start=found.hematocrit,
    )
    np.testing.assert_allclose(again.hematocrit, found.hematocrit, atol=AGREEMENT)


def test_packed_cells_overflow_into_the_vessel_beside():
    """Feeding blood near its fullest: no vessel holds more than 0.75, and the rest goes on without loss."""
    flow = np.array([10.0, 9.0, 1.0])
    ends = (np.array([0, 1, 1]), np.array([1, 2, 3]))
    terminal = np.array([True, False, True, True])
    stream = Stream(ends, flow, np.array([3.0, 2.0, 1.0, 1.0]), terminal, np.full(4, 0.74), np.array([6.0, 5.0, 5.0]))
    found, _ = carry_cells(stream, SPLIT_LAWS["1990"])
    assert found[1] == pytest.approx(HIGHEST_HEMATOCRIT, rel=FORMULA)
    assert found[1:] @ flow[1:] == pytest.approx(found[0] * flow[0], rel=FORMULA)


def test_one_hematocrit_without_parting_where_blood_does_not_divide():
    """A path, a dead end and a network without outlet keep what enters; nothing is invented where nothing flows."""
    nodes = [(0.0, 0.0), (100.0, 0.0), (200.0, 0.0), (100.0, 50.0), (0.0, 300.0), (100.0, 300.0)]
    vessels = [straight(nodes, a, b, 6.0) for a, b in ((0, 1), (1, 2), (1, 3), (4, 5))]
    kinds = [NodeKind.END if k != 1 else NodeKind.BRANCHING for k in range(6)]
    points = [point(0, 0, "inlet", hematocrit=0.4), point(200, 0, "outlet"), point(0, 300, "inlet")]
    found = solve(bed(nodes, vessels, kinds=kinds), split(), points)
    np.testing.assert_allclose(found.hematocrit, [0.4, 0.4, 0.4, 0.45], rtol=FORMULA)
    assert found.segment_flags[2] & Flag.NO_FLOW
    assert np.isnan(found.hematocrit_turns[1])
    assert found.network_flags[1] == Flag.NO_OUTLET


def stepping(radius_um, hematocrit, *, plasma_viscosity_mpa_s, parameters):
    """Viscosity that springs up where cells are dense and falls where they are few: no state agrees with itself."""
    del parameters
    thick = np.where(np.asarray(hematocrit) > 0.45, 40.0, 1.0)
    return plasma_viscosity_mpa_s * thick + 0.0 * np.asarray(radius_um)


def test_a_hematocrit_that_finds_no_state_is_a_flag_and_no_number(monkeypatch):
    """Two like daughters of a network swing for ever; the other network of the image is measured all the same."""
    laws = {**rheology.LAWS, "stepping": ViscosityLaw(stepping, (0.0, np.inf), (0.0, 0.75), "made up")}
    monkeypatch.setattr(rheology, "LAWS", MappingProxyType(laws))
    monkeypatch.setattr(rheology, "PLUGINS", dataclasses.replace(rheology.PLUGINS, built_in=tuple(laws)))
    nodes = [*Y_NODES, (0.0, 400.0), (100.0, 400.0)]
    radii = [(0, 1, 10.0), (1, 2, 8.0), (1, 3, 7.9), (4, 5, 6.0)]
    measured = bed(nodes, [straight(nodes, a, b, r) for a, b, r in radii])
    found = solve(measured, split(viscosity="stepping"))
    assert found.network_flags[0] & Flag.HEMATOCRIT_UNSETTLED
    lost = (found.hematocrit, found.viscosity_mpa_s, found.resistance_pa_s_m3, found.flow_nl_min, found.share)
    assert all(np.isnan(values[:3]).all() for values in lost)
    assert np.isnan([found.network_resistance_pa_s_m3[0], found.hematocrit_turns[0]]).all()
    assert np.isfinite([found.network_resistance_pa_s_m3[1], found.hematocrit[3], found.hematocrit_turns[1]]).all()
    assert not found.network_flags[1] & Flag.HEMATOCRIT_UNSETTLED


def test_scenarios_part_the_cells_anew():
    """Widening one daughter moves flow and cells: before and after are two solutions, each with its own cells."""
    asked = Scenario("wider", 1.3, 5.0, None, None, None)
    measured = y_bed()
    found = run_scenarios(measured, place_terminals(measured, [], AUTO), split(), [asked])
    after = solve(y_bed((10.0, 8.0, 5.2)), split())
    np.testing.assert_allclose(found.resistance_after_pa_s_m3, after.network_resistance_pa_s_m3, rtol=1e-4)
    held = run_scenarios(measured, place_terminals(measured, [], AUTO), blood("pries-in-vivo"), [asked])
    assert found.ratio[0] != pytest.approx(held.ratio[0], rel=1e-3)


def test_tube_hematocrit_takes_its_published_values_and_never_exceeds_what_flows_out():
    rows = published("fahraeus_tube_over_discharge_hematocrit")
    assert len(rows) >= 20
    for inputs, ratio in rows:
        found = tube_hematocrit(np.array(inputs["D_um"]), np.array(inputs["H_D"]))
        assert found == pytest.approx(ratio * inputs["H_D"], rel=FORMULA)
    thin = tube_hematocrit(np.linspace(0.1, 2.5, 25), np.full(25, 0.45))
    np.testing.assert_array_equal(thin, 0.45)
