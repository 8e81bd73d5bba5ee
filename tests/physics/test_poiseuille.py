"""Resistance of one segment against closed forms, and its doubt against the rules of uncertainty."""

import dataclasses

import numpy as np
import pytest
from beds import CommonErrors, Vessel, bed, blood, newtonian, published, straight
from fluids.friction import one_phase_dP

from vasohm.errors import DomainError
from vasohm.flags import Flag
from vasohm.flow.development import describe_motion
from vasohm.flow.poiseuille import LARGEST_LN_CORRECTION, measure_resistance, segment_resistance
from vasohm.flow.rheology import apparent_viscosity, make_blood
from vasohm.units import M_PER_UM, NL_MIN_PER_M3_S, PA_PER_MMHG, PA_S_PER_MPA_S

ROUNDING = 32 * np.finfo(float).eps
FORMULA = 1e-9
TUBE = [(0.0, 0.0), (100.0, 0.0)]


def resistances(measured, settings=None, factor=1.0):
    n = measured.graph.n_segments
    settings = settings or newtonian()
    return measure_resistance(measured, make_blood(settings), np.full(n, settings.hematocrit), np.full(n, factor))


def test_the_table_of_uniform_tubes():
    for inputs, expected in published("poiseuille_resistance", units="Pa"):
        found = segment_resistance(inputs["L_um"], inputs["r_um"], inputs["mu_Pa_s"] * 1000)
        assert found == pytest.approx(expected, rel=FORMULA)


def test_the_worked_segment():
    """Sutera & Skalak 1993: flow and wall shear stress of one tube; a slip of units is a power of ten here."""
    resistance = segment_resistance(500.0, 10.0, 3.0)
    flow = 5.0 * PA_PER_MMHG / resistance
    found = {
        "Pa.s.m^-3": resistance,
        "m^3/s": flow,
        "uL/min": flow * NL_MIN_PER_M3_S / 1000,
        "Pa (wall": 4 * 3.0 * PA_S_PER_MPA_S * flow / (np.pi * (10.0 * M_PER_UM) ** 3),
    }
    for units, value in found.items():
        ((_, expected),) = published("poiseuille_worked_segment", units=units)
        assert value == pytest.approx(expected, rel=FORMULA)


def test_halving_the_radius_multiplies_resistance_by_16():
    """Common practice, no source: the sixteenfold rule."""
    ratio = segment_resistance(100.0, 4.0, 3.5) / segment_resistance(100.0, 8.0, 3.5)
    np.testing.assert_allclose(ratio, 16.0, rtol=ROUNDING)
    with pytest.raises(AssertionError):  # an exponent of 3.99 would be caught
        np.testing.assert_allclose(2.0**3.99, 16.0, rtol=ROUNDING)


def test_the_pressure_drop_of_a_laminar_pipe():
    """Against the Darcy friction factor 64/Re of the `fluids` library, which knows nothing of vessels."""
    density, viscosity, diameter, length, flow = 1055.0, 3e-3, 20e-6, 500e-6, 1e-12
    drop = one_phase_dP(m=density * flow, rho=density, mu=viscosity, D=diameter, L=length)
    assert flow * segment_resistance(500.0, 10.0, 3.0) == pytest.approx(drop, rel=FORMULA)


def test_a_linear_taper_is_exact_with_any_number_of_points():
    for inputs, ratio in published("taper_linear_resistance_ratio", units="R_true"):
        for n in (2, 3, 17):
            radius = np.linspace(inputs["r1"], inputs["r2"], n)
            mean = segment_resistance(100.0, (inputs["r1"] + inputs["r2"]) / 2, 3.0)
            assert segment_resistance(100.0, radius, 3.0) / mean == pytest.approx(ratio, rel=FORMULA)


