"""Comparison of cohorts against textbook data, closed forms and general libraries of statistics."""

from itertools import combinations
from math import gamma, sqrt

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from statsmodels.api import OLS
from statsmodels.stats.meta_analysis import combine_effects
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.power import TTestIndPower, TTestPower

from vasohm import compare_groups
from vasohm.cohorts.effects import adjusted, small_sample_factor
from vasohm.cohorts.fits import regress, shared_variance
from vasohm.cohorts.mixed import split_variance
from vasohm.cohorts.observations import Names, observe
from vasohm.cohorts.outcomes import Outcome, image_values
from vasohm.cohorts.permutation import permute_groups, permute_residuals
from vasohm.cohorts.planning import power_of, subjects_needed
from vasohm.cohorts.variance import REPEATABILITY_FACTOR, repeats
from vasohm.cohorts.zone import zone_rows
from vasohm.errors import CohortError

ROUNDING = 1e-9  # relative; sums of some tens of terms in double precision, and roots found to 1e-12

# Student, Biometrika 1908;6:1-25: hours of sleep gained by ten patients with two drugs.
SLEEP = np.array(
    [[0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0], [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4]]
)
# Darwin's pairs of crossed and self-fertilised maize: differences of height in eighths of an inch, as Fisher gives them
# (The design of experiments, 1935, section 17).
MAIZE = np.array([49, -67, 8, 16, 6, 23, 28, 41, 14, 29, 56, 24, 75, 60, -48], dtype=float)
# Davies OL, Statistical methods in research and production, 1949, table 6.1: yield of dyestuff, six batches of five.
DYESTUFF = np.array(
    [
        [1545, 1440, 1440, 1520, 1580],
        [1540, 1555, 1490, 1560, 1495],
        [1595, 1550, 1605, 1510, 1560],
        [1445, 1440, 1595, 1465, 1545],
        [1595, 1630, 1515, 1635, 1625],
        [1520, 1455, 1450, 1480, 1445],
    ],
    dtype=float,
)
# Twenty-five p-values of a diet study in ascending order (Garcia-Arenzana N et al. Int J Cancer 2014;134:1916-1925).
DIET_P = np.concatenate(
    (
        [0.001, 0.008, 0.039, 0.041, 0.042, 0.060, 0.074, 0.205, 0.212, 0.216, 0.222, 0.251, 0.269],
        [0.275, 0.340, 0.341, 0.384, 0.569, 0.594, 0.696, 0.762, 0.940, 0.942, 0.975, 0.986],
    )
)


def cohort(seed: int, n: int = 8, eyes: str = "LR", images: int = 1, effect: float = 0.2) -> pd.DataFrame:
    """Two groups of n subjects, positive values; two eyes of one subject are alike."""
    rng = np.random.default_rng(seed)
    rows = []
    for k in range(2 * n):
        own, age = rng.normal(0, 0.25), rng.normal(60, 8)
        for eye in eyes:
            of_eye = own + rng.normal(0, 0.1)
            for _ in range(images):
                value = np.exp(of_eye + rng.normal(0, 0.05) + effect * (k < n))
                rows.append((f"s{k}", eye, "treated" if k < n else "control", age, "mf"[k % 2], value))
    return pd.DataFrame(rows, columns=["subject", "eye", "group", "age", "sex", "value"])


def compared(table: pd.DataFrame, **asked: object) -> "pd.Series":
    asked = {"outcome": "value", "by": "group", "reference": "control"} | asked
    return compare_groups(table, **asked).iloc[0]


def means(table: pd.DataFrame) -> pd.DataFrame:
    """Logarithms averaged over images, then eyes: the slow and obvious way."""
    logs = table.assign(ln=np.log(table["value"]))
    of_eyes = logs.groupby(["group", "subject", "eye"], as_index=False)[["ln", "age"]].mean()
    return of_eyes.groupby(["group", "subject"], as_index=False)[["ln", "age"]].mean()


