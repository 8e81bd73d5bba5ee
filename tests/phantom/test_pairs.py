"""Two states of one bed: images laid on each other, and ratios on what both show, against exact truth."""

import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from scipy.spatial import cKDTree

from vasohm.cohorts.common_networks import common_networks, network_rows
from vasohm.cohorts.common_part import common_part, segment_rows
from vasohm.cohorts.pairs import compare_states, pair_images
from vasohm.cohorts.registration import Registration, Similarity, register
from vasohm.cohorts.states import Setup, State
from vasohm.cohorts.tone import group_tone
from vasohm.flow.rheology import BloodSettings, make_blood
from vasohm_synthetic.make import make_phantoms
from vasohm_synthetic.recipe import read_recipe

VISCOSITY_MPA_S = 3.0
SETUP = Setup(make_blood(BloodSettings("constant", 0.45, 0.0, 1.2, VISCOSITY_MPA_S, {})), 0.0, 0.0)
SIDE_PX = 300
MIDDLE_PX = 0.5 * (SIDE_PX - 1)
# Point by point the same lines: what is left is that of a Gauss-Newton iteration that has ended, some 1e-9 of a step
# of 1 px, and rounding of coordinates of 300 px.
EXACT_PX = 1e-6
ROUNDING = 1e-9  # of ratios of sums over a few hundred points, the angle of a registration included

Line = tuple[np.ndarray, np.ndarray]


def winding(seed: int, n: int = 14) -> list[Line]:
    """Draw vessels that cross a picture every which way, points a pixel apart."""
    rng = np.random.default_rng(seed)
    lines = []
    for _ in range(n):
        t = np.arange(-120.0, 120.0)
        angle, wave, phase = rng.uniform(0, np.pi), rng.uniform(60, 120), rng.uniform(0, 2 * np.pi)
        off = 12.0 * np.sin(2 * np.pi * t / wave + phase)
        x, y = rng.uniform(60, SIDE_PX - 60, 2)
        x = x + np.cos(angle) * t - np.sin(angle) * off
        y = y + np.sin(angle) * t + np.cos(angle) * off
        inside = (x > 0) & (x < SIDE_PX - 1) & (y > 0) & (y < SIDE_PX - 1)
        lines.append((x[inside], y[inside]))
    return lines


def state(
    lines: list[Line],
    radius_um: list[float],
    *,
    name: str = "a",
    pixel_um: float = 2.0,
    ends: list[tuple[int, int]] | None = None,
    roles: tuple[str, ...] | None = None,
    classes: list[str] | None = None,
) -> State:
    """Tables of straight or bent uniform tubes, with the closed form of their resistance (Poiseuille)."""
    ends = ends or [(2 * k + 1, 2 * k + 2) for k in range(len(lines))]
    roles = roles or ("inlet", "outlet") * len(lines)
    points, segments = [], []
    node_network = {}
    for k, ((x, y), radius, (node_a, node_b)) in enumerate(zip(lines, radius_um, ends, strict=True), 1):
        s_um = pixel_um * np.concatenate(([0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))))
        network = min(node_network.get(node_a, k), node_network.get(node_b, k))
        node_network |= {node_a: network, node_b: network}
        at = {"segment_id": k, "point": np.arange(1, len(x) + 1), "s_um": s_um, "x_px": x, "y_px": y}
        points.append(pd.DataFrame(at | {"radius_um": radius}))
        segments.append(
            {
                "segment_id": k,
                "network_id": network,
                "node_a": node_a,
                "node_b": node_b,
                "vessel_class": classes[k - 1] if classes else "",
                "length_um": s_um[-1],
                "length_se_um": 0.01 * s_um[-1],
                "radius_mean_um": radius,
                "radius_hydraulic_um": radius,
                "hematocrit": 0.45,
                "resistance_pa_s_m3": 8e15 * VISCOSITY_MPA_S * s_um[-1] / (np.pi * radius**4),
                "ln_resistance_random_se": 0.0,
                "ln_resistance_shared_se": 0.03,  # pixel size alone: R ~ length / radius^4 ~ pixel size^-3
                "flow_nl_min": 1.0,
                "flags": "",
            }
        )
    table = pd.DataFrame(segments)
    ids = sorted({node for pair in ends for node in pair})
    nodes = pd.DataFrame({"node_id": ids, "network_id": [node_network[one] for one in ids], "role": list(roles)})
    networks = table.groupby("network_id", as_index=False)["length_um"].sum().assign(vessel_class="", flags="")
    image = {"pixel_size_um": pixel_um, "pixel_size_se_um": 0.01 * pixel_um, "profile": "slab"}
    tables = {"segments": table, "points": pd.concat(points), "nodes": nodes, "networks": networks}
    return State(name, image, tables, np.ones((SIDE_PX, SIDE_PX), dtype=bool))


