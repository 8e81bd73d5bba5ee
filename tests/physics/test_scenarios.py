"""Scenarios, and their reverse question: by how much must chosen vessels widen for a wanted resistance."""

from dataclasses import replace

import numpy as np
import pytest
from beds import AUTO, Y_NODES, bed, blood, flow_of, newtonian, straight, y_bed, y_vessels

from vasohm.errors import DomainError
from vasohm.flags import Flag
from vasohm.flow.hydraulics import solve_flow
from vasohm.flow.monte_carlo import IntervalSettings, find_intervals
from vasohm.flow.phase_separation import SPLIT_LAWS
from vasohm.flow.scenarios import WIDEST_FACTOR, Scenario, run_scenarios
from vasohm.flow.terminals import place_terminals
from vasohm.network.graph import VesselClass
from vasohm.uncertainty import COVERAGE_FACTOR_95

DILATION = Scenario("all dilate", 1.1, None, None, None)
FOUND = 1e-9  # of a ratio: the search ends at 1e-10 of its logarithm
NODES = [(0.0, 100.0), (100.0, 100.0), (200.0, 100.0), (200.0, 160.0)]
PAIRS = [(0, 1), (1, 2), (1, 3)]


def asked(measured, *scenarios, how=None):
    return run_scenarios(measured, place_terminals(measured, [], AUTO), how or newtonian(), scenarios)


def wanted(ratio, below=None, above=None, kind=None):
    return Scenario("wanted", None, below, above, kind, ratio)


def series(radii=(10.0, 5.0), **more):
    return bed(NODES[:3], [straight(NODES, a, b, r) for (a, b), r in zip(PAIRS, radii, strict=False)], **more)


def test_ten_per_cent_wider_vessels_of_constant_viscosity():
    """1.1^-4, exactly and without doubt: every error acts alike before and after."""
    measured = y_bed(ln_se=0.1, pixel_size_rel_se=0.1, shared=np.full((123, 1), 0.1))
    found = asked(measured, DILATION)
    np.testing.assert_allclose([found.ratio, found.ratio_lo, found.ratio_hi], 1.1**-4, rtol=1e-10)
    assert found.n_segments_changed.tolist() == [3]


def test_scenarios_choose_by_radius_and_class():
    classes = [VesselClass.ARTERIOLE, VesselClass.ARTERIOLE, VesselClass.VENULE]
    scenarios = [
        Scenario("below", 0.5, 8.0, None, None),
        Scenario("above", 0.5, None, 8.0, None),
        Scenario("class", 0.5, None, None, "venule"),
        Scenario("both", 0.5, 9.0, None, "arteriole"),
        Scenario("none", 0.5, 1.0, None, None),
    ]
    found = asked(bed(Y_NODES, y_vessels((10.0, 8.5, 6.0)), classes=classes), *scenarios)
    assert found.n_segments_changed.tolist() == [1, 2, 1, 1, 0]
    assert found.scenario == ("below", "above", "class", "both", "none")
    assert found.ratio[0] > 1
    assert found.ratio[0] == found.ratio[2]
    assert found.ratio[4] == found.ratio_lo[4] == found.ratio_hi[4] == 1.0


def test_a_scenario_follows_the_viscosity_law_to_the_new_radii():
    measured = y_bed()
    found = asked(measured, DILATION, how=blood("pries-in-vivo"))
    wider = flow_of(bed(Y_NODES, y_vessels((11.0, 8.8, 6.6))), how=blood("pries-in-vivo"))
    np.testing.assert_allclose(found.resistance_after_pa_s_m3, wider.network_resistance_pa_s_m3, rtol=1e-10)
    assert found.ratio[0] != pytest.approx(1.1**-4, rel=1e-3)


def test_the_interval_of_a_ratio_holds_what_does_not_cancel():
    """First order, JCGM 100:2008 eq. 10: only the change of the shares carries the segments' own errors."""
    small = Scenario("small", 1.2, 7.0, None, None)
    measured = y_bed(ln_se=0.1)
    found = asked(measured, small)
    before = flow_of(measured)
    after = flow_of(bed(Y_NODES, y_vessels((10.0, 8.0, 7.2))))
    ln_se = np.sqrt(np.sum(((after.share - before.share) * before.ln_resistance_random_se) ** 2))
    assert np.log(found.ratio_hi / found.ratio)[0] == pytest.approx(1.959963984540054 * ln_se, rel=1e-6)


