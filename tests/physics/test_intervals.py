"""Intervals to first order and from random draws: against each other, and against draws made the slow and plain way."""

from dataclasses import replace

import numpy as np
import pytest
from beds import CommonErrors, IndependentErrors, bed, blood, newtonian, straight

from vasohm.flags import Flag
from vasohm.flow.elimination import plan_elimination, reduce_to_kept
from vasohm.flow.hydraulics import solve_flow
from vasohm.flow.kirchhoff import solve_flows
from vasohm.flow.monte_carlo import FIRST_ORDER_UP_TO, IntervalSettings, find_intervals, relative_radius_se
from vasohm.flow.poiseuille import segment_resistance
from vasohm.flow.rheology import apparent_viscosity
from vasohm.flow.terminals import NetworkSettings, TerminalPoint, place_terminals

AUTO = NetworkSettings("auto", 1.0)
DRAWS = 10_000
# a bound of a 95 % interval from n draws of a normal errs by sqrt(0.025 * 0.975 / n) / density = 2.7 sd / sqrt(n),
# and the median by 1.25 sd / sqrt(n); the width is 3.92 sd
BOUND_NOISE = np.hypot(2.7, 1.25) / 3.92 / np.sqrt(DRAWS)


def tree(generations=4, radius_um=20.0, **more):
    """A tree whose branches narrow by 12 to 30 %, each with 5 % of variation along it."""
    rng = np.random.default_rng(3)
    nodes, vessels = [(250.0, 5.0), (250.0, 60.0)], []
    vessels.append(straight(nodes, 0, 1, radius_um, n=12))
    parents = [(1, radius_um)]
    for generation in range(generations):
        children = []
        for parent, radius in parents:
            for side in (-1, 1):
                x, y = nodes[parent]
                nodes.append((x + side * 120 / 2**generation, y + 60.0))
                own = radius * rng.uniform(0.7, 0.88)
                along = own * np.exp(rng.normal(0, 0.05, 12))
                vessels.append(straight(nodes, parent, len(nodes) - 1, along))
                children.append((len(nodes) - 1, own))
        parents = children
    return bed(nodes, vessels, **more), []


def mesh(n=6, **more):
    """A square mesh with one inlet and two outlets, radii of 5 um with 25 % of scatter."""
    rng = np.random.default_rng(5)
    nodes = [(60.0 * x, 60.0 * y) for y in range(n) for x in range(n)]
    pairs = [(k, k + 1) for k in range(n * n) if k % n != n - 1] + [(k, k + n) for k in range(n * n - n)]
    nodes += [(-60.0, 0.0), (60.0 * n, 60.0 * (n - 1)), (60.0 * n, 0.0)]
    pairs += [(n * n, 0), (n * n - 1, n * n + 1), (n - 1, n * n + 2)]
    radii = [5 * np.exp(rng.normal(0, 0.25)) * np.exp(rng.normal(0, 0.05, 12)) for _ in pairs]
    ends = [TerminalPoint(*nodes[n * n + k], "inlet" if k == 0 else "outlet", None, None, None) for k in range(3)]
    return bed(nodes, [straight(nodes, a, b, r) for (a, b), r in zip(pairs, radii, strict=True)], **more), ends


def both(made, how, draws=DRAWS):
    measured, ends = made
    flow = solve_flow(measured, place_terminals(measured, ends, AUTO), how)
    found = [
        find_intervals(measured, flow, how, IntervalSettings(method, draws, 1)) for method in ("delta", "monte-carlo")
    ]
    assert found[0].draws[0] == 0
    assert found[1].draws[0] == draws
    return flow, *found


def misfit(plain, drawn):
    """Differences of the network's two bounds, as parts of the interval's width."""
    width = plain.network_hi - plain.network_lo
    return np.concatenate(
        [(drawn.network_lo - plain.network_lo) / width, (drawn.network_hi - plain.network_hi) / width]
    )


def full_blood(law):
    return replace(blood(law, 0.45, 0.02), plasma_viscosity_se_mpa_s=0.08)


@pytest.mark.parametrize("law", ["constant", "pries-in-vivo"])
@pytest.mark.parametrize("noise_sign", [1, -1])
@pytest.mark.parametrize("make", [tree, mesh])
def test_the_first_order_agrees_with_draws_where_radii_are_known_to_5_per_cent(make, noise_sign, law):
    """Within 5 % of the width, all causes on (JCGM 101:2008, 8: a Monte Carlo method validates the first order)."""
    n_points = make()[0].graph.n_points
    parts = {"ln_se": 0.04, "length_rel_se": 0.02, "errors": CommonErrors, "noise_sign": noise_sign}
    shared = np.full((n_points, 1), 0.025)
    flow, plain, drawn = both(make(**parts, shared=shared, pixel_size_rel_se=0.01), full_blood(law))
    assert 0.04 < relative_radius_se(flow)[0] <= FIRST_ORDER_UP_TO
    np.testing.assert_allclose(misfit(plain, drawn), 0.0, atol=0.05)
    of_segments = (drawn.segment_hi - plain.segment_hi) / (plain.segment_hi - plain.segment_lo)
    np.testing.assert_allclose(of_segments, 0.0, atol=0.05)