def seen_through(lines: list[Line], b_to_a: Similarity) -> list[Line]:
    back = b_to_a.inverse()
    return [back.apply(x, y) for x, y in lines]


def about_middle(turn_deg: float, scale: float, shift: tuple[float, float]) -> Similarity:
    c, s = scale * np.cos(np.deg2rad(turn_deg)), scale * np.sin(np.deg2rad(turn_deg))
    x, y = MIDDLE_PX * (1 - c + s) + shift[0], MIDDLE_PX * (1 - s - c) + shift[1]
    return Similarity(float(c), float(s), float(x), float(y))


def furthest_px(one: Similarity, other: Similarity) -> float:
    x, y = np.array([0.0, SIDE_PX, 0.0, SIDE_PX]), np.array([0.0, 0.0, SIDE_PX, SIDE_PX])
    (x1, y1), (x2, y2) = one.apply(x, y), other.apply(x, y)
    return float(np.hypot(x1 - x2, y1 - y2).max())


def laid(a: State, b: State) -> Registration:
    found = register(a.picture, b.picture)
    assert found.reason == ""
    return found


@pytest.mark.parametrize(
    ("turn_deg", "scale", "shift"),
    [(0.0, 1.0, (0.0, 0.0)), (6.0, 1.04, (25.0, -17.0)), (-13.0, 0.93, (-10.0, 40.0)), (3.0, 1.0, (70.0, 0.0))],
)
def test_a_similarity_transform_is_recovered_exactly(turn_deg, scale, shift):
    """Wrong if the search missed the place, or the refinement had a bias: noise-free lines leave no room for either."""
    lines, true = winding(1), about_middle(turn_deg, scale, shift)
    a, b = state(lines, [6.0] * len(lines)), state(seen_through(lines, true), [6.0] * len(lines))
    found = laid(a, b)
    assert furthest_px(found.b_to_a, true) < EXACT_PX
    assert found.scale == pytest.approx(scale, abs=EXACT_PX)
    assert found.rms_px < EXACT_PX
    assert furthest_px(about_middle(turn_deg + 1e-4, scale, shift), true) > EXACT_PX  # teeth


def test_images_with_different_pixel_sizes_meet_in_micrometres():
    """Wrong if scale were sought in pixels: 1.5 times as large is beyond the limits, and no change of radius at all."""
    lines = winding(2)
    true = about_middle(2.0, 1.5, (0.0, 0.0))
    a = state(lines, [6.0] * len(lines))
    b = state(seen_through(lines, true), [6.0] * len(lines), pixel_um=3.0)
    found = laid(a, b)
    assert found.scale == pytest.approx(1.0, abs=EXACT_PX)
    rows = segment_rows(a, b, common_part(a, b, found, SETUP))
    assert rows.radius_ratio.to_numpy() == pytest.approx(1.0, abs=ROUNDING)