@pytest.mark.parametrize(
    ("key", "units", "profile", "mean"),
    [
        (
            "taper_exponential_resistance_ratio",
            "R_true",
            lambda i, x: i["r1"] * (i["r2"] / i["r1"]) ** x,
            lambda i: (i["r2"] - i["r1"]) / np.log(i["r2"] / i["r1"]),
        ),
        (
            "sinusoidal_radius_resistance_ratio",
            "R_true",
            lambda i, x: 10.0 * (1 + i["amplitude_over_mean_radius"] * np.cos(2 * np.pi * x)),
            lambda _: 10.0,
        ),
    ],
)
def test_smooth_profiles_are_met_to_second_order(key, units, profile, mean):
    for inputs, ratio in published(key, units=units):
        error = [
            segment_resistance(100.0, profile(inputs, np.linspace(0, 1, n)), 3.0)
            / segment_resistance(100.0, mean(inputs), 3.0)
            / ratio
            - 1
            for n in (201, 401)
        ]
        assert abs(error[1]) < 1e-3
        assert error[0] / error[1] == pytest.approx(4.0, rel=0.01)  # half the spacing, a quarter of the error


def test_capillaries_that_narrow_and_widen_resist_as_was_measured():
    """Bosman et al., Am J Physiol 1995 (abstract): diameter -6 % gives resistance +27 %, +12 % gives -36 %."""
    rounded = 0.02  # both figures are rounded to a per cent, the diameters too: 4 x 0.5 %
    for diameter, resistance in ((-0.06, 0.27), (0.12, -0.36)):
        ratio = segment_resistance(100.0, 3.0 * (1 + diameter), 3.0) / segment_resistance(100.0, 3.0, 3.0)
        assert ratio - 1 == pytest.approx(resistance, abs=rounded)
    assert abs((1.12**-3 - 1) + 0.36) > rounded  # teeth: the third power is refused


def test_two_cylinders_in_series():
    for inputs, ratio in published("two_step_resistance_ratio", units="R_true"):
        f, ra, rb = inputs["length_fraction_b"], inputs["ra"], inputs["rb"]
        two = segment_resistance(100.0 * (1 - f), ra, 3.0) + segment_resistance(100.0 * f, rb, 3.0)
        mean = segment_resistance(100.0, (1 - f) * ra + f * rb, 3.0)
        assert two / mean == pytest.approx(ratio, rel=FORMULA)


def test_arrays_of_segments_and_of_viscosity():
    radius = np.array([[10.0, 9.0, 8.0], [5.0, 5.0, 5.0]])
    viscosity = apparent_viscosity("pries-in-vivo", radius, 0.45)
    both = segment_resistance(np.array([100.0, 200.0]), radius, viscosity)
    assert both.shape == (2,)
    assert both[1] == pytest.approx(segment_resistance(200.0, 5.0, viscosity[1, 0]), rel=ROUNDING)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((0.0, 5.0, 3.0), "length_um is 0.0"),
        ((1.0, [5.0, 0.0], 3.0), "radius_um is 0.0 at position 1"),
        ((1.0, 5.0, np.inf), "viscosity_mpa_s is inf"),
        ((1.0, [5.0, 5.0], [3.0, 3.0, 3.0]), r"viscosity_mpa_s has shape \(3,\)"),
        ((1.0, np.zeros((2, 0)) + 1.0, 3.0), "has no points"),
    ],
)
def test_numbers_without_meaning_are_refused(arguments, words):
    with pytest.raises(DomainError, match=words):
        segment_resistance(*arguments)


def test_the_hydraulic_radius_of_profiles():
    """Closed forms for r_h where viscosity is constant; the mean radius would be up to 70 % off."""
    for inputs, expected in published("sinusoidal_radius_resistance_ratio", units="r_hydraulic"):
        amplitude = inputs["amplitude_over_mean_radius"]
        radius = 10.0 * (1 + amplitude * np.cos(2 * np.pi * np.linspace(0, 1, 801)))
        found = resistances(bed(TUBE, [straight(TUBE, 0, 1, radius)]))
        # trapezium rule on a whole period: exact but for the rounding of the points
        assert found.radius_hydraulic_um[0] == pytest.approx(10.0 * expected, rel=FORMULA)
        assert found.viscosity_mpa_s[0] == 3.0


