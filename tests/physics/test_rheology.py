"""Viscosity laws against their published formulas, at hematocrits where a misprint shows."""

import dataclasses

import numpy as np
import pytest
from beds import blood, published

from vasohm.errors import DomainError, PluginError
from vasohm.flow.rheology import apparent_viscosity, get_law, law_names, make_blood

FORMULA = 1e-9  # published formulas in double precision, evaluated by another program
ZERO_OF_C_UM = 8.051829446724955  # diameter at which the laws' hematocrit factor is 0/0 as printed
PLASMA = 1.2
LAW_OF = {"1992": "pries-in-vitro", "1994": "pries-in-vivo", "2005": "pries-secomb-surface-layer"}


def relative(law: str, diameter_um: float, hematocrit: float) -> float:
    return float(apparent_viscosity(law, diameter_um / 2, hematocrit, plasma_viscosity_mpa_s=PLASMA)) / PLASMA


@pytest.mark.parametrize(
    ("law", "key"),
    [
        ("pries-in-vitro", "pries1992_in_vitro"),
        ("pries-in-vivo", "pries1994_in_vivo"),
        ("pries-secomb-surface-layer", "pries_secomb_2005_esl"),
    ],
)
def test_the_three_laws_of_pries_give_their_published_values(law, key):
    """A wrong constant, exponent or bracket of Pries 1992, 1994 or Pries and Secomb 2005 fails here."""
    rows = published(key)
    diameter, hematocrit, expected = np.array([(i["D_um"], i["H_D"], value) for i, value in rows]).T
    found = apparent_viscosity(law, diameter / 2, hematocrit, plasma_viscosity_mpa_s=PLASMA) / PLASMA
    np.testing.assert_allclose(found, expected, rtol=FORMULA)
    assert (hematocrit != 0.45).sum() >= 50  # at 0.45 alone an error in C cannot show


def test_kiani_and_hudetz_give_their_published_values():
    rows = published("kiani_hudetz_1991")  # Kiani & Hudetz, Biorheology 1991;28:65
    diameter, hematocrit, expected = np.array([(i["D_um"], i["H_D"], value) for i, value in rows]).T
    found = apparent_viscosity("kiani-hudetz", diameter / 2, hematocrit, plasma_viscosity_mpa_s=PLASMA)
    np.testing.assert_allclose(found, expected, rtol=FORMULA)


def test_the_marginal_zone_gives_its_published_values_and_ends_in_the_core():
    for inputs, expected in published("haynes_1960_marginal_zone"):  # Haynes, Am J Physiol 1960;198:1193
        parameters = {"core_viscosity_mpa_s": inputs["mu_core"], "marginal_zone_um": inputs["delta_um"]}
        found = apparent_viscosity(
            "haynes-marginal-zone",
            inputs["D_um"] / 2,
            0.4,
            plasma_viscosity_mpa_s=inputs["mu_p"],
            parameters=parameters,
        )
        assert found == pytest.approx(expected, rel=FORMULA)
    bare = {"core_viscosity_mpa_s": 3.5, "marginal_zone_um": 0.0}
    assert apparent_viscosity("haynes-marginal-zone", 10.0, 0.4, parameters=bare) == pytest.approx(3.5, rel=FORMULA)


def test_misprints_in_circulation_are_told_apart():
    """Each misprinted variant differs from what we return by more than a thousand times the tolerance."""
    for year, law in LAW_OF.items():
        variants = published("wrong_variants_do_not_match", units=year)
        assert len(variants) >= 3
        for inputs, wrong in variants:
            assert abs(relative(law, inputs["D_um"], inputs["H_D"]) / wrong - 1.0) > 1000 * FORMULA, inputs


def test_laws_pass_smoothly_through_the_diameter_where_their_formula_is_0_over_0():
    for inputs, expected in published("pries_C_zero_crossing_value"):
        assert relative("pries-in-vitro", ZERO_OF_C_UM, inputs["H_D"]) == pytest.approx(expected, rel=FORMULA)
    diameter = ZERO_OF_C_UM * (1 + np.linspace(-1e-7, 1e-7, 20001))
    for law in LAW_OF.values():
        step = np.diff(np.log(apparent_viscosity(law, diameter / 2, 0.3)))
        assert (
            np.abs(step).max() < 1e-10
        )  # 1e-11 in ln D times an exponent below 4, and rounding; a lost digit gives more


def test_vessels_of_10_um_exceed_glass_tubes_by_a_factor_of_about_4():
    """Abstract of Pries et al., Circ Res 1994;75:904; without its wall factors the law gives 2.9."""
    ((inputs, expected),) = published("pries1994_vs_glass_tube")
    ratio = relative("pries-in-vivo", 10, inputs["H_D"]) / relative("pries-in-vitro", 10, inputs["H_D"])
    assert ratio == pytest.approx(expected, rel=FORMULA)
    assert 3.5 < ratio < 4.5


