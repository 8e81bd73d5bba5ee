"""The truth beside the phantoms, held against closed forms and published tables: an error here would judge all else."""

import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.spatial import cKDTree

from vasohm.results.schema import column_names
from vasohm.study.appraise import NEEDED, NEEDED_OF_TRUTH
from vasohm_synthetic.blood import Blood, viscosity
from vasohm_synthetic.clearance import Field
from vasohm_synthetic.errors import RecipeError
from vasohm_synthetic.fundus import FundusShape, fundus_scene
from vasohm_synthetic.hydraulics import solve
from vasohm_synthetic.make import make_phantoms
from vasohm_synthetic.mesh import MeshShape, mesh_scene
from vasohm_synthetic.recipe import parse_recipe, read_recipe
from vasohm_synthetic.scene import Circle
from vasohm_synthetic.tone import Tone, retone
from vasohm_synthetic.trees import Root, TreeShape, branching_angles, grow_trees
from vasohm_synthetic.truth import truth_tables
from vasohm_synthetic.tubes import Tube, tube_scene

CONFIGS = Path(__file__).parents[2] / "configs"
ROUNDING = 1e-9
WATER = Blood(law="constant", viscosity_mpa_s=3.0)


def one_tube(tube, shape=(400, 400), *, pixel_size_um=1.0, blood=WATER):
    return truth_tables(tube_scene([tube], shape), pixel_size_um, blood)


@pytest.fixture(scope="module")
def tree():
    shape = TreeShape(root_radius_px=9.0, exponent_sd=0.0, angle_sd_deg=0.0, variation_sd=0.0)
    root = Root(-0.5, 150.0, 0.0, "arteriole", 0, crop_px=20.0)
    return grow_trees([root], shape, Field((300, 300), None, 4.0), np.random.default_rng(4))


@pytest.fixture(scope="module")
def fundus():
    trees = TreeShape(root_radius_px=3.5, min_radius_px=1.3, length_ratio=10.0, gap_px=3.0)
    return fundus_scene(FundusShape(disc_radius_px=36.0, tree=trees), (400, 400), np.random.default_rng(0))


def assert_columns(name, table):
    columns = tuple(table.columns)
    assert columns == tuple(column for column in column_names(name) if column in columns), name
    assert {*NEEDED[name], *NEEDED_OF_TRUTH.get(name, ())} <= set(columns), name


def test_columns_are_those_of_the_measured_tables(tree):
    """Truth and measurement are compared column by column; a name that only one side knew would never be compared.

    What is derived from them alone (shear rates, numbers of flow) need not be there.
    """
    for name, table in truth_tables(tree, 1.0, WATER).items():
        assert_columns(name, table)


def test_uniform_tube_has_poiseuilles_resistance():
    """R = 8 mu L / (pi r^4): 3 mPa s, 250 um, 2.5 um give 4.889240e16 Pa s/m^3 (Hagen 1839, Poiseuille 1846)."""
    segments = one_tube(Tube(150, 150, 2.5, 250, 30))["segments"].iloc[0]
    printed = 1e-6  # seven figures
    assert segments["resistance_pa_s_m3"] == pytest.approx(4.889240e16, rel=printed)
    assert segments["length_um"] == pytest.approx(250.0, rel=ROUNDING)
    assert segments["tortuosity"] == pytest.approx(1.0, rel=ROUNDING)
    assert segments["flow_nl_min"] == pytest.approx(133.322387415 / 4.889240e16 * 6e13, rel=printed)
    shear = 133.322387415 * 2.5 / (2 * 250)  # pressure drop times r over 2 L
    assert segments["wall_shear_pa"] == pytest.approx(shear, rel=ROUNDING)