@pytest.mark.parametrize("law", ["pries-in-vitro", "pries-in-vivo", "pries-secomb-surface-layer", "kiani-hudetz"])
def test_the_uniform_tube_of_the_hydraulic_radius_resists_the_same(law):
    """Also across the kink of the surface-layer law at a radius of 5.25 um."""
    vessels = [straight(TUBE, 0, 1, np.linspace(first, last, 61)) for first, last in [(4, 7), (2, 3), (60, 20), (6, 6)]]
    found = resistances(bed(TUBE, vessels), blood(law))
    radius, viscosity = found.radius_hydraulic_um, found.viscosity_mpa_s
    np.testing.assert_allclose(viscosity, apparent_viscosity(law, radius, 0.45), rtol=ROUNDING)
    np.testing.assert_allclose(
        [segment_resistance(100.0, r, mu) for r, mu in zip(radius, viscosity, strict=True)],
        found.resistance_pa_s_m3,
        rtol=1e-11,  # the search ends at 1e-12 of ln R
    )
    assert radius[3] == pytest.approx(6.0, rel=1e-11)


def test_resistance_per_radius_and_per_pixel_size_follow_the_local_exponent():
    """The three laws of Pries at hematocrit 0.45 and 3 to 500 um: d ln R / d ln r, and 1 more for the pixel size."""
    laws = {
        "pries1992": "pries-in-vitro",
        "pries1994": "pries-in-vivo",
        "pries_secomb_2005": "pries-secomb-surface-layer",
    }
    tolerance = 1e-5  # one-sided difference with a step of 1e-6 against central ones with 1e-5
    for (inputs, exponent), (_, of_pixel) in zip(
        published("local_exponent_dlnR_dlnD"), published("local_exponent_dlnR_dln_pixel_size"), strict=True
    ):
        law = laws.get(inputs["law"], "pries-secomb-surface-layer")
        tube = bed(
            TUBE,
            [straight(TUBE, 0, 1, inputs["D_um"] / 2)],
            pixel_size_rel_se=0.01,
            shared=np.full((41, 1), 0.01),
        )
        found = resistances(tube, blood(law))
        np.testing.assert_allclose(found.ln_shared[0, :2] / 0.01, [exponent, of_pixel], rtol=tolerance)


def test_resistance_scales_with_the_pixel_size_to_the_power_minus_3():
    for inputs, ratio in published("pixel_size_scaling"):
        factor = inputs["pixel_size_factor"]
        radius = np.linspace(8.0, 5.0, 41)
        one, other = (
            resistances(bed(TUBE, [straight(TUBE, 0, 1, radius * size)], pixel_size_um=size)).resistance_pa_s_m3[0]
            for size in (1.0, factor)
        )
        assert other / one == pytest.approx(ratio, rel=FORMULA)


@pytest.mark.parametrize("law", ["pries-in-vitro", "pries-in-vivo", "pries-secomb-surface-layer", "constant"])
@pytest.mark.parametrize("hematocrit", [0.0, 0.3, 0.75])
def test_the_hematocrit_moves_all_viscosities_together(law, hematocrit):
    """JCGM 100:2008, eq. 13: the stated part against a difference of R itself, at the ends of the range too."""
    se, step = 0.02, 1e-4
    inward = step if hematocrit < 0.5 else -step
    vessels = [straight(TUBE, 0, 1, np.linspace(9, 4, 41)), straight(TUBE, 0, 1, 20.0)]
    tubes = bed(TUBE, vessels)
    found = resistances(tubes, blood(law, hematocrit, se))
    there, farther = (resistances(tubes, blood(law, hematocrit + k * inward)) for k in (1, 2))
    # three points, one-sided: exact to the second order in the step
    slope = (4 * np.log(there.resistance_pa_s_m3) - np.log(farther.resistance_pa_s_m3)) / (2 * inward)
    slope -= 3 * np.log(found.resistance_pa_s_m3) / (2 * inward)
    np.testing.assert_allclose(found.ln_shared[:, 1], se * slope, rtol=1e-4, atol=1e-9)
    per_um = (4 * there.radius_hydraulic_um - farther.radius_hydraulic_um - 3 * found.radius_hydraulic_um) / (
        2 * inward
    )
    np.testing.assert_allclose(found.radius_hydraulic_shared_se_um, se * np.abs(per_um), rtol=1e-3, atol=1e-7)
    assert (found.ln_shared[:, 1] == 0).all() == (law == "constant")