HONEYCOMB = [
    (cx + np.linspace(0, 20 * dx, 21), cy + np.linspace(0, 20 * dy, 21))
    for k in range(9)
    for j in range(6)
    for cx, cy in [(20 * np.sqrt(3) * (k + 0.5 * (j % 2)), 30 * (j + 1) + 40.0)]
    for dx, dy in [(0.0, -1.0), (np.sqrt(0.75), 0.5), (-np.sqrt(0.75), 0.5)]
]
PARALLEL = [(np.arange(10.0, 290.0), np.full(280, y)) for y in (40.0, 110.0, 150.0, 255.0)]


@pytest.mark.parametrize(
    ("one", "other", "told"),
    [
        (winding(3), winding(4), "vessels overlap"),
        (winding(3), seen_through(winding(3), about_middle(40.0, 1.0, (0.0, 0.0))), "vessels overlap"),
        (HONEYCOMB, HONEYCOMB, "two places fit"),
        (PARALLEL, PARALLEL, "run all in one direction"),
        (winding(3), winding(4)[:0], "no vessels"),
    ],
    ids=["other bed", "turned too far", "regular mesh", "parallel vessels", "empty"],
)
def test_what_cannot_be_laid_on_each_other_is_refused(one, other, told):
    """Wrong if chance agreements passed for one bed: every ratio after that would be of different vessels."""
    a = state(one, [6.0] * len(one))
    b = a if not other else state(other, [6.0] * len(other))
    if not other:
        b = State("b", a.image, {name: table[:0] for name, table in a.tables.items()}, a.fov)
    assert told in register(a.picture, b.picture).reason


def test_uniform_dilation_divides_resistance_by_the_fourth_power():
    """Wrong if lengths, radii or networks of the two states were mixed up: R ~ r^-4 at constant viscosity."""
    factor, lines = 1.2, winding(5)
    radii = list(np.linspace(3.0, 9.0, len(lines)))
    true = about_middle(-4.0, 1.0, (12.0, 9.0))
    a, b = state(lines, radii), state(seen_through(lines, true), [factor * r for r in radii], name="b")
    common = common_part(a, b, laid(a, b), SETUP)
    rows = segment_rows(a, b, common)
    assert rows.common_length_um.sum() >= 0.98 * a.column("segments", "length_um").sum()  # without ends and crossings
    assert rows.radius_ratio.to_numpy() == pytest.approx(factor, rel=ROUNDING)
    assert rows.resistance_ratio.to_numpy() == pytest.approx(factor**-4, rel=1e-6)
    # one pixel size: what is wrong with it is wrong in both, and 1 % of it alone would have been 3 % of each R
    assert (rows.ln_ratio_shared_se < 1e-4).all()
    networks = network_rows(a, b, common_networks(a, b, common))
    assert len(networks) == len(lines)
    assert networks.resistance_ratio.to_numpy() == pytest.approx(factor**-4, rel=1e-6)


def test_disagreeing_pixel_sizes_count_as_uncertain():
    """Wrong if a pixel size 4 % off between the two images left the ratio as sure as before: it moves R by 12 %."""
    lines = winding(6)
    a, b = state(lines, [6.0] * len(lines)), state(lines, [6.0 * 1.04] * len(lines), pixel_um=2.08)
    found = laid(a, b)
    assert found.scale == pytest.approx(1 / 1.04, rel=1e-6)
    rows = segment_rows(a, b, common_part(a, b, found, SETUP))
    assert rows.ln_ratio_shared_se.to_numpy() == pytest.approx(3 * np.log(1.04), rel=1e-3)
    sheet = pd.DataFrame({"image_id": ["a", "b"], "status": "measured", "subject": "s", "condition": ["x", "y"]})
    tables = compare_states(pair_images(sheet, "condition", "x"), iter([(a, b)]), SETUP)
    assert tables["image_pairs"]["flags"].iloc[0] == "scales_disagree"