def test_scenarios_without_meaning_are_refused_by_name():
    with pytest.raises(DomainError, match=r"scenario 'shut': radius_factor is 0.0"):
        asked(y_bed(), Scenario("shut", 0.0, None, None, None))
    with pytest.raises(DomainError, match=r"scenario 'odd': vessel_class is 'lymphatic'"):
        asked(y_bed(), Scenario("odd", 1.1, None, None, "lymphatic"))


@pytest.mark.parametrize("ratio", [0.1, 0.8, 0.999, 1.25, 20.0])
def test_all_vessels_by_poiseuille(ratio):
    """R goes with r to the power -4 where viscosity is constant, so the factor is the ratio to the power -1/4."""
    found = asked(series(), wanted(ratio))
    assert found.radius_factor[0] == pytest.approx(ratio**-0.25, rel=FOUND)
    assert found.ratio[0] == pytest.approx(ratio, rel=FOUND)
    assert found.n_segments_changed[0] == 2
    assert not found.flags[0]


def test_one_of_two_in_series():
    """A wide vessel of resistance 1 and a narrow one of 16 (half its radius, equal length): 17 -> 1 + 16 / f^4."""
    found = asked(series(), wanted(0.5, below=7.0), wanted(0.05, below=7.0), wanted(0.8, below=1.0))
    assert found.radius_factor[0] == pytest.approx((16 / (0.5 * 17 - 1)) ** 0.25, rel=FOUND)
    assert found.n_segments_changed.tolist() == [1, 1, 0]


def test_what_no_factor_can_do_is_flagged_and_empty():
    """The wide vessel alone keeps 1/17 of the resistance, however wide the other; and no vessel changes nothing."""
    found = asked(series(), wanted(1 / 17, below=7.0), wanted(0.8, below=1.0))
    for values in (found.radius_factor, found.resistance_after_pa_s_m3, found.ratio, found.ratio_lo, found.ratio_hi):
        assert np.isnan(values).all()
    assert np.isfinite(found.resistance_before_pa_s_m3).all()
    assert found.flags.tolist() == [Flag.OUT_OF_REACH, Flag.OUT_OF_REACH]
    limit = (1 + 16 / WIDEST_FACTOR**4) / 17  # what the widest factor gives: just short of it there is an answer
    assert asked(series(), wanted(1.0001 * limit, below=7.0)).radius_factor[0] == pytest.approx(WIDEST_FACTOR, rel=0.1)


@pytest.mark.parametrize("law", ["pries-in-vitro", "pries-in-vivo", "pries-secomb-surface-layer"])
@pytest.mark.parametrize("ratio", [0.7, 1.6])
def test_viscosity_follows_the_radius_on_the_way(law, ratio):
    """The factor found, put back as a plain scenario, brings the wanted ratio about; Poiseuille alone would miss it."""
    measured = bed(
        NODES, [straight(NODES, a, b, r) for (a, b), r in zip(PAIRS, (12.0, 7.0, 5.5), strict=True)], ln_se=0.1
    )
    how = blood(law)
    factor = float(asked(measured, wanted(ratio, below=10.0), how=how).radius_factor[0])
    put_back = asked(measured, Scenario("back", factor, 10.0, None, None), how=how)
    assert put_back.ratio[0] == pytest.approx(ratio, rel=1e-8)
    all_of_it = asked(measured, wanted(ratio), how=how)
    assert all_of_it.radius_factor[0] != pytest.approx(ratio**-0.25, rel=1e-3)


@pytest.mark.parametrize("split_law", SPLIT_LAWS)
def test_cells_part_anew_at_the_new_radii(split_law):
    """After the change all is as in a bed measured with the changed radii; also on the way to a wanted ratio."""
    how = replace(blood("pries-in-vivo"), split_law=split_law)
    radii, factor = np.array([12.0, 9.0, 5.0]), np.array([1.0, 1.0, 1.2])
    both = [
        bed(NODES, [straight(NODES, *end, r) for end, r in zip(PAIRS, rs, strict=True)])
        for rs in (radii, radii * factor)
    ]
    before, after = (solve_flow(one, place_terminals(one, [], AUTO), how) for one in both)
    assert np.ptp(after.hematocrit) > 0.01  # they part
    assert np.abs(after.hematocrit - before.hematocrit).max() > 0.005  # and otherwise than before
    found = asked(both[0], Scenario("thin", 1.2, 6.0, None, None), wanted(0.9, below=6.0), how=how)
    assert found.resistance_after_pa_s_m3[0] == pytest.approx(after.network_resistance_pa_s_m3[0], rel=1e-7)
    put_back = asked(both[0], Scenario("back", float(found.radius_factor[1]), 6.0, None, None), how=how)
    assert put_back.ratio[0] == pytest.approx(0.9, rel=1e-7)  # hematocrits settle to 1e-8


