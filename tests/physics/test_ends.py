"""Flows at unknown ends, estimated from what wall shear and pressure are drawn to.

The method: Fry BC, Lee J, Smith NP, Secomb TW (2012) Microcirculation 19:530-538,
doi:10.1111/j.1549-8719.2012.00184.x. Truth comes from networks solved with known pressures at all ends.
"""

from dataclasses import replace

import numpy as np
import pytest
from beds import bed, newtonian, straight
from scipy.linalg import null_space

from vasohm.errors import DomainError
from vasohm.flags import Flag
from vasohm.flow.estimated_ends import EndProblem, EndTargets, estimate_ends, nearest_pressures
from vasohm.flow.hydraulics import solve_flow
from vasohm.flow.kirchhoff import solve_flows
from vasohm.flow.terminals import NetworkSettings, TerminalPoint, place_terminals
from vasohm.units import NL_MIN_PER_M3_S, PA_PER_MMHG

ESTIMATE = NetworkSettings("estimate", 1.0)
TARGETS = EndTargets((2.0,) * 4, 1.0, (30.0,) * 4, 15.0)
RESIDUE = 1e-9  # of the network's flow: rounding of a solution whose conductances span two decades


def lattice(n, n_ends, seed):
    """A square mesh with ends on its border: nodes of the segments, radii (um), lengths (um), resistances, ends."""
    rng = np.random.default_rng(seed)
    index = np.arange(n * n).reshape(n, n)
    border = np.unique(np.concatenate([index[0], index[-1], index[:, 0], index[:, -1]]))
    end_nodes = n * n + np.arange(n_ends)
    a = np.concatenate([index[:, :-1].ravel(), index[:-1].ravel(), rng.choice(border, n_ends, replace=False)])
    b = np.concatenate([index[:, 1:].ravel(), index[1:].ravel(), end_nodes])
    radius, length = np.exp(rng.normal(np.log(5.0), 0.3, a.size)), rng.uniform(60.0, 140.0, a.size)
    resistance = 8 * 3e-3 * length * 1e-6 / (np.pi * (radius * 1e-6) ** 4)
    return a, b, radius, length, resistance, end_nodes, rng


def solved(n, n_ends, seed):
    """The lattice with pressures between 20 and 45 mmHg at its ends, and what then flows."""
    a, b, radius, length, resistance, ends, rng = lattice(n, n_ends, seed)
    n_nodes = n * n + n_ends
    fixed = np.full(n_nodes, np.nan)
    fixed[ends] = rng.uniform(20.0, 45.0, n_ends) * PA_PER_MMHG
    pressure, flow = solve_flows((a, b), resistance, fixed, np.zeros(n_nodes))
    inflow = np.bincount(a, flow, n_nodes) - np.bincount(b, flow, n_nodes)
    shear_per_drop = radius / (2 * length)  # of a uniform tube (Sutera & Skalak 1993)
    unknown = np.zeros(n_nodes)
    unknown[ends] = np.nan
    problem = EndProblem(
        ends=(a, b),
        resistance=resistance,
        shear_per_drop=shear_per_drop,
        length=length,
        shear_target=np.abs(flow) * resistance * shear_per_drop,
        shear_sd=1.0,
        pressure_target=pressure,
        pressure_sd=2000.0,
        fixed_pressure=np.full(n_nodes, np.nan),
        inflow=unknown,
        held=np.zeros(a.size),
        start=np.zeros(a.size),
    )
    return problem, pressure, inflow


def flows_of(problem, pressure):
    a, b = problem.ends
    flow = (pressure[a] - pressure[b]) / problem.resistance
    return np.bincount(a, flow, pressure.size) - np.bincount(b, flow, pressure.size)


@pytest.mark.parametrize(("n", "n_ends"), [(4, 5), (12, 20)])
def test_targets_from_truth_give_the_true_flows_back(n, n_ends):
    """Pressures and sizes of shear as they are: the truth has no misfit, and directions come out by themselves."""
    problem, pressure, inflow = solved(n, n_ends, 3)
    found = nearest_pressures(problem)
    through = np.maximum(inflow, 0).sum()
    np.testing.assert_allclose(found, pressure, rtol=1e-9)
    np.testing.assert_allclose(flows_of(problem, found), inflow, atol=RESIDUE * through)