@pytest.mark.parametrize(("end", "ratio"), [(9.0, 1.00928758), (8.0, 1.04224219), (5.0, 1.4765625), (2.0, 6.696)])
def test_taper_has_the_integral_of_r_to_the_minus_four(end, ratio):
    """A taper from 10: (r1^2 + r1 r2 + r2^2) / (3 r1^3 r2^3) over the mean radius's r^-4 (closed form)."""
    pixel = 0.5
    row = one_tube(Tube(200, 200, 10.0, 300, 12, radius_end_px=end), pixel_size_um=pixel)["segments"].iloc[0]
    of_mean = 8 * 3e-3 * 150e-6 / (np.pi * (0.5 * (10 + end) * pixel * 1e-6) ** 4)
    steps = 2e-5  # trapezoids over quarter pixels: h^2 / 12 times the change of slope of r^-4, largest for 10 to 2
    assert row["resistance_pa_s_m3"] / of_mean == pytest.approx(ratio, rel=steps)
    assert row["radius_hydraulic_um"] == pytest.approx(0.5 * (10 + end) * pixel * ratio**-0.25, rel=steps)
    assert row["radius_sd_um"] == pytest.approx((10 - end) * pixel / np.sqrt(12), rel=1e-5)


@pytest.mark.parametrize(
    ("diameter_um", "at_0", "at_30", "at_45", "at_60"),
    [
        (4, 1.9025, 12.4314, 17.6965, 22.9622),
        (8, 1.3443, 4.9204, 7.3073, 10.4212),
        (10, 1.2625, 3.6550, 5.8724, 9.8259),
        (20, 1.1198, 2.2221, 3.2311, 5.0083),
        (50, 1.0455, 1.7089, 2.2816, 3.2349),
        (200, 1.0111, 2.0065, 2.8598, 4.2709),
    ],
)
def test_blood_follows_the_law_of_living_vessels(diameter_um, at_0, at_30, at_45, at_60):
    """Values of the formula of Pries et al., Circ Res 1994;75:904-915, computed by hand from its constants."""
    printed = 6e-5  # four decimals
    for hematocrit, expected in ((0.0, at_0), (0.3, at_30), (0.45, at_45), (0.6, at_60)):
        blood = Blood(hematocrit=hematocrit, plasma_viscosity_mpa_s=1.0)
        assert viscosity(blood, np.array([diameter_um / 2]))[0] == pytest.approx(expected, abs=printed)


def test_blood_is_smooth_where_the_hematocrit_factor_is_zero_over_zero():
    """At 8.0518 um the factor's two powers both vanish; the limit is ln(1-H) / ln(0.55)."""
    near = viscosity(Blood(hematocrit=0.3), 0.5 * np.linspace(8.0517, 8.0519, 201))
    assert np.ptp(np.diff(near)) < 1e-8  # a straight line at this scale, no spike


def test_hydraulic_radius_is_that_of_the_uniform_tube_with_equal_resistance():
    """With mu(r) the radius is not the fourth root alone: the uniform tube's own viscosity counts."""
    blood = Blood()
    row = one_tube(Tube(200, 200, 12.0, 300, radius_end_px=4.0), pixel_size_um=0.5, blood=blood)["segments"].iloc[0]
    r = np.array([row["radius_hydraulic_um"]])
    uniform = 8 * viscosity(blood, r)[0] * 1e-3 * 150e-6 / (np.pi * (r[0] * 1e-6) ** 4)
    assert row["resistance_pa_s_m3"] == pytest.approx(uniform, rel=ROUNDING)
    assert row["viscosity_mpa_s"] == pytest.approx(viscosity(blood, r)[0], rel=ROUNDING)


def test_bridge_of_resistors():
    """Wheatstone's bridge a-c 1, a-d 2, c-b 3, d-b 4, c-d 5: 170/71, by exact elimination of Kirchhoff's laws."""
    a, b, c, d = 0, 1, 2, 3
    ends = np.array([(a, c), (a, d), (c, b), (d, b), (c, d)], np.int64)
    role = np.array([1, -1, 0, 0], np.int64)
    flow = solve((ends[:, 0], ends[:, 1]), np.array([1.0, 2, 3, 4, 5]), role, 1.0)
    assert flow.resistance_pa_s_m3[0] == pytest.approx(170 / 71, rel=ROUNDING)
    shares = [0.16039768, 0.12079536, 0.43844242, 0.27870754, 0.00165700]
    np.testing.assert_allclose(flow.share, shares, atol=5e-9)