def test_groups_agree_with_students_sleep_by_welch() -> None:
    """A wrong standard error or degrees of freedom. Welch's p of these data: 0.07939 (scipy agrees)."""
    table = pd.DataFrame(
        {"subject": [f"s{k}" for k in range(20)], "group": ["a"] * 10 + ["b"] * 10, "value": SLEEP.ravel()}
    )
    row = compared(table, reference="a")
    assert row["method"] == "welch"
    assert row["p"] == pytest.approx(0.07939, abs=5e-6)
    assert row["p"] == pytest.approx(stats.ttest_ind(*SLEEP, equal_var=False).pvalue, rel=ROUNDING)
    assert np.isnan(row["ratio"])
    assert "not_positive" in row["flags"].split(";")


def test_pairs_agree_with_students_sleep() -> None:
    """Pairs taken for groups would lose what each subject has in common with itself. Paired p: 0.002833."""
    table = pd.DataFrame(
        {"subject": [f"s{k}" for k in range(10)] * 2, "drug": ["a"] * 10 + ["b"] * 10, "value": SLEEP.ravel()}
    )
    row = compared(table, by="drug", reference="a")
    assert row["method"] == "differences of subjects"
    assert row["p"] == pytest.approx(0.002833, abs=5e-7)
    assert row["p"] == pytest.approx(stats.ttest_rel(*SLEEP).pvalue, rel=ROUNDING)


def test_ratio_and_interval_of_groups_are_those_of_logarithms() -> None:
    """The ratio would not be one of geometric means. Against scipy's interval of the difference of logarithms."""
    table = cohort(1, eyes="L")
    of_subjects = means(table)
    sides = [of_subjects.loc[of_subjects["group"] == name, "ln"] for name in ("treated", "control")]
    interval = stats.ttest_ind(*sides, equal_var=False).confidence_interval()
    row = compared(table)
    assert row["ratio"] == pytest.approx(np.exp(sides[0].mean() - sides[1].mean()), rel=ROUNDING)
    assert [row["ratio_lo"], row["ratio_hi"]] == pytest.approx(np.exp([interval.low, interval.high]), rel=ROUNDING)


def test_mixed_model_of_equal_numbers_is_the_t_test_of_subject_means() -> None:
    """Two eyes would count as two subjects. With equal numbers of images the model's test is exactly Student's."""
    table = cohort(2, images=2)
    of_subjects = means(table)
    sides = [of_subjects.loc[of_subjects["group"] == name, "ln"] for name in ("treated", "control")]
    row = compared(table)
    tolerance = 1e-3  # relative, of p: the likelihood is flat at its top
    assert row["method"] == "mixed model"
    assert row["p"] == pytest.approx(stats.ttest_ind(*sides).pvalue, rel=tolerance)
    logs = np.log(table["value"])
    naive = stats.ttest_ind(logs[table["group"] == "treated"], logs[table["group"] == "control"]).pvalue
    assert naive < 0.5 * row["p"]  # teeth: images taken for subjects


def test_covariates_agree_with_a_regression_of_subject_means() -> None:
    """A covariate would be left out or counted per image. Against statsmodels on means of subjects."""
    table = cohort(3, n=4)
    of_subjects = means(table)
    design = np.column_stack([of_subjects["group"] == "treated", np.ones(8), of_subjects["age"]]).astype(float)
    fitted = OLS(of_subjects["ln"].to_numpy(), design).fit()
    row = compared(table, covariates=["age"])
    assert row["method"] == "regression of subject means"
    assert np.log(row["ratio"]) == pytest.approx(fitted.params[0], rel=ROUNDING)
    assert row["p"] == pytest.approx(fitted.pvalues[0], rel=ROUNDING)


def test_variance_components_are_those_of_davies_dyestuff() -> None:
    """Spread between subjects would be taken for spread within.

    Balanced, so that REML is the analysis of variance: between batches (11271.5 - 2451.25) / 5 = 1764.05, within
    2451.25 (Davies 1949).
    """
    table = pd.DataFrame({"subject": np.repeat(list("abcdef"), 5), "value": np.exp(DYESTUFF.ravel() / 1000), "by": "x"})
    observed = observe(table, Names("value", "by", "subject", (), (), None, None, None))
    found = split_variance(observed, np.ones((30, 1)))
    climbed = 1e-3  # relative: the likelihood is flat at its top
    assert found is not None
    assert found.subject * 1e6 == pytest.approx(1764.05, rel=climbed)
    assert found.residual * 1e6 == pytest.approx(2451.25, rel=climbed)


