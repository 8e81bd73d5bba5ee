"""Results that are the truth with a known fault: each figure of the appraisal must say what was put in.

An appraisal that errs would call a bad measurement good. All expected values are what was put in, or closed forms.
"""

from itertools import pairwise

import numpy as np
import pandas as pd
import pytest

from vasohm.cohorts.matching import pair_places
from vasohm.flow.rheology import Blood, BloodSettings, make_blood
from vasohm.study.accuracy import Appraisal, sum_up
from vasohm.study.annotation import Agreement, agreement
from vasohm.study.certificate import draw_certificate, summary_lines
from vasohm.study.deviations import Bed, deviations
from vasohm_synthetic import blood as true_blood
from vasohm_synthetic.clearance import Field
from vasohm_synthetic.mesh import MeshShape, mesh_scene
from vasohm_synthetic.trees import Root, TreeShape, grow_trees
from vasohm_synthetic.truth import truth_tables
from vasohm_synthetic.tubes import Tube, tube_scene

PIXEL_UM = 2.0
VISCOSITY_MPA_S = 3.0
HEMATOCRIT = 0.45
WATER = true_blood.Blood(law="constant", viscosity_mpa_s=VISCOSITY_MPA_S)
LN_SE = 0.02  # stated where a test does not say another
NORMAL_97_5 = 1.959963984540054  # JCGM 100:2008, table G.1
ROUNDING = 1e-9
STEP = 1e-3  # relative error of integrals and feet at points 1 px apart: (step / radius of bend)^2 / 8, and tapers
TWO_ENDS_PX = 4.0  # a vessel is followed to 2 px beyond the end of the other centreline, at both ends

Tables = dict[str, pd.DataFrame]


def the_law(law: str = "constant") -> Blood:
    return make_blood(BloodSettings(law, HEMATOCRIT, 0.0, 1.2, VISCOSITY_MPA_S, {}))


def bed(tables: Tables, *, pixel_se_um: float = np.nan) -> Bed:
    image = {"width_px": [400], "height_px": [400], "pixel_size_um": [PIXEL_UM], "pixel_size_se_um": [pixel_se_um]}
    return Bed("bed", {**tables, "image": pd.DataFrame(image)})


def measured_as(tables: Tables, ln_se: float = LN_SE, ratio: float = 1.0) -> Tables:
    """The truth as if it were measured, radii x ratio; `ln_se` is stated for ln r, 4 times it for ln R."""
    copy = {name: table.copy() for name, table in tables.items()}
    points, segments = copy["points"], copy["segments"]
    points["radius_um"] *= ratio
    points["radius_se_um"] = ln_se * points["radius_um"]
    segments["radius_hydraulic_um"] *= ratio
    for table in (segments, copy["networks"]):
        table["resistance_pa_s_m3"] *= ratio**-4
        table["ln_resistance_random_se"], table["ln_resistance_shared_se"] = 4 * ln_se, 0.0
        table["resistance_lo_pa_s_m3"] = table["resistance_pa_s_m3"] * np.exp(-NORMAL_97_5 * 4 * ln_se)
        table["resistance_hi_pa_s_m3"] = table["resistance_pa_s_m3"] * np.exp(NORMAL_97_5 * 4 * ln_se)
    return copy


def appraised(measured: Tables, true: Tables, *, law: str = "constant", pixel_se_um: float = np.nan) -> Appraisal:
    found = deviations(bed(measured, pixel_se_um=pixel_se_um), bed(true), the_law(law), HEMATOCRIT)
    return sum_up([found], [])


def total(appraisal: Appraisal) -> "pd.Series[float]":
    return appraisal.radius.iloc[-1]


def tubes_of(*tubes: Tube) -> Tables:
    return truth_tables(tube_scene(tubes, (400, 400)), PIXEL_UM, WATER)


@pytest.fixture(scope="module")
def tree() -> Tables:
    root = Root(-0.5, 200.0, 0.0, "arteriole", 0, crop_px=20.0)
    scene = grow_trees([root], TreeShape(root_radius_px=9.0), Field((400, 400), None, 4.0), np.random.default_rng(4))
    return truth_tables(scene, PIXEL_UM, WATER)