def tree_resistance(segments, node):
    """Series and parallel by recursion from a node downstream."""
    children = segments[segments["node_a"] == node]
    if children.empty:
        return 0.0
    branches = [row.resistance_pa_s_m3 + tree_resistance(segments, row.node_b) for row in children.itertuples()]
    return 1.0 / sum(1.0 / branch for branch in branches)


def test_network_of_a_tree_is_series_and_parallel(tree):
    """The solver's answer against the recursion that a tree allows; shares sum to one, no flow is lost."""
    tables = truth_tables(tree, 1.5, Blood())
    segments, network = tables["segments"], tables["networks"].iloc[0]
    inlet = tables["nodes"].query("role == 'inlet'")
    assert len(inlet) == network["n_inlets"] == 1
    assert inlet.iloc[0]["kind"] == "rim"
    expected = tree_resistance(segments, inlet.iloc[0]["node_id"])
    assert network["resistance_pa_s_m3"] == pytest.approx(expected, rel=ROUNDING)
    assert segments["resistance_share"].sum() == pytest.approx(1.0, rel=ROUNDING)
    assert (segments["flow_nl_min"] > 0).all()
    for node in tables["nodes"].query("kind == 'branching'")["node_id"]:
        into = segments.loc[segments["node_b"] == node, "flow_nl_min"].sum()
        out = segments.loc[segments["node_a"] == node, "flow_nl_min"].sum()
        assert into == pytest.approx(out, rel=1e-8)
    assert network["n_segments"] == 2 * network["n_branchings"] + 1
    assert network["loops"] == 0


def test_tree_obeys_murray(tree):
    """r0^3 = r1^3 + r2^3 at every branching (Murray, Proc Natl Acad Sci USA 1926;12:207)."""
    branchings = 0
    for node in range(len(tree.node_x_px)):
        (into,) = [v for v in tree.vessels if v.node_b == node] or [None]
        out = [v for v in tree.vessels if v.node_a == node]
        if into is None or not out:
            continue
        cubes = sum(np.median(v.radius_px) ** 3 for v in out)
        assert cubes == pytest.approx(np.median(into.radius_px) ** 3, rel=ROUNDING)
        branchings += 1
    assert branchings > 8


@pytest.mark.parametrize(
    ("ratio", "first", "second"), [(1, 37.4673, 37.4673), (0.8, 28.0227, 47.2309), (0.5, 13.0447, 64.5343)]
)
def test_branching_angles_are_those_of_least_volume(ratio, first, second):
    """Murray, J Gen Physiol 1926;9:835, with the exponent 3."""
    child = (1 + ratio**3) ** (-1 / 3)
    angles = np.rad2deg(branching_angles(1.0, child, ratio * child))
    np.testing.assert_allclose(angles, [first, second], atol=6e-5)  # four decimals


def test_children_start_where_they_leave_the_parents_lumen(tree):
    """The stub inside the parent carries no resistance: its length must not count."""
    tables = truth_tables(tree, 1.0, WATER)
    segments, points = tables["segments"], tables["points"]
    by_node = {row.node_b: row.segment_id for row in segments.itertuples()}
    step = 0.01  # of the axis between two of its points
    for child in segments.itertuples():
        if child.node_a not in by_node:
            continue
        parent = points[points["segment_id"] == by_node[child.node_a]]
        own = points[points["segment_id"] == child.segment_id]
        node = tables["nodes"].set_index("node_id").loc[child.node_a]
        gap = np.hypot(parent["x_px"] - own["x_px"].iloc[0], parent["y_px"] - own["y_px"].iloc[0])
        assert gap.min() >= parent["radius_um"].iloc[int(np.argmin(gap))] - step
        stub = np.hypot(node["x_px"] - own["x_px"].iloc[0], node["y_px"] - own["y_px"].iloc[0])
        assert stub <= 3 * parent["radius_um"].iloc[-1]
        assert (node["x_px"], node["y_px"]) == (parent["x_px"].iloc[-1], parent["y_px"].iloc[-1])