def test_known_variances_agree_with_paule_and_mandel() -> None:
    """What is measured badly would count as much as the rest. Against the iterated estimate of statsmodels."""
    rng = np.random.default_rng(4)
    variance = rng.uniform(0.01, 1.0, 15)
    value = rng.normal(0, np.sqrt(0.2 + variance))
    fit = regress(value, np.ones((15, 1)), variance)
    reference = combine_effects(value, variance, method_re="iterated", atol=1e-12)
    assert fit.coefficients[0] == pytest.approx(reference.mean_effect_re, rel=1e-6)
    assert sqrt(fit.covariance[0, 0]) == pytest.approx(reference.sd_eff_w_re, rel=1e-6)


def test_stated_noise_bounds_the_variance_from_below() -> None:
    """Subjects that agree by chance would promise more than their measurements can: se = sqrt(noise / n)."""
    value = np.array([0.0, 1e-4, -1e-4, 2e-4])
    fit = regress(value, np.ones((4, 1)), np.full(4, 0.09))
    assert sqrt(fit.covariance[0, 0]) == pytest.approx(0.3 / 2, rel=1e-6)


def test_shared_scale_cancels_where_it_is_the_same_and_stays_where_it_is_not() -> None:
    """A scale that both groups share would widen their ratio, or one that they do not share would be averaged away.

    Two scales of 10 % leave 0.1^2 + 0.1^2 (JCGM 100:2008, 5.2.2); a scale for each image shows in the scatter.
    """
    n, se = 50, 0.1
    is_level = np.repeat([1.0, 0.0], n)
    design = np.column_stack([is_level, np.ones(2 * n)])
    weights = np.where(is_level > 0, 1, -1) / n
    cases = {
        "one for all": (np.full((2 * n, 1), se), 0.0),
        "one a group": (np.column_stack([is_level, 1 - is_level]) * se, 2 * se**2),
        "one an image": (np.eye(2 * n) * se, 0.0),
    }
    for name, (shared, expected) in cases.items():
        assert shared_variance(weights, design, shared) == pytest.approx(expected, rel=ROUNDING, abs=1e-18), name


def test_shared_scale_reaches_the_interval() -> None:
    """The groups' own microscopes would not show in the table. The interval's logarithm grows as sums of squares do."""
    table = cohort(5, n=40, eyes="L").assign(se=0.2, camera=lambda t: t["group"])
    known = {"outcome_shared_rel_se": "se"}
    one, two = compared(table, **known), compared(table, **known, calibration="camera")
    normal = 1.96
    se_one, se_two = (np.log(row["ratio_hi"] / row["ratio_lo"]) / 2 / normal for row in (one, two))
    of_t = 0.03  # relative: quantiles of t with 78 degrees of freedom and more are at most 1.6 % above normal ones
    assert se_two == pytest.approx(sqrt(se_one**2 + 2 * 0.2**2), rel=of_t)
    assert "two_calibrations" in two["flags"]
    assert "two_calibrations" not in one["flags"]


def test_sign_flips_are_fishers_count_for_darwins_maize() -> None:
    """The permutation test would not try what it says.

    863 of 32 768 sums are as great, so p = 2 * 863 / 32768 (Fisher, The design of
    experiments, 1935, section 21).
    """
    p, least = permute_residuals(MAIZE, np.ones((15, 1)), np.random.default_rng(0), by_sign=True)
    assert p == pytest.approx(2 * 863 / 2**15, rel=ROUNDING)
    assert least == pytest.approx(2 / 2**15, rel=ROUNDING)