def test_a_hematocrit_cannot_be_known_to_less_than_nothing():
    with pytest.raises(DomainError, match=r"hematocrit_se is -0.1"):
        make_blood(blood("pries-in-vivo", 0.45, -0.1))


def test_combined_uncertainty_of_one_tube():
    """JCGM 100:2008, eq. 12: length 2 %, radius 3 %, and a common pixel size of 2 % that counts three times."""
    (without, total), (with_scale, total_scale) = published("gum_combined_uncertainty")
    tube = bed(
        TUBE,
        [straight(TUBE, 0, 1, 10.0)],
        ln_se=without["u_rel_r"],
        length_rel_se=without["u_rel_L"],
        pixel_size_rel_se=with_scale["u_rel_scale_common"],
        errors=CommonErrors,
    )
    found = resistances(tube)
    of_viscosity = without["u_rel_mu"]
    assert np.hypot(found.ln_random_se[0], of_viscosity) == pytest.approx(total, rel=FORMULA)
    assert np.linalg.norm([found.ln_random_se[0], of_viscosity, found.ln_shared[0, 0]]) == pytest.approx(
        total_scale, rel=FORMULA
    )
    assert found.radius_hydraulic_random_se_um[0] == pytest.approx(10.0 * without["u_rel_r"], rel=FORMULA)
    assert found.radius_hydraulic_shared_se_um[0] == pytest.approx(10.0 * 0.02, rel=FORMULA)


def test_an_unknown_pixel_size_uncertainty_adds_nothing():
    found = resistances(bed(TUBE, [straight(TUBE, 0, 1, 10.0)]))
    assert found.ln_shared[0, 0] == 0.0


@pytest.mark.parametrize("ln_sd", [0.05, 0.10, 0.15])
def test_the_bias_of_noise_is_taken_out(ln_sd):
    """Lognormal noise with the radius as median lifts r^-4 by (1 + cv²)^8 (closed form); corrected, nothing is left.

    10,000 independent points: the mean of r^-4 then scatters by its closed-form spread over 100.
    """
    cv = np.sqrt(np.expm1(ln_sd**2))
    closed_form = (1 + cv**2) ** 8
    for inputs, value in published("bias_of_plugin_r_minus4"):
        if inputs["model"] == "lognormal, median r":
            assert value == pytest.approx((1 + inputs["cv_r"] ** 2) ** 8, rel=FORMULA)
    n = 10_000
    noise = np.random.default_rng(1).normal(0.0, ln_sd, n)
    radius = 10.0 * np.exp(noise)
    scatter = 4 * np.sqrt(np.expm1(16 * ln_sd**2) / n)  # four standard errors of the mean of a lognormal
    true = segment_resistance(100.0, 10.0, 3.0)
    plain = resistances(bed(TUBE, [straight(TUBE, 0, 1, radius)])).resistance_pa_s_m3[0] / true
    tube = bed(TUBE, [straight(TUBE, 0, 1, radius)], ln_se=ln_sd, noise_sign=-1)
    corrected = resistances(tube).resistance_pa_s_m3[0] / true
    assert plain == pytest.approx(closed_form, rel=scatter)
    assert corrected == pytest.approx(1.0, rel=scatter)
    assert abs(plain - 1.0) > scatter or ln_sd < 0.06  # the uncorrected value is refused