def lumen_gaps(vessels):
    """Smallest distance between the lumens of each two vessels without a common node."""
    for i, first in enumerate(vessels):
        look_up = cKDTree(np.column_stack((first.x_px, first.y_px)))
        for second in vessels[i + 1 :]:
            if {first.node_a, first.node_b} & {second.node_a, second.node_b}:
                continue
            distance, at = look_up.query(np.column_stack((second.x_px, second.y_px)))
            yield first, second, float(np.min(distance - first.radius_px[at] - second.radius_px))


def test_vessels_of_one_tree_do_not_touch(tree):
    """Lumens that ran into each other would be a loop that the truth does not know."""
    assert min(gap for _, _, gap in lumen_gaps(tree.vessels)) > 2.0


def test_fundus_trees_cross_squarely_and_only_arterioles_with_venules(fundus):
    """Every overlap in the picture must be in the list of crossings, and nothing else."""
    crossings = truth_tables(fundus, 7.0, Blood())["crossings"]
    overlaps = 0
    for first, second, gap in lumen_gaps(fundus.vessels):
        if gap > 0:
            continue
        assert {first.vessel_class, second.vessel_class} == {"arteriole", "venule"}
        overlaps += 1
    assert len(crossings) == overlaps > 2
    for row in crossings.itertuples():
        near = [v for v in fundus.vessels if np.hypot(v.x_px - row.x_px, v.y_px - row.y_px).min() < 0.26]
        assert len(near) == 2
        heads = []
        for vessel in near:
            at = int(np.argmin(np.hypot(vessel.x_px - row.x_px, vessel.y_px - row.y_px)))
            heads.append(np.arctan2(np.gradient(vessel.y_px)[at], np.gradient(vessel.x_px)[at]))
        between = np.rad2deg(np.arccos(abs(np.cos(heads[0] - heads[1]))))
        assert between > 30
    assert (crossings["segment_over"] < crossings["segment_under"]).all()


def test_venules_drain_towards_the_disc(fundus):
    """A venular tree has many inlets and one outlet; an arteriolar one the other way round."""
    networks = truth_tables(fundus, 7.0, Blood())["networks"].set_index("vessel_class")
    assert (networks.loc["venule", "n_outlets"] == 1).all()
    assert (networks.loc["arteriole", "n_inlets"] == 1).all()
    assert (networks["resistance_pa_s_m3"] > 0).all()


def test_plain_crossing_lies_where_two_lines_meet():
    """Through (100, 80): one level, one at 60 degrees that starts elsewhere."""
    scene = tube_scene([Tube(90, 80, 4, 180), Tube(110, 80 + 10 * np.sqrt(3), 3, 150, 60)], (200, 200))
    (crossing,) = truth_tables(scene, 1.0, WATER)["crossings"].itertuples()
    assert (crossing.x_px, crossing.y_px) == pytest.approx((100.0, 80.0), abs=1e-9)
    assert (crossing.segment_over, crossing.segment_under) == (1, 2)


def test_field_of_view_cuts_vessels_at_its_edge():
    """Length and resistance hold only what is seen; the ends are `rim`, the inlet upstream."""
    scene = replace(tube_scene([Tube(100, 100, 3, 400, 0)], (201, 201)), fov=Circle(100, 100, 60))
    tables = truth_tables(scene, 2.0, WATER)
    nodes, segment = tables["nodes"], tables["segments"].iloc[0]
    assert nodes["kind"].tolist() == ["rim", "rim"]
    assert nodes["role"].tolist() == ["inlet", "outlet"]
    np.testing.assert_allclose(nodes["x_px"], [40.0, 160.0], atol=1e-6)
    assert segment["length_um"] == pytest.approx(240.0, rel=1e-8)
    assert segment["flags"] == "rim"
    whole = truth_tables(tube_scene([Tube(100, 100, 3, 400, 0)], (201, 201)), 2.0, WATER)["segments"].iloc[0]
    assert whole["length_um"] == pytest.approx(2 * 201, rel=1e-8)  # from the first pixel's edge to the last one's