def test_each_network_is_told_its_own_factor():
    """A class and a limit of radius choose within each network; one without resistance gets neither factor nor flag."""
    shifted = [(x, y + 200.0) for x, y in NODES]
    ring = [(300.0, 300.0), (350.0, 300.0), (320.0, 340.0)]
    nodes = [*NODES[:3], *shifted[:3], *ring]
    ends = [(0, 1, 10.0), (1, 2, 5.0), (3, 4, 5.0), (4, 5, 5.0), (6, 7, 4.0), (7, 8, 4.0), (6, 8, 4.0)]
    classes = [VesselClass.NONE, VesselClass.ARTERIOLE, VesselClass.ARTERIOLE, *[VesselClass.NONE] * 4]
    measured = bed(nodes, [straight(nodes, *end) for end in ends], classes=classes)
    found = asked(measured, wanted(0.6, below=8.0, kind="arteriole"))
    expected = [(16 / (0.6 * 17 - 1)) ** 0.25, (1 / (0.6 * 2 - 1)) ** 0.25]
    np.testing.assert_allclose(found.radius_factor[:2], expected, rtol=FOUND)
    assert np.isnan(found.radius_factor[2])
    assert not found.flags[2] & Flag.OUT_OF_REACH


def test_narrowing_up_to_closure_has_an_answer():
    """A law without flow below a radius: any ratio is reached on the way to closure, and other networks stay open."""
    found = asked(series((4.0, 3.0)), wanted(1e6), how=blood("pries-in-vivo"))
    assert 0 < found.radius_factor[0] < 1
    assert found.ratio[0] == pytest.approx(1e6, rel=1e-8)


def test_a_scenario_asks_one_question():
    for scenario in (Scenario("none", None, None, None, None), Scenario("two", 1.1, None, None, None, 0.8)):
        with pytest.raises(DomainError, match=f"scenario '{scenario.name}': give either radius_factor or wanted_ratio"):
            asked(series(), scenario)
    with pytest.raises(DomainError, match=r"wanted_ratio is -0.5; it must be positive"):
        asked(series(), wanted(-0.5))


def test_common_errors_cancel_in_drawn_ratios_too():
    """All vessels by one factor at constant viscosity: the ratio is exact, though R itself is known to 40 %."""
    measured = series(ln_se=0.1, pixel_size_rel_se=0.05, shared=np.full((82, 1), 0.1), noise_sign=1)
    terminals = place_terminals(measured, [], AUTO)
    how = newtonian()
    intervals = find_intervals(
        measured, solve_flow(measured, terminals, how), how, IntervalSettings("monte-carlo", 500, 1)
    )
    assert intervals.network_hi[0] > 1.4 * intervals.network_lo[0]
    found = run_scenarios(measured, terminals, how, [Scenario("all", 1.1, None, None, None)], intervals)
    np.testing.assert_allclose([found.ratio_lo[0], found.ratio_hi[0]], 1.1**-4, rtol=1e-9)


def test_drawn_ratios_agree_with_the_first_order_where_doubt_is_small():
    """Within 5 % of the interval's width (a bound from 4000 draws errs by 1 % of it).

    A ratio leaves the straight line sooner than a resistance: what errs in proportion cancels, curvature does not.
    """
    measured = series(ln_se=0.05, noise_sign=1)  # 41 points that err on their own: 0.8 % a segment
    terminals = place_terminals(measured, [], AUTO)
    how = blood("pries-in-vivo")
    question = [Scenario("thin", 1.2, 7.0, None, None)]
    plain = run_scenarios(measured, terminals, how, question)
    intervals = find_intervals(
        measured, solve_flow(measured, terminals, how), how, IntervalSettings("monte-carlo", 4000, 1)
    )
    drawn = run_scenarios(measured, terminals, how, question, intervals)
    width = plain.ratio_hi - plain.ratio_lo
    assert drawn.ratio == plain.ratio
    assert np.log(plain.ratio_hi / plain.ratio) > 1e-3 * COVERAGE_FACTOR_95
    np.testing.assert_allclose((drawn.ratio_lo - plain.ratio_lo) / width, 0.0, atol=0.05)
    np.testing.assert_allclose((drawn.ratio_hi - plain.ratio_hi) / width, 0.0, atol=0.05)