def test_errors_common_to_a_segment_leave_the_median_alone():
    """Where all points err together, the correction of each point and that of the sum cancel."""
    for sign in (-1, 1):
        tube = bed(TUBE, [straight(TUBE, 0, 1, 10.0)], ln_se=0.1, noise_sign=sign, errors=CommonErrors)
        assert resistances(tube).resistance_pa_s_m3[0] == pytest.approx(segment_resistance(100.0, 10.0, 3.0))


def test_the_mode_of_a_posterior_is_corrected_upwards():
    """Normal posterior of ln r, variance v: the mean of r^-4 is exp(8 v) times that at its mode (lognormal moment)."""
    tube = bed(TUBE, [straight(TUBE, 0, 1, 10.0, n=4001)], ln_se=0.1, noise_sign=1)
    of_sum = 0.5 * 16 * 0.01 / 4000  # what is left of the median's shift with 4000 independent points
    found = resistances(tube).resistance_pa_s_m3[0] / segment_resistance(100.0, 10.0, 3.0)
    assert found == pytest.approx(np.exp(8 * 0.01), rel=2 * of_sum)


def test_one_unresolved_point_does_not_outweigh_its_segment():
    ln_se = np.full(41, 0.02)
    ln_se[20] = 3.0  # exp(8 v) would be e^72
    for sign in (-1, 1):
        tube = bed(TUBE, [straight(TUBE, 0, 1, 10.0)], ln_se=ln_se, noise_sign=sign)
        found = resistances(tube).resistance_pa_s_m3[0] / segment_resistance(100.0, 10.0, 3.0)
        assert abs(np.log(found)) <= LARGEST_LN_CORRECTION


def test_a_steep_wall_is_told_and_a_noisy_one_is_not():
    """1 % off from a slope of about 0.09 on: exact creeping flow in a cone."""
    noise = np.random.default_rng(2).normal(0, 0.3, 41)
    vessels = [
        straight(TUBE, 0, 1, np.linspace(20, 10, 41)),
        straight(TUBE, 0, 1, np.linspace(16, 8, 41)),
        straight([(0, 0), (8, 0)], 0, 1, 10.0 * np.exp(noise)),
    ]
    ln_se = np.repeat([0.01, 0.01, 0.3], 41)
    flags = resistances(bed([(0, 0), (100, 0)], vessels, ln_se=ln_se)).flags & int(Flag.STEEP_WALL)
    np.testing.assert_array_equal(flags > 0, [True, False, False])


def test_numbers_of_flow_take_their_published_values():
    """Reynolds and Womersley numbers of vessels from retinal arteries to capillaries; a factor of 2 pi or 2 shows."""
    rows = published("flow_regime")
    for (inputs, reynolds), (_, womersley) in zip(rows[::2], rows[1::2], strict=True):
        how = dataclasses.replace(
            newtonian(), density_kg_m3=inputs["rho"], heart_rate_per_min=60.0 * inputs["heart_rate_Hz"]
        )
        radius = np.array([inputs["D_um"] / 2])
        flow = inputs["mean_velocity_mm_s"] * 1e-3 * np.pi * (radius * M_PER_UM) ** 2
        tube = (np.array([1000.0]), radius, np.array([inputs["mu_Pa_s"] * 1000]))
        found = describe_motion(-flow, tube, how, np.array([True]))
        assert found.velocity_mm_s[0] == pytest.approx(inputs["mean_velocity_mm_s"], rel=FORMULA)
        assert found.transit_s[0] == pytest.approx(1.0 / inputs["mean_velocity_mm_s"], rel=FORMULA)
        assert found.reynolds[0] == pytest.approx(reynolds, rel=FORMULA)
        assert found.womersley[0] == pytest.approx(womersley, rel=FORMULA)
        assert found.wall_shear_pa[0] == pytest.approx(found.wall_shear_rate_per_s[0] * inputs["mu_Pa_s"], rel=FORMULA)
        unknown = describe_motion(flow, tube, newtonian(), np.array([False]))
        assert np.isnan([unknown.reynolds[0], unknown.womersley[0]]).all()
    worked = dict(zip(("Pa (wall", "1/s (wall"), (0.0, 0.0), strict=True))
    for units in worked:
        ((_, worked[units]),) = published("poiseuille_worked_segment", units=units)
    drop = 5.0 * PA_PER_MMHG / segment_resistance(500.0, 10.0, 3.0)
    found = describe_motion(
        np.array([drop]), (np.array([500.0]), np.array([10.0]), np.array([3.0])), newtonian(), np.ones(1, bool)
    )
    assert found.wall_shear_pa[0] == pytest.approx(worked["Pa (wall"], rel=FORMULA)