def test_ring_has_no_resistance_and_no_terminals():
    """A closed ring: one node, the circumference, empty cells where nothing applies."""
    tables = one_tube(Tube(60, 60, 3, shape="ring", bend_radius_px=40), (120, 120))
    assert tables["nodes"]["kind"].tolist() == ["loop"]
    segment, network = tables["segments"].iloc[0], tables["networks"].iloc[0]
    steps = 1e-5  # a polygon of quarter pixels
    assert segment["length_um"] == pytest.approx(2 * np.pi * 40, rel=steps)
    assert network["loops"] == 1
    assert network["terminals"] == "none"
    assert np.isnan([network["resistance_pa_s_m3"], segment["flow_nl_min"], segment["tortuosity"]]).all()


def test_mesh_has_loops_one_inlet_and_one_outlet():
    """A mesh that were a tree would not test what loops do."""
    tables = truth_tables(mesh_scene(MeshShape(), (300, 340), np.random.default_rng(6)), 1.0, Blood())
    (network,) = tables["networks"].itertuples()
    assert network.loops > 4
    assert (network.n_inlets, network.n_outlets) == (1, 1)
    assert tables["segments"]["resistance_share"].sum() == pytest.approx(1.0, rel=1e-8)
    inner = tables["nodes"].query("kind == 'branching'")
    assert (inner["degree"] == 3).all()
    assert network.loops == network.n_segments - len(tables["nodes"]) + 1


def test_tone_changes_radii_and_nothing_else(tree):
    """The same bed dilated by a tenth: places and lengths of axes stay, a constant viscosity gives R / 1.1^4."""
    before = one_tube(Tube(150, 150, 4, 200, 30), blood=WATER)
    scene = tube_scene([Tube(150, 150, 4, 200, 30)], (400, 400))
    after = truth_tables(retone(scene, [Tone(1.1)], 1.0), 1.0, WATER)
    ratio = after["networks"]["resistance_pa_s_m3"][0] / before["networks"]["resistance_pa_s_m3"][0]
    assert ratio == pytest.approx(1.1**-4, rel=ROUNDING)
    small = retone(tree, [Tone(1.2, vessel_class="arteriole", radius_um_below=8.0)], 2.0)
    for old, new in zip(tree.vessels, small.vessels, strict=True):
        factor = 1.2 if 2.0 * old.radius_px.mean() < 8.0 else 1.0
        np.testing.assert_allclose(new.radius_px, factor * old.radius_px, rtol=ROUNDING)
        np.testing.assert_array_equal(new.x_px, old.x_px)
    assert retone(tree, [Tone(1.2, vessel_class="venule")], 2.0).vessels == tree.vessels


SMALL = {
    "phantom": {"seed": 3, "pixel_size_um": 2.0, "pixel_size_se_um": 0.1, "radius_um": [2, 20]},
    "optics": {"camera": {"noise_sd": 0.01}},
    "scene": {"kind": "tubes", "width_px": 64, "height_px": 48, "tube": [{"radius_px": 3, "length_px": 100}]},
    "image": [{"image_id": "a", "group": "x"}, {"image_id": "b", "bed": "a", "tone": [{"radius_factor": 1.2}]}],
}