def test_the_truth_itself_has_no_fault(tree: Tables) -> None:
    """Whatever is not zero here would be charged to every measurement."""
    appraisal = appraised(measured_as(tree), tree)
    row = total(appraisal)
    assert row["length_true_um"] == pytest.approx(tree["segments"]["length_um"].sum(), rel=ROUNDING)
    assert row["length_found_um"] == pytest.approx(row["length_true_um"], rel=ROUNDING)
    assert row["length_stray_um"] == 0
    assert row["length_doubled_um"] == pytest.approx(0, abs=ROUNDING * row["length_true_um"])
    assert max(abs(row["ln_radius_rmse"]), row["centreline_rms_px"], row["ln_radius_rms_z"]) < ROUNDING
    assert row["radius_coverage_95"] == row["resistance_coverage_95"] == 1
    assert (appraisal.segments["left_out"] == "").all()
    np.testing.assert_allclose(appraisal.segments["length_ratio"], 1, rtol=ROUNDING)
    np.testing.assert_allclose(appraisal.segments["resistance_ratio"], 1, rtol=STEP)
    summary = appraisal.summary
    assert summary["branchings"]["f1"] == 1
    assert summary["branchings"]["true"] == (tree["nodes"]["kind"] == "branching").sum() > 10
    assert summary["networks"]["resistance_ratio"]["geometric_mean"] == pytest.approx(1, rel=ROUNDING)
    assert summary["loops"] == {"true": 0, "measured": 0}


def test_radii_3_per_cent_too_wide(tree: Tables) -> None:
    """Bias ln 1.03 everywhere, R over true 1.03^-4, and with 2 % stated: z = ln 1.03 / 0.02, all inside 95 %."""
    appraisal = appraised(measured_as(tree, ratio=1.03), tree)
    for _, row in appraisal.radius[appraisal.radius["n_points"] > 0].iterrows():
        assert row["ln_radius_bias"] == pytest.approx(np.log(1.03), rel=ROUNDING)
        assert row["ln_radius_rmse"] == pytest.approx(np.log(1.03), rel=ROUNDING)
        assert row["ln_radius_scatter"] < ROUNDING
        assert row["ln_radius_rms_z"] == pytest.approx(np.log(1.03) / LN_SE, rel=ROUNDING)
        assert row["radius_coverage_95"] == 1
    np.testing.assert_allclose(appraisal.segments["resistance_ratio"], 1.03**-4, rtol=STEP)
    np.testing.assert_allclose(appraisal.segments["radius_hydraulic_ratio"], 1.03, rtol=STEP)
    np.testing.assert_allclose(appraisal.segments["z"], -np.log(1.03) / LN_SE, rtol=STEP / np.log(1.03))
    assert appraisal.summary["networks"]["resistance_ratio"]["geometric_mean"] == pytest.approx(1.03**-4)
    too_sure = appraised(measured_as(tree, ln_se=0.01, ratio=1.03), tree)  # teeth: ln 1.03 is 2.96 of these
    assert total(too_sure)["radius_coverage_95"] == total(too_sure)["resistance_coverage_95"] == 0
    assert set(too_sure.radius["verdict"]) == {"biased", "too few"}
    assert np.isnan(too_sure.summary["smallest_resolved_radius_px"])


def test_centreline_beside_the_true_one(tree: Tables) -> None:
    """0.3 px off at right angles is a centreline error of 0.3 px, and nothing is missed or invented."""
    measured = measured_as(tree)
    points = measured["points"]
    for _, part in points.groupby("segment_id"):
        dx, dy = np.gradient(part["x_px"]), np.gradient(part["y_px"])
        points.loc[part.index, "x_px"] -= 0.3 * dy / np.hypot(dx, dy)
        points.loc[part.index, "y_px"] += 0.3 * dx / np.hypot(dx, dy)
    row = total(appraised(measured, tree))
    bends = 0.01  # where the normal turns within a step
    assert row["centreline_rms_px"] == pytest.approx(0.3, abs=bends)
    assert row["length_found_um"] == pytest.approx(row["length_true_um"], rel=STEP)
    assert row["length_stray_um"] == 0
    assert row["length_doubled_um"] < bends * row["length_true_um"]