def test_networks_are_solved_on_what_both_images_show():
    """Wrong if a vessel that one image misses stayed in the network of the other: its loss would pass for a change."""
    k = np.arange(0.0, 91.0)
    wave = 6.0 * np.sin(np.pi * k / 30.0)  # of straight vessels scale and shift could not be told apart
    trunk = (20.0 + k, 150.0 + wave)
    upper, lower = (110.0 + k, 150.0 - k + wave), (110.0 + k, 150.0 + 0.8 * k - wave)
    twig = (upper[0][-1] + k[:61], upper[1][-1] + 0.5 * k[:61] + wave[:61])
    ends, roles = [(1, 2), (2, 3), (2, 4), (3, 5)], ("inlet", "", "", "outlet", "outlet")
    lines, radii = [trunk, upper, lower, twig], [8.0, 5.0, 6.0, 4.0]
    a = state(lines, radii, ends=ends, roles=roles)
    wider = [1.1 * radius for radius in radii]
    for left_out in (2, 3):  # a whole branch; the last piece of one, where flow then leaves before it
        kept = [n for n in range(4) if n != left_out]
        b = state([lines[n] for n in kept], [wider[n] for n in kept], name="b")
        rows = network_rows(a, b, common_networks(a, b, common_part(a, b, laid(a, b), SETUP)))
        r = a.column("segments", "resistance_pa_s_m3")
        r_trunk, r_upper, r_lower, r_twig = r
        expected = r_trunk + (r_upper + r_twig if left_out == 2 else 1 / (1 / r_upper + 1 / r_lower))
        near = 0.06  # feet at the ends of lines: 2 px of 90, twice
        assert rows.resistance_a_pa_s_m3.iloc[0] == pytest.approx(expected, rel=near)
        assert rows.resistance_ratio.iloc[0] == pytest.approx(1.1**-4, rel=1e-6)
        assert rows.n_segments.iloc[0] == 3
        assert ("common_ends" in rows["flags"].iloc[0]) == (left_out == 3)


def design(**columns: list[str]) -> pd.DataFrame:
    return pd.DataFrame({"image_id": [f"i{k}" for k in range(len(columns["subject"]))], "status": "measured"} | columns)


def test_images_are_paired_by_subject_and_eye():
    """Wrong if a left eye met a right one, or a later condition were held against a later one."""
    sheet = design(
        subject=["s"] * 5 + ["t"],
        eye=["L", "R", "R", "L", "L", "L"],
        condition=["rest", "rest", "drug", "drug", "wash", "drug"],
    )
    pairs = pair_images(sheet, "condition", "rest")
    assert [(p.image_id_a, p.image_id_b) for p in pairs] == [("i0", "i3"), ("i0", "i4"), ("i1", "i2"), ("", "i5")]
    assert "no image with condition 'rest'" in pairs[-1].reason
    times = pair_images(design(subject=["s"] * 3, time=["0", "10", "20"]), "time", "0")
    assert [(p.image_id_a, p.condition_b) for p in times] == [("i0", "10"), ("i0", "20")]


def test_pairs_that_cannot_be_told_say_why():
    """Wrong if two eyes without a column eye were paired at random, or a failed image were looked for."""
    both = pair_images(design(subject=["s"] * 4, condition=["rest", "rest", "drug", "drug"]), "condition", "rest")
    assert len(both) == 2
    assert all("give the column eye" in pair.reason for pair in both)
    sheet = design(subject=["s", "s", "t", "t"], condition=["rest", "drug"] * 2)
    sheet["status"] = ["failed", "measured", "measured", "empty"]
    reasons = [pair.reason for pair in pair_images(sheet, "condition", "rest")]
    assert reasons == ["i0 could not be measured", "i3 shows no vessels"]
    tables = compare_states(pair_images(sheet, "condition", "rest"), iter(()), SETUP)
    assert list(tables["image_pairs"].status) == ["refused", "refused"]
    assert tables["pairs"].empty