def test_shear_alone_gives_the_flows_back_where_directions_are_known():
    """Pressure targets that say nothing of directions, and weigh next to nothing."""
    problem, pressure, inflow = solved(5, 6, 4)
    a, b = problem.ends
    vague = {
        "pressure_target": np.full(pressure.size, pressure.mean()),
        "pressure_sd": 1e6 * problem.pressure_sd,
        "held": np.sign(pressure[a] - pressure[b]),
    }
    found = nearest_pressures(replace(problem, **vague))
    # the pull of the pressures is down by the square of their sd: 1e-12 of that of shear, times its condition
    np.testing.assert_allclose(flows_of(problem, found), inflow, atol=1e-6 * np.maximum(inflow, 0).sum())


def test_the_misfit_is_least_under_balance():
    """Against a dense least-squares solution (LAPACK) over all pressures that balance the flows."""
    problem, pressure, _ = solved(3, 4, 5)
    rng = np.random.default_rng(1)
    problem = replace(
        problem,
        pressure_target=pressure + rng.normal(0, 500, pressure.size),
        shear_target=problem.shear_target * rng.uniform(0.5, 2, problem.shear_target.size),
    )
    found = nearest_pressures(problem)
    a, b = problem.ends
    direction = np.sign(found[a] - found[b])
    at_node = 0.5 * np.bincount(np.concatenate([a, b]), np.tile(problem.length, 2))

    drop = np.zeros((a.size, pressure.size))
    drop[np.arange(a.size), a], drop[np.arange(a.size), b] = 1.0, -1.0
    laplacian = drop.T @ (drop / problem.resistance[:, None])
    inner = ~np.isnan(problem.inflow)
    rows = laplacian[inner] / np.diag(laplacian)[inner, None]
    np.testing.assert_allclose(rows @ found, 0.0, atol=1e-8)
    free = null_space(rows)
    at = [np.sqrt(at_node) / problem.pressure_sd, np.sqrt(problem.length) / problem.shear_sd]
    whole = np.concatenate([np.diag(at[0]), (at[1] * problem.shear_per_drop)[:, None] * drop])
    wanted = np.concatenate([at[0] * problem.pressure_target, at[1] * direction * problem.shear_target])
    best = free @ np.linalg.lstsq(whole @ free, wanted)[0]
    np.testing.assert_allclose(found, best, rtol=1e-8)
    np.testing.assert_allclose(np.sign((best[a] - best[b]) / problem.resistance), direction)


NODES = [(0.0, 100.0), (60.0, 100.0), (120.0, 60.0), (120.0, 140.0), (180.0, 100.0), (240.0, 100.0), (120.0, 10.0)]
PAIRS = [(0, 1), (1, 2), (1, 3), (2, 3), (2, 4), (3, 4), (4, 5), (2, 6)]


def mesh(n_ends=3, **more):
    """Two or three ends on a small mesh; the end of node 0 is the widest."""
    n = len(PAIRS) - (n_ends < 3)
    radii = (9.0, 6.0, 5.0, 4.0, 5.0, 6.0, 8.0, 4.0)
    pairs = zip(PAIRS[:n], radii, strict=False)
    return bed(NODES[: 7 if n_ends == 3 else 6], [straight(NODES, a, b, r) for (a, b), r in pairs], **more)


def point(x, y, role, pressure=None, flow=None):
    return TerminalPoint(x, y, role, pressure, flow, None)


def estimated(measured, points=(), targets=TARGETS):
    return estimate_ends(measured, place_terminals(measured, points, ESTIMATE), newtonian(), targets)


def test_a_mesh_with_two_ends_has_the_resistance_of_known_ones():
    """There is one way in and one out: whatever the estimate, power over squared flow is the one of Ohm's law."""
    measured = mesh(2)
    known = [point(0, 100, "inlet"), point(240, 100, "outlet")]
    true = solve_flow(measured, place_terminals(measured, known, NetworkSettings("file", 1.0)), newtonian())
    terminals = estimated(measured)
    found = solve_flow(measured, terminals, newtonian())
    assert found.network_resistance_pa_s_m3[0] == pytest.approx(true.network_resistance_pa_s_m3[0], rel=1e-9)
    assert terminals.source == ("estimated",)
    assert found.network_flags[0] == Flag.TERMINALS_ESTIMATED
    assert terminals.role.tolist() == [1, 0, 0, 0, 0, -1]  # by the widest end: nothing tells otherwise
    level = found.pressure_mmhg[[0, 5]]
    assert level.mean() == pytest.approx(30.0, abs=1.0)  # the pressure's target, drawn to by both sides
    assert level[0] > level[1]