def test_a_vessel_dropped_is_length_not_found(tree: Tables) -> None:
    """Only the class of its radius loses length; a network that lost a tenth of its length or less is compared."""
    measured = measured_as(tree)
    lost = measured["segments"].sort_values("length_um").iloc[-1]
    for name in ("segments", "points"):
        measured[name] = measured[name][measured[name]["segment_id"] != lost["segment_id"]]
    appraisal = appraised(measured, tree)
    row = total(appraisal)
    missing_px = (row["length_true_um"] - row["length_found_um"]) / PIXEL_UM
    assert lost["length_um"] / PIXEL_UM - TWO_ENDS_PX <= missing_px <= lost["length_um"] / PIXEL_UM
    classes = appraisal.radius.iloc[:-1]
    lost_px = lost["radius_mean_um"] / PIXEL_UM
    lacking = classes["length_found_um"] < classes["length_true_um"] - TWO_ENDS_PX * PIXEL_UM
    assert ((classes["radius_from_px"] <= lost_px) & ~(classes["radius_to_px"] <= lost_px))[lacking].all()
    assert appraisal.networks["left_out"].tolist() == [""]
    assert appraisal.networks["found_fraction"].iloc[0] == pytest.approx(
        row["length_found_um"] / row["length_true_um"], abs=0.01
    )
    half = {**measured, "points": measured["points"][measured["points"]["segment_id"] > len(measured["segments"]) // 2]}
    assert appraised(half, tree).networks["left_out"].tolist() == ["match"]


def added(measured: Tables, tube: Tube) -> Tables:
    """The measured tables with one tube more, in a network of its own."""
    extra = measured_as(tubes_of(tube))
    joined = {}
    for name, table in measured.items():
        more = extra[name].copy()
        for column in {"segment_id", "network_id", "node_id", "node_a", "node_b"} & set(more):
            more[column] += 1000
        joined[name] = pd.concat([part for part in (table, more) if len(part)] or [table], ignore_index=True)
    return joined


@pytest.mark.parametrize(
    ("tube", "column", "expected_px"),
    [
        (Tube(200, 300, 3, 150, 0), "length_stray_um", 150),  # nothing there
        (Tube(200, 101, 3, 150, 0), "length_doubled_um", 150),  # 1 px beside the true vessel: within its lumen
        (Tube(200, 103, 3, 150, 0), "length_stray_um", 150),  # 3 px beside it: beyond 0.75 of its radius
        (Tube(200, 100, 3, 150, 60), "length_stray_um", 150),  # across the true vessel
        (Tube(350, 100, 3, 50, 0), "length_stray_um", 48),  # on from its end: 2 px of it may be the vessel's
    ],
)
def test_a_vessel_invented(tube: Tube, column: str, expected_px: float) -> None:
    """Stray where no vessel of its direction is, doubled where a vessel is measured twice."""
    true = tubes_of(Tube(200, 100, 3, 250, 0))
    row = total(appraised(added(measured_as(true), tube), true))
    assert row[column] == pytest.approx(expected_px * PIXEL_UM, abs=PIXEL_UM)  # points are 1 px apart
    other = {"length_stray_um": "length_doubled_um", "length_doubled_um": "length_stray_um"}[column]
    assert row[other] == pytest.approx(0, abs=1e-6)
    assert row["length_found_um"] == pytest.approx(250 * PIXEL_UM, rel=ROUNDING)


def cut(tables: Tables, parts: int) -> Tables:
    """Every segment cut into as many parts, each with Hagen and Poiseuille's resistance of a cone or cylinder."""
    points = tables["points"]
    frames, rows = [], []
    for segment_id, whole in points.groupby("segment_id"):
        edges = np.linspace(0, len(whole) - 1, parts + 1).round().astype(int)
        for part, (low, high) in enumerate(pairwise(edges)):
            piece = whole.iloc[low : high + 1].copy()
            piece["segment_id"] = 10 * segment_id + part
            piece["point"] = np.arange(1, len(piece) + 1)
            length_um = piece["s_um"].iloc[-1] - piece["s_um"].iloc[0]
            piece["s_um"] -= piece["s_um"].iloc[0]
            a, b = piece["radius_um"].iloc[0], piece["radius_um"].iloc[-1]
            mean = (a * a + a * b + b * b) / (3 * a**3 * b**3)  # of r^-4 where r is linear
            row = tables["segments"].set_index("segment_id").loc[segment_id].copy()
            row["segment_id"], row["length_um"] = 10 * segment_id + part, length_um
            row["radius_hydraulic_um"] = mean**-0.25
            row["resistance_pa_s_m3"] = 8 / np.pi * VISCOSITY_MPA_S * 1e-3 * mean * length_um * 1e18
            frames.append(piece)
            rows.append(row)
    segments = pd.DataFrame(rows)[tables["segments"].columns].reset_index(drop=True)
    return {**tables, "points": pd.concat(frames, ignore_index=True), "segments": segments}


def test_other_cuts_of_segments_change_nothing() -> None:
    """True R of each third of a cylinder and a cone is that of the closed form, and no length is lost at the cuts."""
    true = tubes_of(Tube(200, 100, 3, 250, 10), Tube(200, 250, 4, 200, -20, radius_end_px=2.0))
    appraisal = appraised(measured_as(cut(true, 3)), true)
    assert len(appraisal.segments) == 6
    np.testing.assert_allclose(appraisal.segments["resistance_ratio"], 1, rtol=STEP)
    np.testing.assert_allclose(appraisal.segments["radius_hydraulic_ratio"], 1, rtol=STEP)
    np.testing.assert_allclose(appraisal.segments["length_ratio"], 1, rtol=ROUNDING)
    row = total(appraisal)
    assert row["length_found_um"] == pytest.approx(row["length_true_um"], rel=ROUNDING)
    assert row["length_doubled_um"] == pytest.approx(0, abs=1e-6)


def test_crossing_vessels_keep_their_own_truth() -> None:
    """At a crossing the nearest point may be the other vessel's: its radius would be an error of a factor of 3."""
    true = tubes_of(Tube(200, 200, 6, 300, 20), Tube(200, 200, 2, 300, 80))
    assert len(true["crossings"]) == 1
    measured = measured_as(true)
    measured["points"]["y_px"] += 0.5
    appraisal = appraised(measured, true)
    assert total(appraisal)["ln_radius_rmse"] < ROUNDING
    assert appraisal.summary["crossings"]["f1"] == 1


def test_scatter_and_stated_uncertainty_are_told_apart() -> None:
    """Errors of 5 % with 5 % stated: z is 1 and 95 % are inside; with 2.5 % stated z is 2. Sampling limits: 4 sigma."""
    true = tubes_of(*(Tube(200, y, 3, 380, 0) for y in range(20, 390, 25)))
    rng = np.random.default_rng(8)
    n = len(true["points"])
    of_rms, of_share = 4 / np.sqrt(2 * n), 4 * np.sqrt(0.95 * 0.05 / n)
    figures = {}
    for stated in (0.05, 0.025):
        measured = measured_as(true, ln_se=stated)
        noisy = measured["points"]["radius_um"] * np.exp(rng.normal(0, 0.05, n))
        measured["points"] = measured["points"].assign(radius_um=noisy, radius_se_um=stated * noisy)
        figures[stated] = total(appraised(measured, true))
    assert figures[0.05]["ln_radius_rms_z"] == pytest.approx(1, abs=of_rms)
    assert figures[0.05]["radius_coverage_95"] == pytest.approx(0.95, abs=of_share)
    assert figures[0.05]["ln_radius_rmse"] == pytest.approx(0.05, rel=of_rms)
    of_mad = 1.6 * of_rms  # the median absolute deviation of normal errors has 37 % of the efficiency
    assert figures[0.05]["ln_radius_scatter"] == pytest.approx(0.05, rel=of_mad)
    assert figures[0.025]["ln_radius_rms_z"] == pytest.approx(2, rel=of_rms)
    assert figures[0.025]["radius_coverage_95"] == pytest.approx(0.673, abs=0.03)  # normal within 1.96 / 2


def test_pixel_size_that_is_exact_is_told_apart() -> None:
    """Stated 5 % = 4 % noise and 3 % pixel size, which has no error here: without it z is 5/4 as large."""
    true = tubes_of(Tube(200, 200, 3, 300, 0))
    stated = measured_as(true, ln_se=0.05, ratio=1.04)
    row = total(appraised(stated, true, pixel_se_um=0.03 * PIXEL_UM))
    assert row["ln_radius_rms_z"] == pytest.approx(np.log(1.04) / 0.05, rel=ROUNDING)
    assert row["ln_radius_rms_z_exact_scale"] == pytest.approx(np.log(1.04) / 0.04, rel=ROUNDING)
    segment = appraised(stated, true, pixel_se_um=0.03 * PIXEL_UM).segments.iloc[0]
    # d ln R / d ln pixel size = 1 - 4 for a constant viscosity
    assert segment["ln_resistance_se_exact_scale"] == pytest.approx(np.sqrt(0.2**2 - (3 * 0.03) ** 2), rel=STEP)


def test_smallest_resolved_radius() -> None:
    """1.2 px with 30 % stated is uncertain, 3 px with 5 % resolved, 12 px off by 20 % with 5 % stated is biased."""
    true = tubes_of(Tube(200, 50, 1.2, 300), Tube(200, 100, 3, 300), Tube(200, 200, 6, 300), Tube(200, 300, 12, 300))
    measured = measured_as(true, ln_se=0.05)
    points = measured["points"]
    thin, wide = points["segment_id"] == 1, points["segment_id"] == 4
    points.loc[thin, "radius_se_um"] = 0.3 * points["radius_um"]
    points.loc[wide, "radius_um"] *= 1.2
    appraisal = appraised(measured, true)
    verdicts = dict(zip(appraisal.radius["radius_from_px"].iloc[:-1], appraisal.radius["verdict"], strict=False))
    assert verdicts == {
        0.0: "too few",
        1.0: "uncertain",
        1.5: "too few",
        2.5: "resolved",
        4.5: "resolved",
        9.0: "biased",
    }
    assert appraisal.summary["smallest_resolved_radius_px"] == pytest.approx(3, rel=ROUNDING)


def test_places_pair_one_to_one_within_5_px() -> None:
    """Two measured branchings beside one true one are one found and one invented."""
    true = np.array([[10.0, 10.0], [50.0, 50.0], [53.0, 50.0]])
    assert pair_places(true, true) == 3
    assert pair_places(np.array([[13.0, 13.0]]), true) == 1  # 4.2 px
    assert pair_places(np.array([[14.0, 14.0]]), true) == 0  # 5.7 px
    assert pair_places(np.array([[10.0, 9.0], [10.0, 11.0]]), true) == 1
    assert pair_places(np.array([[49.0, 50.0], [55.5, 50.0]]), true) == 2  # the nearest for both is not the pairing
    assert pair_places(np.zeros((0, 2)), true) == 0


def test_loops_and_other_blood() -> None:
    """A mesh keeps its loops; where the truth was made for other blood its networks are no measure of ours."""
    mesh = truth_tables(mesh_scene(MeshShape(), (300, 340), np.random.default_rng(6)), PIXEL_UM, WATER)
    appraisal = appraised(measured_as(mesh), mesh)
    loops = int(mesh["networks"]["loops"].sum())
    assert appraisal.summary["loops"] == {"true": loops, "measured": loops}
    assert loops > 0
    assert set(appraised(measured_as(mesh), mesh, law="pries-in-vivo").networks["left_out"]) == {"viscosity"}


def nothing_of(tables: Tables) -> Tables:
    return {name: table.iloc[:0] for name, table in tables.items()}


@pytest.mark.parametrize("empty", ["measured", "true"])
def test_nothing_measured_or_nothing_there(tree: Tables, empty: str) -> None:
    """A blank picture is an appraisal too: all is missed, or all is stray."""
    measured, true = measured_as(tree), tree
    if empty == "measured":
        measured = nothing_of(measured)
    else:
        true = nothing_of(true)
    appraisal = appraised(measured, true)
    row = total(appraisal)
    assert row["length_found_um"] == 0
    length_um = tree["segments"]["length_um"].sum()
    assert row["length_stray_um"] == pytest.approx(length_um if empty == "true" else 0, rel=ROUNDING)
    assert row["verdict"] == "too few"
    assert any("No radius is resolved" in line for line in summary_lines(appraisal))
    assert draw_certificate(appraisal, "png").startswith(b"\x89PNG")


def test_summary_and_picture_say_what_the_tables_say(tree: Tables) -> None:
    """What a person reads is what the tables hold; the same appraisal gives the same bytes."""
    appraisal = appraised(measured_as(tree, ratio=1.03), tree)
    text = "\n".join(summary_lines(appraisal))
    smallest = appraisal.summary["smallest_resolved_radius_px"]
    for words in (
        "+3.0 %",
        "resistance over true: geometric mean 0.888",
        f"resolved: {smallest:.2g} px",
        "Crossings: none true, none measured",
        "stated standard uncertainty; 1 is right",
    ):
        assert words in text
    for file_format in ("png", "svg"):
        assert draw_certificate(appraisal, file_format) == draw_certificate(appraisal, file_format)


def counts_of(*, pixels: tuple[float, ...] = (0, 0, 0, 0), centreline: tuple[float, ...] = (0, 0, 0, 0)) -> Agreement:
    return Agreement(*pixels, *centreline, 0, 0, 0, 0)


def test_scores_of_masks_are_those_of_their_definitions() -> None:
    """TP 70, FP 10, FN 20, TN 900, by hand; centrelines 45 of 50 and 40 of 60 (clDice, arXiv:2003.07311, eq. 2).

    Matthews, Biochim Biophys Acta 1975;405:442; Dice, Ecology 1945;26:297.
    """
    printed = 1e-6
    scores = counts_of(pixels=(70, 10, 20, 900), centreline=(50, 45, 60, 40)).scores
    assert scores["dice"] == pytest.approx(0.823529, abs=printed)
    assert scores["sensitivity"] == pytest.approx(0.777778, abs=printed)
    assert scores["specificity"] == pytest.approx(0.989011, abs=printed)
    assert scores["matthews_correlation"] == pytest.approx(0.808870, abs=printed)
    assert scores["centreline_dice"] == pytest.approx(0.765957, abs=printed)
    pooled = (counts_of(pixels=(30, 10, 0, 500)) + counts_of(pixels=(40, 0, 20, 400))).scores
    assert pooled["matthews_correlation"] == pytest.approx(0.808870, abs=printed)  # counts add up, scores do not
    assert np.isnan(counts_of().scores["dice"])


def test_masks_of_bars_agree_by_their_pixels_and_centrelines() -> None:
    """A drawn bar of 9 x 100 px, measured 5 px high, half as long and once more elsewhere: counts are plain sums."""
    drawn, measured, fov = (np.zeros((60, 140), bool) for _ in range(3))
    fov[:, :130] = True
    drawn[16:25, 20:120] = True
    measured[18:23, 20:70] = measured[45:50, 20:70] = True
    measured[:, 132:] = True  # outside the field of view: must not count
    x = np.arange(20.0, 70.0)
    points = np.tile(x, 2), np.repeat([20.0, 47.0], 50), np.ones(100)
    held = agreement(measured, drawn, fov, points)
    assert (held.n_both, held.n_measured_only, held.n_drawn_only) == (250, 250, 650)
    assert held.n_neither == 60 * 130 - 1150
    scores = held.scores
    assert scores["length_precision"] == pytest.approx(0.5)
    assert scores["centreline_precision"] == pytest.approx(0.5)
    ends_px = 9 + 0.75 * 5  # thinning shortens both ends by half the height; the reach is 0.75 of the radius
    assert scores["length_recall"] == pytest.approx(50 / 100, abs=ends_px / 91)
    assert scores["centreline_sensitivity"] == pytest.approx(50 / 100, abs=ends_px / 91)
    same = agreement(drawn, drawn, fov, (np.arange(20.0, 120.0), np.full(100, 20.0), np.ones(100))).scores
    assert min(same.values()) == max(same.values()) == 1.0