def test_the_subject_is_the_unit_of_a_group():
    """Wrong if two eyes counted twice: the interval is that of a one-sample t test of subjects (scipy.stats)."""
    values = {("s", "L"): 1.10, ("s", "R"): 1.14, ("t", "L"): 1.05, ("u", "L"): 1.20}
    rows = pd.DataFrame(
        {
            "group": "", "subject": subject, "eye": eye, "condition_a": "rest", "condition_b": "drug",
            "vessel_class": "", "n_segments": 3, "common_length_um": 1.0, "radius_ratio": ratio,
            "resistance_ratio": ratio**-4,
        }
        for (subject, eye), ratio in values.items()
    )  # fmt: skip
    found = group_tone(rows).iloc[0]
    of_subjects = np.log([np.sqrt(1.10 * 1.14), 1.05, 1.20])
    test = stats.ttest_1samp(of_subjects, 0.0)
    interval = test.confidence_interval(0.95)
    assert found.n_subjects == 3
    assert found.radius_p == pytest.approx(test.pvalue, rel=1e-9)
    assert [found.radius_ratio_lo, found.radius_ratio_hi] == pytest.approx(np.exp([interval.low, interval.high]))
    assert found.resistance_ratio == pytest.approx(found.radius_ratio**-4)


RECIPE = Path(__file__).parents[1] / "data" / "paired-beds.toml"
DILATED = 1.15  # of the arterioles; venules stay
MOST_BIAS = 0.01  # of the mean of ln radius ratio, r >= 2 px at a contrast-to-noise ratio of 10
LEAST_MATCHED = 0.90
LEAST_COVERED = 0.92  # of some 150 stated 95 % intervals: 1.7 binomial standard deviations below


@pytest.mark.slow
def test_tone_of_paired_phantoms_from_a_moved_camera(tmp_path):
    """Wrong if any stage from picture to pair were off; truth is the radius factor of each class, the view exact."""
    make_phantoms(read_recipe(RECIPE), tmp_path / "made")
    study = tmp_path / "made" / "study.toml"
    study.write_text(study.read_text() + '\n[compare]\nby = "condition"\nreference = "rest"\n')
    command = [sys.executable, "-m", "vasohm"]
    subprocess.run([*command, "measure", study, "--out", tmp_path / "out", "--quiet"], check=True)
    subprocess.run([*command, "compare", study, "--results", tmp_path / "out", "--out", tmp_path / "to"], check=True)
    images = pd.read_csv(tmp_path / "to" / "image_pairs.csv", keep_default_na=False)
    assert list(images.status) == ["matched"] * 2
    assert (images.common_fraction >= LEAST_MATCHED).all()
    assert np.abs(images.scale - 1).max() < 1e-3  # the zoom stands in both pixel sizes
    rows = pd.read_csv(tmp_path / "to" / "pairs.csv")
    factors = {image_id: true_factor(tmp_path, image_id) for image_id in images.image_id_a}
    true = np.array([factors[row.image_id_a][row.segment_id_a] for row in rows.itertuples()])
    error = np.log(rows.radius_ratio / true)
    known = np.isfinite(error)
    assert known.sum() > 100
    assert abs(np.average(error[known], weights=rows.common_length_um[known])) < MOST_BIAS
    z = (error / (rows.radius_ratio_se / rows.radius_ratio))[known]
    assert np.mean(np.abs(z) < 1.96) >= LEAST_COVERED
    assert abs(np.average(np.log(rows.radius_ratio[known & (true == DILATED)]))) > MOST_BIAS  # teeth


def true_factor(folder: Path, image_id: str) -> "pd.Series[float]":
    """Radius factor of the true vessel on which nine tenths of each measured segment lie; NaN where none is."""
    points = pd.read_csv(folder / "out" / "images" / image_id / "points.csv")
    truth = folder / "made" / "truth" / image_id
    true = pd.read_csv(truth / "points.csv")
    classes = pd.read_csv(truth / "segments.csv").set_index("segment_id").vessel_class
    _, nearest = cKDTree(true[["x_px", "y_px"]]).query(points[["x_px", "y_px"]])
    is_dilated = (classes.loc[true.segment_id.iloc[nearest]] == "arteriole").to_numpy()
    share = pd.Series(is_dilated).groupby(points.segment_id).mean()
    return share.map(lambda part: DILATED if part > 0.9 else 1.0 if part < 0.1 else np.nan)