@pytest.mark.parametrize("make", [tree, mesh])
def test_beyond_it_the_program_draws_by_itself_and_says_so(make):
    """Where radii are known to 20 %, the first order is off by more than a tenth of the width."""
    for ln_se, by_draws in ((0.04, False), (0.2, True)):
        measured, ends = make(ln_se=ln_se, errors=CommonErrors, noise_sign=1)
        flow = solve_flow(measured, place_terminals(measured, ends, AUTO), newtonian())
        found = find_intervals(measured, flow, newtonian(), IntervalSettings("auto", 2000, 1))
        plain = find_intervals(measured, flow, newtonian(), IntervalSettings("delta", 2000, 1))
        assert (found.draws[0] == 2000) == by_draws
        assert (found.network_flags[0] == Flag.MONTE_CARLO) == by_draws
        assert found.notes == (("95 % intervals from 2000 random draws (seed 1): network 1.",) if by_draws else ())
        assert (np.abs(misfit(plain, found)).max() > 0.1) == by_draws


def plain_draws(measured, law, se, draws):
    """Slow twin: every point of a bifurcation drawn, each segment integrated, the two children put in parallel."""
    rng = np.random.default_rng(2)
    radius = measured.radius_um.reshape(3, -1)
    found = np.empty(draws)
    for k in range(draws):
        common = rng.normal(0, se["shared"]) + rng.normal(0, se["pixel"]) * np.array([1.0, 0.0])
        pixel = common[1]
        r = radius * np.exp(rng.normal(0, se["own"], (3, 1) if se["whole"] else radius.shape) + common[0])
        cells = 0.45 + rng.normal(0, se["hematocrit"])
        plasma = 1.2 * np.exp(rng.normal(0, se["plasma"] / 1.2))
        mu = apparent_viscosity(law, r, cells, plasma_viscosity_mpa_s=plasma, parameters={"viscosity_mpa_s": 3.0})
        length = measured.length_um * np.exp(rng.normal(0, se["length"], 3) + pixel)
        one, *two = segment_resistance(length, r, mu)
        found[k] = one + 1 / np.sum(1 / np.array(two))
    return found


NODES = [(0.0, 100.0), (100.0, 100.0), (200.0, 50.0), (200.0, 150.0)]


@pytest.mark.parametrize("whole", [True, False], ids=["segments err whole", "points err"])
def test_draws_are_those_of_every_point(whole):
    """Against the slow twin at an uncertainty where the first order is 10 % of the width off, in bounds over median."""
    se = {"own": 0.15 if whole else 0.3, "whole": whole, "shared": 0.05, "pixel": 0.02, "hematocrit": 0.02}
    se |= {"plasma": 0.08, "length": 0.03}
    measured = bed(
        NODES,
        [straight(NODES, a, b, r, n=9) for a, b, r in ((0, 1, 10.0), (1, 2, 7.0), (1, 3, 6.0))],
        ln_se=se["own"],
        errors=CommonErrors if whole else IndependentErrors,
        length_rel_se=se["length"],
        shared=np.full((27, 1), se["shared"]),
        pixel_size_rel_se=se["pixel"],
        noise_sign=1,
    )
    _, _, drawn = both((measured, []), full_blood("pries-in-vivo"))
    draws = 1000
    twin = plain_draws(measured, "pries-in-vivo", se, draws)
    low, middle, high = np.quantile(np.log(twin), (0.025, 0.5, 0.975))
    ln_resistance = np.log(
        solve_flow(
            measured, place_terminals(measured, [], AUTO), full_blood("pries-in-vivo")
        ).network_resistance_pa_s_m3[0]
    )
    noise = BOUND_NOISE * np.sqrt(1 + DRAWS / draws) * (high - low)
    assert np.log(drawn.network_lo[0]) - ln_resistance == pytest.approx(low - middle, abs=4 * noise)
    assert np.log(drawn.network_hi[0]) - ln_resistance == pytest.approx(high - middle, abs=4 * noise)
    assert ln_resistance == pytest.approx(middle, abs=0.1 * (high - low))  # the median is where it is said to be


def test_given_flows_and_unequal_pressures_are_drawn_too():
    """Terminals held at their own pressures or flows: against the first order, where it is good."""
    measured, ends = mesh(ln_se=0.02, errors=CommonErrors, noise_sign=1)
    held = [replace(ends[0], flow_nl_min=5.0), replace(ends[1], pressure_mmhg=10.0), replace(ends[2], flow_nl_min=1.0)]
    _, plain, drawn = both((measured, held), newtonian())
    np.testing.assert_allclose(misfit(plain, drawn), 0.0, atol=0.05)