def test_power_over_squared_inflow_is_what_a_resistance_means_then():
    measured = mesh()
    found = solve_flow(measured, estimated(measured), newtonian())
    flow = found.flow_nl_min / NL_MIN_PER_M3_S
    power = np.sum(found.resistance_pa_s_m3 * flow**2)
    inflow = found.network_flow_nl_min[0] / NL_MIN_PER_M3_S
    assert found.network_resistance_pa_s_m3[0] == pytest.approx(power / inflow**2, rel=1e-9)
    assert found.network_flow_nl_min[0] == pytest.approx(np.abs(found.flow_nl_min[[0, 6, 7]]).sum() / 2, rel=1e-9)


def test_targets_by_class_tell_where_blood_comes_from():
    """Pressure falls from arterioles to venules: the same mesh with its classes exchanged runs the other way."""
    targets = EndTargets((2.0,) * 4, 1.0, (30.0, 45.0, 18.0, 30.0), 10.0)
    kinds = np.array([1, 0, 0, 0, 0, 0, 2, 2])
    forth = estimated(mesh(classes=kinds), targets=targets)
    back = estimated(mesh(classes=np.array([0, 2, 1])[kinds]), targets=targets)
    assert forth.role.tolist() == [1, 0, 0, 0, 0, -1, -1]
    assert back.role.tolist() == [-1, 0, 0, 0, 0, 1, 1]


def test_what_is_known_of_some_ends_is_kept():
    points = [point(240, 100, "inlet", flow=5.0), point(120, 10, "outlet")]
    measured = mesh()
    terminals = estimated(measured, points)
    found = solve_flow(measured, terminals, newtonian())
    assert terminals.source == ("estimated",)
    assert found.flow_nl_min[6] == pytest.approx(-5.0, rel=1e-9)  # enters by the segment's far end
    assert terminals.role[5] == 1
    by_pressure = estimated(measured, [point(240, 100, "inlet", pressure=40.0)])
    assert solve_flow(measured, by_pressure, newtonian()).pressure_mmhg[5] == pytest.approx(40.0, rel=1e-9)


def test_a_given_role_is_never_turned_round():
    """Targets that contradict what a person said of an end: no numbers, and the reader is told which end and why."""
    targets = EndTargets((2.0,) * 4, 1.0, (30.0, 45.0, 18.0, 30.0), 3.0)
    measured = mesh(classes=np.array([1, 0, 0, 0, 0, 0, 2, 2]))
    terminals = estimated(measured, [point(0, 100, "outlet")], targets)
    assert terminals.source == ("none",)
    assert terminals.network_flags.tolist() == [Flag.NO_TERMINALS]
    assert np.isnan(solve_flow(measured, terminals, newtonian()).network_resistance_pa_s_m3).all()
    (note,) = terminals.notes
    assert "outlet at x 0, y 100 px" in note
    agreeing = estimated(measured, [point(0, 100, "inlet")], targets)
    assert agreeing.role.tolist() == [1, 0, 0, 0, 0, -1, -1]
    assert not agreeing.notes


def test_trees_and_fully_known_meshes_are_not_estimated():
    nodes = [(0.0, 100.0), (100.0, 100.0), (200.0, 50.0), (200.0, 150.0)]
    tree = bed(nodes, [straight(nodes, a, b, r) for a, b, r in ((0, 1, 9.0), (1, 2, 7.0), (1, 3, 6.0))])
    assert estimated(tree).source == ("auto",)
    ends = [point(0, 100, "inlet"), point(240, 100, "outlet"), point(120, 10, "outlet")]
    assert estimated(mesh(), ends).source == ("file",)


def test_nothing_is_estimated_unless_asked():
    measured = mesh()
    for how in ("auto", "file", "none"):
        placed = place_terminals(measured, [], NetworkSettings(how, 1.0))
        assert estimate_ends(measured, placed, newtonian(), TARGETS) is placed
        assert placed.source == ("none",)


def test_without_targets_it_is_refused_in_words():
    with pytest.raises(DomainError, match="target_wall_shear_pa and target_pressure_mmhg"):
        estimated(mesh(), targets=None)


def test_a_mesh_that_blood_cannot_pass_stays_without_resistance():
    """One open end, or none: no estimate invents a way out."""
    loop = [(0, 1), (1, 2), (0, 2)]
    for pairs in (loop, [*loop, (2, 3)]):
        nodes = NODES[1 : 4 + (len(pairs) > 3)]
        measured = bed(nodes, [straight(nodes, a, b, 5.0) for a, b in pairs])
        terminals = estimated(measured)
        found = solve_flow(measured, terminals, newtonian())
        assert np.isnan(found.network_resistance_pa_s_m3).all()
        assert set(terminals.source) == {"none"}
        assert not terminals.role.any()