def test_exchanged_labels_agree_with_an_obvious_loop() -> None:
    """Some arrangements would be left out or counted twice."""
    rng = np.random.default_rng(6)
    y, is_level = rng.normal(0, 1, 9), np.array([1.0] * 4 + [0.0] * 5)

    def t(chosen: tuple[int, ...]) -> float:
        other = [k for k in range(9) if k not in chosen]
        return abs(stats.ttest_ind(y[list(chosen)], y[other], equal_var=False).statistic)

    observed = t((0, 1, 2, 3))
    expected = np.mean([t(chosen) >= observed * (1 - 1e-9) for chosen in combinations(range(9), 4)])
    assert permute_groups(y, is_level, rng)[0] == pytest.approx(expected, rel=ROUNDING)


def test_residuals_exchanged_give_the_p_of_the_regression() -> None:
    """A covariate would be permuted away. For normal residuals the test of Freedman and Lane comes to the t test."""
    rng = np.random.default_rng(8)
    n = 60
    design = np.column_stack([np.repeat([1.0, 0.0], n // 2), np.ones(n), rng.normal(0, 1, n)])
    y = 0.4 * design[:, 0] + 2 * design[:, 2] + rng.normal(0, 1, n)
    p = permute_residuals(y, design, rng, by_sign=False)[0]
    expected = OLS(y, design).fit().pvalues[0]
    drawn = 4 * sqrt(expected * (1 - expected) / 9999) + 0.005  # four standard errors of draws, and what n = 60 leaves
    assert p == pytest.approx(expected, abs=drawn)


def test_adjusted_p_are_those_of_benjamini_and_hochberg() -> None:
    """Too many or too few would be called: 2 of these 25 at a rate of 0.15, 7 at 0.30; statsmodels agrees."""
    found = adjusted(DIET_P)
    assert found == pytest.approx(multipletests(DIET_P, method="fdr_bh")[1], rel=ROUNDING)
    assert [(found <= rate).sum() for rate in (0.15, 0.30)] == [2, 7]
    shuffled = np.random.default_rng(0).permutation(25)
    with_gap = adjusted(np.append(DIET_P[shuffled], np.nan))
    assert with_gap[:-1] == pytest.approx(found[shuffled], rel=ROUNDING)
    assert np.isnan(with_gap[-1])


def test_small_sample_factor_is_hedges() -> None:
    """Effects of small studies would come out too large: Hedges' exact factor, 1 - 3 / (4 df - 1) near it (1981)."""
    exact = gamma(9) / (sqrt(9) * gamma(8.5))
    approximation_error = 0.00033  # of the second formula from 10 degrees of freedom on (Hedges 1981)
    assert small_sample_factor(18) == pytest.approx(exact, rel=ROUNDING)
    assert small_sample_factor(18) == pytest.approx(0.957746, abs=approximation_error)


def test_repeatability_is_bland_and_altmans() -> None:
    """Minimum detectable change would be wrong by a root of two.

    Pairs: s_w = sqrt(mean d^2 / 2) = 0.317805, coefficient 0.880910 (formula of Bland and Altman, Stat Methods Med
    Res 1999;8:135-160, section 3; evaluated separately).
    """
    pairs = np.array([[10, 10.4], [12.1, 11.7], [9.5, 9.9], [11.2, 11.0], [10.8, 11.5]])
    sd, df = repeats(pairs.ravel(), np.repeat(np.arange(5), 2))
    assert (sd, df) == (pytest.approx(0.31780497, rel=1e-7), 5)
    assert REPEATABILITY_FACTOR * sd == pytest.approx(0.88091044, rel=1e-7)


def test_planned_numbers_are_those_of_cohens_tables() -> None:
    """A next study would be too small.

    Two groups at 5 % and 80 %: 393, 64 and 26 a group for d of 0.2, 0.5 and 0.8 (Cohen J. Statistical power analysis,
    2nd ed, 1988, table 2.4.1); statsmodels rounds up to the same or one more.
    """
    for d, expected in ((0.2, 393), (0.5, 64), (0.8, 26)):
        needed = subjects_needed(d, 1.0, paired=False)
        assert needed - expected in (0, 1)
        assert needed == np.ceil(TTestIndPower().solve_power(d, power=0.8, alpha=0.05))
        assert subjects_needed(d, 1.0, paired=True) == np.ceil(TTestPower().solve_power(d, power=0.8, alpha=0.05))
    assert power_of(20, 0.5, 1.0, paired=False) == pytest.approx(TTestIndPower().power(0.5, 20, 0.05), rel=1e-6)


@pytest.mark.parametrize("images", [1, 2])
def test_comparison_does_not_depend_on_order_unit_or_direction(images: int) -> None:
    """Rows in another order, another unit, or the groups the other way round would tell another story."""
    table = cohort(9, images=images)
    row = compared(table)
    shuffled = compared(table.sample(frac=1, random_state=3).reset_index(drop=True))
    scaled = compared(table.assign(value=table["value"] * 1e13))
    turned = compared(table, reference="treated")
    climbed = 1e-3  # relative: the likelihood is flat at its top
    for other in (shuffled, scaled):
        assert other["ratio"] == pytest.approx(row["ratio"], rel=climbed)
        assert other["p"] == pytest.approx(row["p"], rel=climbed)
    assert turned["ratio"] == pytest.approx(1 / row["ratio"], rel=climbed)
    assert turned["ratio_lo"] == pytest.approx(1 / row["ratio_hi"], rel=climbed)
    assert compared(table).equals(row)


def test_only_eyes_seen_in_both_states_make_the_difference() -> None:
    """Another eye in the second state would be taken for an effect of the state."""
    rows = [(f"s{k}", eye, state, value) for k in range(3) for eye, state, value in (
        ("L", "rest", 10.0 + k), ("L", "drug", 11.0 + 1.1 * k), ("R", "drug", 99.0)
    )]  # fmt: skip
    table = pd.DataFrame(rows, columns=["subject", "eye", "state", "value"])
    row = compared(table, by="state", reference="rest")
    assert row["ratio"] == pytest.approx(1.1, rel=ROUNDING)


def test_networks_of_an_image_are_side_by_side_and_segments_weighted_by_length() -> None:
    """Resistances of parallel trees would be averaged. R and 2 R in parallel are 2 R / 3; ln r over length by hand."""
    image = pd.DataFrame({"image_id": ["a"], "pixel_size_um": [2.0], "pixel_size_se_um": [0.02]})
    networks = pd.DataFrame(
        {
            "image_id": "a",
            "vessel_class": ["arteriole", "arteriole", "venule", ""],
            "length_um": 100.0,
            "resistance_pa_s_m3": [3e13, 6e13, 1e12, 5e11],
            "ln_resistance_random_se": [0.1, 0.2, 0.1, 0.1],
            "ln_resistance_shared_se": [0.05, 0.05, 0.05, 0.05],
        }
    )
    found = image_values(Outcome("networks.resistance_pa_s_m3"), {"image": image, "networks": networks})
    assert found["vessel_class"].tolist() == ["arteriole", "venule"]
    assert found["the value"].tolist() == pytest.approx([2e13, 1e12], rel=ROUNDING)
    own = sqrt((2 / 3 * 0.1) ** 2 + (1 / 3 * 0.2) ** 2 + 0.05**2 - 0.03**2)  # the pixel size holds 3 times 1 %
    assert found["its relative se"][0] == pytest.approx(own, rel=ROUNDING)
    assert found["its shared relative se"].tolist() == pytest.approx([0.03, 0.03], rel=ROUNDING)
    segments = pd.DataFrame(
        {
            "image_id": "a",
            "vessel_class": "",
            "length_um": [100.0, 300.0, 50.0],
            "radius_mean_um": [5.0, 8.0, 30.0],
            "radius_hydraulic_um": [5.0, 8.0, 30.0],
            "radius_hydraulic_se_um": [0.1, 0.1, 0.1],
            "ln_resistance_random_se": [0.05, 0.05, 0.05],
        }
    )
    small = Outcome("segments.radius_hydraulic_um", (0.0, 10.0))
    radius = image_values(small, {"image": image, "segments": segments})["the value"][0]
    assert radius == pytest.approx(5.0**0.25 * 8.0**0.75, rel=ROUNDING)


def test_zone_around_the_disc_is_poiseuilles_of_what_crosses_it() -> None:
    """A network's resistance depends on where the picture ends; that of the zone must not.

    Two straight radial vessels and one at 60 degrees to the radius, which is twice as long: conductances add, and what
    lies outside the zone or runs along a ring counts nothing (closed form of Poiseuille's law).
    """
    mu_mpa_s, radius_um, pixel_um = 3.0, 20.0, 2.0
    rows = []
    away = np.arange(10.0, 200.0, 0.5)
    for segment, angle in ((1, 0.0), (2, 2.0)):
        rows += [(segment, r * np.cos(angle), r * np.sin(angle), r * pixel_um, radius_um) for r in away]
    turned = 4.0 + np.sqrt(3.0) * np.log(away)  # a logarithmic spiral keeps its angle to the radius
    rows += [(3, r * np.cos(t), r * np.sin(t), 2 * r * pixel_um, radius_um) for r, t in zip(away, turned, strict=True)]
    ring = np.linspace(0.0, 1.0, 400)
    rows += [(4, 75.2 * np.cos(a), 75.2 * np.sin(a), 75.2 * a * pixel_um, radius_um) for a in ring]
    points = pd.DataFrame(rows, columns=["segment_id", "x_px", "y_px", "s_um", "radius_um"])
    segments = pd.DataFrame({"segment_id": [1, 2, 3, 4], "vessel_class": "venule", "viscosity_mpa_s": mu_mpa_s})
    segments["ln_resistance_random_se"], segments["ln_resistance_shared_se"] = 0.1, 0.05
    image = pd.Series(
        {"image_id": "a", "disc_x_px": 0.0, "disc_y_px": 0.0, "zone_inner_px": 50.0, "zone_outer_px": 100.0}
    )
    row = zone_rows(image, points, segments).iloc[0]
    straight = 8 * mu_mpa_s * 1e-3 * 50 * pixel_um * 1e-6 / (np.pi * (radius_um * 1e-6) ** 4)
    on_the_grid = 1e-3  # relative: steps of half a pixel are chords of the spiral
    assert row["resistance_pa_s_m3"] == pytest.approx(straight / 2.5, rel=on_the_grid)
    assert row["radius_um"] == pytest.approx(radius_um, rel=ROUNDING)
    assert row["ln_resistance_random_se"] == pytest.approx(0.1 * sqrt(0.4**2 + 0.4**2 + 0.2**2), rel=on_the_grid)
    assert row["ln_resistance_shared_se"] == pytest.approx(0.05, rel=ROUNDING)
    alone = zone_rows(image, points[points["segment_id"] == 4], segments).iloc[0]
    assert np.isnan(alone["resistance_pa_s_m3"])


REFUSED = {
    "one group": (lambda t: t[t["group"] == "control"], {}, "all 16 rows with 'value' have group 'control'"),
    "one subject": (lambda t: t.assign(subject="s1"), {}, "are of one subject, 's1'"),
    "one subject a group": (
        lambda t: t[t["subject"].isin(["s0", "s15"])],
        {},
        "two subjects on either side are the least .* 'control' has 1, 'treated' has 1",
    ),
    "all missing": (lambda t: t.assign(value=np.nan), {}, "'value' has no value in any of 32 rows"),
    "covariate is the group": (
        lambda t: t.assign(arm=t["group"].str.upper()),
        {"covariates": ["arm"]},
        "covariate 'arm TREATED' tells the same as the levels",
    ),
    "covariates say the same": (
        lambda t: t.assign(months=12 * t["age"]),
        {"covariates": ["age", "months"]},
        "covariate 'months' tells the same as the levels .*, or other covariates",
    ),
    "constant covariate": (lambda t: t.assign(site="x"), {"covariates": ["site"]}, "'site' is 'x' in every row"),
    "covariate of both": (
        lambda t: t.assign(age=["old", *map(str, t["age"][1:])]),
        {"covariates": ["age"]},
        "'age' holds numbers and also 'old'",
    ),
    "empty covariate": (lambda t: t.assign(age=""), {"covariates": ["age"]}, "'age' is empty in every row"),
    "unknown outcome": (lambda t: t, {"outcome": "resistance"}, "no column 'resistance'; it has 'subject'"),
    "outcome of words": (lambda t: t, {"outcome": "sex"}, "column 'sex' holds 'm' where numbers are wanted"),
    "unknown reference": (lambda t: t, {"reference": "sham"}, "reference 'sham' is no group .* 'control', 'treated'"),
    "subjects not named": (
        lambda t: t.assign(subject=["", *t["subject"][1:]]),
        {},
        "'subject' is empty in 1 of 32 rows .* could be one subject's",
    ),
    "no levels": (lambda t: t.assign(group=""), {}, "'group' is empty in every row"),
    "neither groups nor pairs": (
        lambda t: t.assign(group=["control", *t["group"][1:]]),
        {},
        "1 of 16 subjects have more than one group .'s0'",
    ),
    "seed below 0": (lambda t: t, {"seed": -1}, "seed -1 is below 0"),
    "doubt below 0": (lambda t: t.assign(se=-0.1), {"outcome_rel_se": "se"}, "'se' holds -0.1"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_what_cannot_be_compared_is_refused_by_name(name: str) -> None:
    """A number would come out of a design that holds none, or nobody could tell what to mend."""
    change, asked, words = REFUSED[name]
    with pytest.raises(CohortError, match=words):
        compared(change(cohort(10)), **asked)


def test_too_many_words_are_no_covariate() -> None:
    """Names of subjects as a covariate would leave nothing to compare."""
    table = cohort(11, n=12, eyes="L")
    with pytest.raises(CohortError, match="'subject' holds 24 different words; at most 20"):
        compared(table, covariates=["subject"])


@pytest.mark.slow
def test_nothing_is_called_something_five_times_in_a_hundred() -> None:
    """Two eyes and many vessels would make significance out of nothing.

    A design effect of 1.84 turns 5 % into 15 % (rosner, biometrics 1982;38:105-114). Simulated: calls of ours within
    3 to 7 % and coverage within 95 +- 2 %, with vessels taken for subjects above 14 %; power as planned within 5
    points.
    """
    rng = np.random.default_rng(12)
    n, repeats_made, planned = 10, 300, np.log(1.4)
    held, ours, naive, seen = [], [], [], []
    for _ in range(repeats_made):
        own = rng.normal(0, 0.25, 2 * n)[:, None, None] + rng.normal(0, 0.1, (2 * n, 2, 1))
        logs = own + rng.normal(0, 0.3, (2 * n, 2, 15))
        is_level = np.arange(2 * n) < n
        naive.append(stats.ttest_ind(logs[is_level].ravel(), logs[~is_level].ravel()).pvalue < 0.05)
        of_eyes = logs.mean(axis=2)
        table = pd.DataFrame(
            {
                "subject": np.repeat([f"s{k}" for k in range(2 * n)], 2),
                "eye": ["L", "R"] * (2 * n),
                "group": np.repeat(np.where(is_level, "treated", "control"), 2),
                "value": np.exp(of_eyes.ravel()),
            }
        )
        row = compared(table)
        ours.append(row["p"] < 0.05)
        held.append(row["ratio_lo"] < 1 < row["ratio_hi"])
        moved = table.assign(value=table["value"] * np.where(table["group"] == "treated", np.exp(planned), 1))
        seen.append(compared(moved)["p"] < 0.05)
    assert 0.03 <= np.mean(ours) <= 0.07
    assert 0.93 <= np.mean(held) <= 0.97
    assert np.mean(naive) > 0.14
    sd = sqrt(0.25**2 + 0.1**2 / 2 + 0.3**2 / 30)
    assert np.mean(seen) == pytest.approx(power_of(n, planned, sd, paired=False), abs=0.05)