def test_flow_that_cannot_be_that_of_poiseuille_is_told():
    """Shorter than twice 0.62 diameters, faster than Re 1, wider than a Womersley number of 1; else no flag."""
    how = dataclasses.replace(newtonian(), heart_rate_per_min=72.0)
    length, radius = np.array([12.0, 13.0, 1e4, 1e4]), np.array([5.0, 5.0, 50.0, 800.0])
    velocity = np.array([1e-3, 1e-3, 0.04, 1e-3])  # m/s
    flow = velocity * np.pi * (radius * M_PER_UM) ** 2
    flags = describe_motion(flow, (length, radius, np.full(4, 3.0)), how, np.ones(4, dtype=bool)).flags
    assert flags.tolist() == [Flag.UNDEVELOPED, 0, Flag.INERTIAL, Flag.PULSATILE]


def test_a_segment_beyond_its_law_is_flagged_and_one_that_nothing_passes_has_no_resistance():
    radius = np.array([10.0, 10.0, 0.4, 10.0])
    vessels = [straight(TUBE, 0, 1, 2.0), straight(TUBE, 0, 1, radius), straight(TUBE, 0, 1, 10.0)]
    found = resistances(bed(TUBE, vessels), blood("pries-in-vivo"))
    np.testing.assert_array_equal(found.flags & int(Flag.LAW_RANGE) > 0, [True, True, False])
    np.testing.assert_array_equal(np.isnan(found.resistance_pa_s_m3), [False, True, False])


@pytest.mark.parametrize("law", ["pries-in-vivo", "kiani-hudetz", "constant"])
def test_doubt_of_plasma_viscosity_reaches_resistance(law):
    """Against differences of the chain: whole for relative laws, in part for an absolute one."""
    measured, se = bed(TUBE, [straight(TUBE, 0, 1, 6.0)]), 0.08

    def ln_resistance(plasma):
        how = dataclasses.replace(blood(law, 0.3), plasma_viscosity_mpa_s=plasma)
        return np.log(resistances(measured, how).resistance_pa_s_m3[0])

    found = resistances(measured, dataclasses.replace(blood(law, 0.3), plasma_viscosity_se_mpa_s=se))
    slope = (ln_resistance(1.2 + 1e-4) - ln_resistance(1.2 - 1e-4)) / 2e-4
    assert found.ln_shared[0, -1] == pytest.approx(se * slope, rel=1e-5, abs=1e-12)
    part = {"pries-in-vivo": 1.0, "constant": 0.0}.get(law, slope * 1.2)
    assert slope * 1.2 == pytest.approx(part, abs=1e-6)
    assert (0.0 < part < 1.0) == (law == "kiani-hudetz")
    assert found.radius_hydraulic_shared_se_um[0] == pytest.approx(0.0, abs=1e-5)  # a uniform tube's radius is its own


def test_a_segment_without_length_joins_its_nodes():
    vessel = Vessel(0, 1, np.array([[5.0, 5.0], [5.0, 5.0]]), np.array([10.0, 10.0]))
    found = resistances(bed([(5, 5), (5, 5)], [vessel]))
    assert 0 < found.resistance_pa_s_m3[0] <= segment_resistance(1e-3, 10.0, 3.0) * (1 + ROUNDING)


def test_a_graph_without_vessels_gives_empty_arrays():
    found = resistances(bed([], []), blood("pries-in-vivo"))
    assert found.resistance_pa_s_m3.shape == (0,)
    assert found.ln_shared.shape == (0, 3)