def test_the_same_seed_gives_the_same_bounds_whatever_else_is_in_the_image():
    """Draws of a network must not depend on its neighbours, or dropping one vessel would move all bounds."""
    alone, _ = tree(3, ln_se=0.2, noise_sign=1)
    nodes = list(zip(alone.graph.node_x_px.tolist(), alone.graph.node_y_px.tolist(), strict=True))
    more = [*nodes, (400.0, 400.0), (480.0, 400.0)]
    radius = np.split(alone.radius_um, alone.graph.offsets[1:-1])
    vessels = [straight(more, a, b, r) for a, b, r in zip(alone.graph.node_a, alone.graph.node_b, radius, strict=True)]
    beside = bed(more, [*vessels, straight(more, len(nodes), len(nodes) + 1, 4.0, n=9)], ln_se=0.2, noise_sign=1)
    bounds = []
    for measured, seed in ((alone, 1), (alone, 1), (beside, 1), (alone, 2)):
        flow = solve_flow(measured, place_terminals(measured, [], AUTO), newtonian())
        found = find_intervals(measured, flow, newtonian(), IntervalSettings("monte-carlo", 300, seed))
        bounds.append((found.network_lo[0], found.network_hi[0]))
    assert bounds[0] == bounds[1]
    assert bounds[0] == pytest.approx(bounds[2], rel=1e-12)
    assert bounds[0] != bounds[3]


def test_networks_without_hematocrit_do_no_harm():
    """Where cells found no settled state beside it, a network is drawn all the same, as if alone."""
    measured, ends = mesh(4, ln_se=0.2, noise_sign=1)
    how = blood("pries-in-vivo")
    nodes = [
        *zip(measured.graph.node_x_px.tolist(), measured.graph.node_y_px.tolist(), strict=True),
        (0.0, 400.0),
        (60.0, 400.0),
    ]
    radius = np.split(measured.radius_um, measured.graph.offsets[1:-1])
    pairs = zip(measured.graph.node_a, measured.graph.node_b, radius, strict=True)
    vessels = [straight(nodes, a, b, r) for a, b, r in pairs]
    beside = bed(nodes, [*vessels, straight(nodes, len(nodes) - 2, len(nodes) - 1, 5.0)], ln_se=0.2, noise_sign=1)
    flow = solve_flow(beside, place_terminals(beside, ends, AUTO), how)
    unsettled = np.array(flow.hematocrit)
    unsettled[-1] = np.nan
    found = [
        find_intervals(beside, one, how, IntervalSettings("monte-carlo", 300, 1))
        for one in (flow, replace(flow, hematocrit=unsettled))
    ]
    assert found[0].network_hi[0] == found[1].network_hi[0]


def test_a_network_too_large_for_the_draws_gets_fewer_or_none_and_says_so(monkeypatch):
    made = mesh(4, ln_se=0.1, noise_sign=1)
    for most, expected, flag in ((1e4, 0, Flag.FEWER_DRAWS), (1e5, None, Flag.FEWER_DRAWS | Flag.MONTE_CARLO)):
        monkeypatch.setattr("vasohm.flow.monte_carlo.MOST_PRODUCTS", most)
        measured, ends = made
        flow = solve_flow(measured, place_terminals(measured, ends, AUTO), newtonian())
        found = find_intervals(measured, flow, newtonian(), IntervalSettings("monte-carlo", 5000, 1))
        assert found.network_flags[0] == flag
        assert found.draws[0] == expected or 200 <= found.draws[0] < 5000


def test_elimination_keeps_every_digit_over_many_decades():
    """Against the solution by pressures, resistances over 12 decades, ends shared by parallel segments and a loop."""
    rng = np.random.default_rng(0)
    n = 40
    a = np.concatenate([np.arange(n - 1), rng.integers(0, n, 60), [3]])
    b = np.concatenate([np.arange(1, n), rng.integers(0, n, 60), [3]])
    conductance = 10.0 ** rng.uniform(-6, 6, (a.size, 5))
    plan = plan_elimination((a, b), n, np.array([0, n - 1, 7]), 1e6)
    reduced = reduce_to_kept(plan, conductance)
    for k in range(5):
        fixed = np.full(n, np.nan)
        fixed[[0, n - 1, 7]] = 1.0, 0.0, 0.0
        _, flow = solve_flows((a, b), 1 / conductance[:, k], fixed, np.zeros(n))
        net = np.bincount(a, flow, n) - np.bincount(b, flow, n)
        assert reduced[k, 0, 1:].sum() == pytest.approx(net[0], rel=1e-12)
        np.testing.assert_allclose(reduced[k, 0, 1:], -net[[n - 1, 7]], rtol=1e-9)
        np.testing.assert_array_equal(reduced[k], reduced[k].T)
    with pytest.raises(OverflowError):
        plan_elimination((a, b), n, np.array([0, n - 1]), 10)