def test_without_cells_a_living_vessel_still_has_its_wall():
    for inputs, expected in published("in_vivo_laws_at_zero_hematocrit"):
        law = "pries-in-vivo" if inputs["law"] == "Pries 1994" else "pries-secomb-surface-layer"
        assert relative(law, inputs["D_um"], 0.0) == pytest.approx(expected, rel=FORMULA)
    assert relative("pries-in-vitro", 10, 0.0) == pytest.approx(1.0, rel=FORMULA)


def test_the_whole_reaches_every_law_elementwise():
    radius, hematocrit = np.array([[2.0], [5.0], [30.0]]), np.array([0.2, 0.45])
    needed = {
        "constant": {"viscosity_mpa_s": 3.0},
        "haynes-marginal-zone": {"core_viscosity_mpa_s": 3.5, "marginal_zone_um": 1.0},
    }
    for law in law_names():
        together = apparent_viscosity(law, radius, hematocrit, parameters=needed.get(law))
        assert together.shape == (3, 2)
        one = apparent_viscosity(law, 30.0, 0.45, parameters=needed.get(law))
        assert np.ndim(one) == 0
        assert together[2, 1] == one
        assert get_law(law).citation


def test_cells_of_another_size_scale_the_diameter_of_fitted_laws():
    """Rat cells of 55 fL: the law at D (92/55)^(1/3); laws with constants of their own stay, and so does no scaling."""
    for inputs, expected in published("mcv_diameter_scaling_effect"):
        rat = dataclasses.replace(blood("pries-in-vivo"), red_cell_volume_fl=float(inputs["MCV_fL"]))
        radius = np.array(inputs["D_um"] / 2)
        found = make_blood(rat).viscosity(radius, np.array(0.45)) / PLASMA
        assert found == pytest.approx(expected, rel=FORMULA)
        unscaled = make_blood(blood("pries-in-vivo")).viscosity(radius, np.array(0.45))
        assert unscaled == apparent_viscosity("pries-in-vivo", radius, 0.45)
    rat = dataclasses.replace(blood("pries-in-vivo"), red_cell_volume_fl=55.0)
    radius, hematocrit = np.array([2.3, 2.0]), np.array([0.45, 0.45])
    np.testing.assert_array_equal(make_blood(rat).outside_range(radius, hematocrit), [False, True])  # 2.5 um as human
    for law, given in (
        ("constant", {}),
        ("haynes-marginal-zone", {"core_viscosity_mpa_s": 4.0, "marginal_zone_um": 1}),
    ):
        plain = dataclasses.replace(blood(law), parameters=given)
        values = [
            make_blood(dataclasses.replace(plain, red_cell_volume_fl=volume)).viscosity(radius, hematocrit)
            for volume in (None, 55.0)
        ]
        np.testing.assert_array_equal(*values)
    with pytest.raises(DomainError, match=r"red_cell_volume_fl is 0.0; .*rat 55"):
        make_blood(dataclasses.replace(rat, red_cell_volume_fl=0.0))


def test_where_no_cell_passes_viscosity_is_infinite_and_never_negative():
    assert np.isposinf(apparent_viscosity("pries-in-vivo", 0.5, 0.45))
    assert np.isposinf(apparent_viscosity("kiani-hudetz", 1.3, 0.45))


@pytest.mark.parametrize(
    ("radius", "hematocrit", "words"),
    [
        (0.0, 0.45, r"radius_um is 0.0 at position 0 .*positive"),
        (np.nan, 0.45, r"radius_um is nan"),
        ([5.0, -1.0], 0.45, r"radius_um is -1.0 at position 1"),
        (5.0, 45.0, r"hematocrit is 45.0 .*fraction, not per cent"),
        (5.0, -0.01, r"hematocrit is -0.01"),
        (5.0, 0.76, r"hematocrit is 0.76 .*0.75"),
    ],
)
def test_numbers_without_meaning_are_refused_by_name(radius, hematocrit, words):
    with pytest.raises(DomainError, match=words):
        apparent_viscosity("pries-in-vivo", radius, hematocrit)


def test_constants_without_meaning_are_refused_by_name():
    with pytest.raises(DomainError, match=r"plasma_viscosity_mpa_s is 0.0"):
        apparent_viscosity("pries-in-vivo", 5.0, 0.45, plasma_viscosity_mpa_s=0.0)
    with pytest.raises(DomainError, match=r"law 'constant': viscosity_mpa_s is nan"):
        apparent_viscosity("constant", 5.0, 0.45)
    with pytest.raises(DomainError, match=r"core_viscosity_mpa_s is nan"):
        apparent_viscosity("haynes-marginal-zone", 5.0, 0.45, parameters={"marginal_zone_um": 1.0})
    with pytest.raises(
        PluginError, match=r"no viscosity law 'water' is registered; there are constant, .*pries-in-vivo"
    ):
        apparent_viscosity("water", 5.0, 0.45)


def test_plasma_alone_does_not_pass_the_pole():
    """Wrong if a vessel that no cell enters had no viscosity at all where the law closes it, below 0.55 um."""
    tight = apparent_viscosity("pries-in-vivo", np.array([0.3, 0.55, 5.0]), 0.0)
    assert np.isinf(tight[:2]).all()
    assert np.isfinite(tight[2])