def folder_bytes(folder):
    return {str(p.relative_to(folder)): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def test_folder_holds_all_that_measuring_needs_and_is_the_same_each_time(tmp_path):
    """Sheet, study file, terminals and truth agree with each other; another seed gives other noise."""
    assert make_phantoms(parse_recipe(SMALL), tmp_path / "one") == ("a", "b")
    make_phantoms(parse_recipe(SMALL), tmp_path / "two")
    first, second = folder_bytes(tmp_path / "one"), folder_bytes(tmp_path / "two")
    assert first == second
    make_phantoms(parse_recipe(SMALL | {"phantom": SMALL["phantom"] | {"seed": 4}}), tmp_path / "three")
    assert folder_bytes(tmp_path / "three")["a.png"] != first["a.png"]
    sheet = pd.read_csv(tmp_path / "one" / "images.csv")
    assert sheet.columns.tolist() == [
        "image_id", "file", "pixel_size_um", "pixel_size_se_um", "group", "terminals_file"
    ]  # fmt: skip
    for row in sheet.itertuples():
        assert (tmp_path / "one" / row.file).is_file()
        terminals = pd.read_csv(tmp_path / "one" / row.terminals_file)
        nodes = pd.read_csv(tmp_path / "one" / "truth" / row.image_id / "nodes.csv")
        assert terminals["x_px"].tolist() == nodes["x_px"].tolist() == [-0.5, 63.5]
    study = tomllib.loads((tmp_path / "one" / "study.toml").read_text())
    assert study["study"]["sheet"] == "images.csv"
    assert study["segment"]["radius_um"] == [2.0, 20.0]
    points = pd.read_csv(tmp_path / "one" / "truth" / "b" / "points.csv")
    np.testing.assert_allclose(points["radius_um"], 2.0 * 3 * 1.2)
    np.testing.assert_allclose(points["contrast"], 0.3 * 3 * 1.2 / 5.0)


@pytest.mark.parametrize("name", ["tubes", "tree", "mesh", "fundus", "tone", "demo"])
def test_ready_recipes_are_sound(name):
    """A recipe that ships must be read without complaint."""
    assert read_recipe(CONFIGS / f"phantom-{name}.toml").images


def test_wrong_recipe_names_every_problem_at_once(tmp_path):
    """One round of corrections must do."""
    wrong = {
        "phantom": {"seeed": 1, "pixel_size_um": 0, "preset": "x-ray"},
        "optics": {"blur_px": -1, "contrast": 7.0, "camera": {"bits": 12}, "profle": "slab"},
        "blood": {"hematocrit": 0.9},
        "scene": {"kind": "tubes", "width_px": 64, "height_px": 64, "tube": [{"radius_px": -2}, {"radius_px": 90}]},
        "image": [{"image_id": "a"}, {"image_id": "A", "optics": {"blur_px": "wide"}}, {"image_id": "con"}],
    }
    with pytest.raises(RecipeError) as told:
        parse_recipe(wrong)
    for words in (
        "phantom seeed: unknown key; did you mean 'seed'?",
        "pixel_size_um: 0 is not positive",
        "preset: 'x-ray' is none of",
        "blur_px -1 is not within 0 and 50",
        "contrast 7 of a dark vessel is an optical density",
        "bits 12 is neither 8 nor 16",
        "profle: unknown key; did you mean 'profile'?",
        "hematocrit 0.9 is not within 0 and 0.75",
        "radius_px -2 is not positive",
        "radius_px 90 does not fit",
        "'A' is there twice",
        "blur_px: must be a finite number, is 'wide'",
        "'con' is the name of a device",
    ):
        assert words in str(told.value)
    (tmp_path / "bad.toml").write_text("[phantom\n")
    with pytest.raises(RecipeError, match="is no TOML"):
        read_recipe(tmp_path / "bad.toml")
    with pytest.raises(RecipeError, match="there is no such file"):
        read_recipe(tmp_path / "none.toml")
    with pytest.raises(RecipeError, match="needs one or more"):
        parse_recipe({})


TUBES = "[scene]\nkind = 'tubes'\n[[image]]\n"


@pytest.mark.parametrize(
    ("recipe", "told"),
    [
        ("[[image]]", "image 1 scene kind: not given; take one of tubes, tree, mesh, fundus"),
        ("scene = 3\n[[image]]", "scene: must be a table, is 3"),
        ("scene = {kind = 'fundus', fundus = 3}\n[[image]]", "image 1 scene fundus: must be a table, is 3"),
        ("scene = {kind = 'tree', tree = {exponent = 0}}\n[[image]]", "scene tree: exponent 0 is not within 2 and 5"),
        ("scene = {kind = 'tree', tube = [{}]}\n[[image]]", "scene tube: has no effect on kind 'tree'"),
        (TUBES, "image 1 scene tube: there is none"),
        (TUBES + "scene.tube = [{radius_px = nan}]", "tube 1 radius_px: must be a finite number, is nan"),
        (TUBES + "scene.tube = [{x_px = 5000}]", "x_px 5000, y_px 255.5 lies wholly outside a picture of 512 x 512"),
        (
            TUBES + "scene.tube = [{length_px = 30, narrowing = 0.4, narrowing_px = 90}]",
            "tube 1: narrowing_px 90 is longer than the tube (30 px)",
        ),
        (
            TUBES + "scene.tube = [{shape = 'arc', bend_radius_px = 20, length_px = 900}]",
            "length_px 900 closes the arc of bend_radius_px 20",
        ),
        (
            TUBES + "scene.tube = [{shape = 'sine', amplitude_px = 50, period_px = 9}]",
            "amplitude_px 50 and period_px 9 bend the tube within its own radius",
        ),
        (TUBES + "scene.tube = [{}]\noptics.blur_px = 1e5", "image 1 optics: blur_px 100000 is not within 0 and 50"),
        (
            "[scene]\nkind = 'tubes'\ntube = [{}]\n[[image]]\n[[image]]\noptics = {polarity = 'bright'}",
            "image 2 optics: polarity 'bright' is not that of image 1",
        ),
        (
            TUBES + "scene.tube = [{}]\ntone = [{radius_um_above = 9, radius_um_below = 3}]",
            "tone: radius_um_above 9.0 is not less than radius_um_below 3.0",
        ),
        (
            "scene = {kind = 'fundus', width_px = 40, height_px = 40}\n[[image]]",
            "scene fundus: disc_radius_px 50 is too large for a field of view of 19 px",
        ),
    ],
)
def test_impossible_recipe_is_refused_by_file_place_and_value(tmp_path, recipe, told):
    """A phantom drawn from an impossible recipe would be wrong truth, or fill the memory."""
    (tmp_path / "r.toml").write_text(recipe + "\n", encoding="utf-8")
    with pytest.raises(RecipeError) as refused:
        read_recipe(tmp_path / "r.toml")
    assert told in str(refused.value)
    assert all(problem.startswith(f"{tmp_path / 'r.toml'}: ") for problem in refused.value.problems)
    assert "\n" not in refused.value.problems[0]


@pytest.mark.parametrize(
    ("image", "told"),
    [
        ({"scene": {"kind": "mesh", "width_px": 40, "height_px": 40}}, "40 x 40 px holds no mesh of it"),
        ({"scene": {"kind": "tree", "entry": [{}, {}]}}, "trunk 2 of 2, from x -0, y 256 px, finds no room"),
        ({**SMALL["image"][1], "tone": [{"vessel_class": "venule"}]}, "tone 1: changes no vessel"),
    ],
)
def test_scene_that_cannot_be_made_is_told_by_image_before_anything_is_written(tmp_path, image, told):
    """A folder with half of its images would pass for the whole."""
    scene = {} if "scene" in image else {"scene": SMALL["scene"]}
    recipe = parse_recipe({**scene, "image": [{"image_id": "odd", **image}]})
    with pytest.raises(RecipeError, match=r"image '\w+'.*" + told):
        make_phantoms(recipe, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_study_of_somebody_else_is_not_written_over(tmp_path):
    """`--out .` in a laboratory's folder would replace its study file by that of the phantoms."""
    (tmp_path / "study.toml").write_text("mine", encoding="utf-8")
    with pytest.raises(RecipeError, match=r"holds study\.toml that no phantoms belong to"):
        make_phantoms(parse_recipe(SMALL), tmp_path)
    assert (tmp_path / "study.toml").read_text(encoding="utf-8") == "mine"
    with pytest.raises(RecipeError, match="is a file"):
        make_phantoms(parse_recipe(SMALL), tmp_path / "study.toml")


def test_picture_without_vessels_has_empty_tables():
    """Nothing to find is a case of its own, with all columns and no rows."""
    for name, table in truth_tables(tube_scene([], (32, 32)), 1.0, WATER).items():
        assert table.empty
        assert_columns(name, table)
