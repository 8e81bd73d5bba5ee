"""The study file: strict, complete, and resolved to the last value. TOML is that of toml.io, version 1.0."""

import json
import pickle
import textwrap
import time
import tomllib
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import pytest

from vasohm.config.presets import PRESETS
from vasohm.config.settings import CompareSettings, OutputSettings, RunSettings
from vasohm.config.study_file import Study, ad_hoc_study, read_study, study_from_mapping
from vasohm.config.study_model import StudyModel
from vasohm.errors import RequestError
from vasohm.flow.estimated_ends import EndTargets
from vasohm.flow.monte_carlo import IntervalSettings
from vasohm.flow.rheology import law_names
from vasohm.flow.scenarios import Scenario
from vasohm.image.calibrate import ScaleSettings
from vasohm.image.eye import EyeSettings
from vasohm.image.segment import segmenter_names
from vasohm.network.classes import ClassSettings

CONFIGS = Path(__file__).parents[2] / "configs"
SHEET = "image_id,file,subject,group,age_years\na,a.tif,s1,control,61\nb,b.tif,s2,NA,58\n"
SMALLEST: Mapping[str, Any] = {"image": {"preset": "fundus"}}


def study_of(folder: Path, text: str | bytes, sheet: str = SHEET) -> Study:
    (folder / "images.csv").write_text(sheet)
    (folder / "study.toml").write_bytes(textwrap.dedent(text).encode() if isinstance(text, str) else text)
    return read_study(folder / "study.toml")


def problems(read: Callable[[], object]) -> list[str]:
    with pytest.raises(RequestError) as caught:
        read()
    return [str(problem) for problem in caught.value.problems]


def faults(**tables: Any) -> list[str]:
    return problems(lambda: study_from_mapping({**SMALLEST, **tables}, Path()))


CONTRACT = """
    [study]
    name   = "demo"
    sheet  = "images.csv"
    allow_outside = false
    [image]
    preset   = "fundus"
    channel  = "green"
    polarity = "dark"
    plane    = "max"
    gamma    = 2.2
    max_megapixels = 100
    block_megapixels = 25
    [scale]
    pixel_size_um    = 7
    pixel_size_se_um = 0.1
    scale_conflict = "sheet"
    magnification = "bennett"
    camera_factor = 0.02
    camera_factor_se = 0.0002
    reference_axial_length_mm = 23.5
    disc_diameter_um = 1800
    disc_diameter_se_um = 150
    [segment]
    method      = "hessian"
    radius_um   = [4, 80.0]
    false_alarms_per_mpx = 30
    crossing_probability = 0.6
    overlap_adds = false
    parameters = { strictness = 2 }
    [radius]
    profile     = "cylinder"
    blur_px     = 1.5
    plasma_layer_um = 1.1
    plasma_layer_se_um = 0.4
    [classes]
    method      = "none"
    probability = 0.9
    [shape]
    disc            = "none"
    zone_dd         = [0.5, 1.0]
    calibre_formula = "parr-hubbard"
    calibre_um      = [5.0, 20.0]
    [blood]
    law                    = "pries-in-vitro"
    hematocrit             = 0.4
    hematocrit_se          = 0.02
    plasma_viscosity_mpa_s = 1.3
    plasma_viscosity_se_mpa_s = 0.08
    viscosity_mpa_s        = 4.0
    hematocrit_split       = true
    split_law              = "1990"
    diameter_scaling       = "red-cell-volume"
    red_cell_volume_fl     = 55
    density_kg_m3          = 1060
    heart_rate_per_min     = 420
    parameters = { core = 1.0 }
    [network]
    terminals = "estimate"
    drive_mmhg = 2.0
    trees_by_class = false
    target_wall_shear_pa = { arteriole = 5, capillary = 3.0, venule = 1.6 }
    target_wall_shear_sd_pa = 2.0
    target_pressure_mmhg = 31
    target_pressure_sd_mmhg = 8.0
    intervals = "monte-carlo"
    draws = 400
    seed = 7
    [[scenario]]
    name = "small arterioles dilate"
    where = { radius_um_below = 10, radius_um_above = 2, vessel_class = "arteriole" }
    radius_factor = 1.10
    [[scenario]]
    name = "all narrow"
    radius_factor = 0.9
    [[scenario]]
    name = "how much wider"
    wanted_ratio = 0.8
    [compare]
    outcomes   = ["networks.resistance_pa_s_m3", "segments.radius_hydraulic_um", "length_density_per_mm"]
    by         = "group"
    reference  = "control"
    covariates = ["age_years"]
    plan_ratio = 1.20
    radius_um  = [[2, 10], [10, 40]]
    [run]
    image_timeout_s = 60
    memory_limit_mb = 4000
    [output]
    overlay = false
    colour = "share"
    print = true
"""


def test_every_key_reaches_its_setting(tmp_path: Path) -> None:
    """A key that is accepted and then dropped is worse than one that is refused."""
    study = study_of(tmp_path, CONTRACT)
    chosen = study.settings
    assert (study.name, study.path) == ("demo", tmp_path / "study.toml")
    assert [source.image_id for source in study.images] == ["a", "b"]
    assert (study.sheet, study.lines) == ("images.csv", {"a": 2, "b": 3})
    assert (chosen.preset, chosen.output) == ("fundus", OutputSettings(overlay=False, colour="share", for_print=True))
    assert chosen.classes == ClassSettings("none", 0.9)
    assert (chosen.read.plane, chosen.read.max_megapixels, chosen.read.channel) == ("max", 100.0, "green")
    assert (chosen.prepare.channel, chosen.prepare.polarity, chosen.prepare.gamma) == ("green", "dark", 2.2)
    assert chosen.prepare.radius_um == chosen.segment.radius_um == (4.0, 80.0)
    eye = EyeSettings("bennett", 0.02, 0.0002, 23.5)
    assert chosen.scale == ScaleSettings(7.0, 0.1, "sheet", eye, 1800.0, 150.0)
    assert (chosen.segment.method, chosen.segment.false_alarms_per_mpx) == ("hessian", 30.0)
    assert (chosen.segment.parameters, chosen.blood.parameters) == ({"strictness": 2.0}, {"core": 1.0})
    assert (chosen.crossings.threshold, chosen.crossings.overlap_adds) == (0.6, False)
    assert (chosen.radius.profile, chosen.radius.blur_px) == ("cylinder", 1.5)
    assert (chosen.radius.plasma_layer_um, chosen.radius.plasma_layer_se_um) == (1.1, 0.4)
    assert (chosen.blood.law, chosen.blood.hematocrit, chosen.blood.hematocrit_se) == ("pries-in-vitro", 0.4, 0.02)
    assert (chosen.blood.plasma_viscosity_mpa_s, chosen.blood.viscosity_mpa_s) == (1.3, 4.0)
    assert chosen.blood.plasma_viscosity_se_mpa_s == 0.08
    assert (chosen.blood.split_law, chosen.blood.red_cell_volume_fl) == ("1990", 55.0)
    assert (chosen.blood.density_kg_m3, chosen.blood.heart_rate_per_min) == (1060.0, 420.0)
    assert (chosen.network.terminals, chosen.network.drive_mmhg) == ("estimate", 2.0)
    assert not chosen.trees.by_class  # which the preset would set
    mean = (5 + 3 + 1.6) / 3  # of vessels without a class
    assert chosen.targets == EndTargets((mean, 5.0, 1.6, 3.0), 2.0, (31.0, 31.0, 31.0, 31.0), 8.0)
    assert chosen.intervals == IntervalSettings("monte-carlo", 400, 7)
    assert chosen.scenarios == (
        Scenario("small arterioles dilate", 1.1, 10.0, 2.0, "arteriole"),
        Scenario("all narrow", 0.9, None, None, None),
        Scenario("how much wider", None, None, None, None, 0.8),
    )
    assert study.run == RunSettings(60.0, 4000.0)
    assert study.compare == CompareSettings(
        outcomes=("networks.resistance_pa_s_m3", "segments.radius_hydraulic_um", "image.length_density_per_mm"),
        by="group",
        reference="control",
        covariates=("age_years",),
        plan_ratio=1.2,
        radius_um=((2.0, 10.0), (10.0, 40.0)),
    )


def test_the_resolved_study_names_the_source_of_every_value(tmp_path: Path) -> None:
    """Without it nobody could tell what was chosen from what a preset brought; it must go into JSON as it is."""
    study = study_of(tmp_path, CONTRACT)
    said = {key for key in study.resolved if not key.startswith("skeletonize")}
    assert {study.resolved[key]["source"] for key in said} == {"study"}
    bare = study_from_mapping(SMALLEST, tmp_path)
    assert set(bare.resolved) == set(study.resolved)
    assert bare.resolved["image.preset"] == {"value": "fundus", "source": "study"}
    assert bare.resolved["image.channel"] == {"value": "green", "source": "preset"}
    assert bare.resolved["blood.hematocrit"] == {"value": 0.45, "source": "default"}
    assert json.loads(json.dumps(study.resolved, allow_nan=False)) == study.resolved
    assert pickle.loads(pickle.dumps(study)) == study  # noqa: S301 - our own bytes; settings go to worker processes


def test_saying_the_default_changes_nothing() -> None:
    """A number written as 400 or 400.0, or left out, must not measure everything again."""
    said = {"image": {"preset": "fundus", "max_megapixels": 400}, "blood": {"hematocrit": 0.45}, "scale": {}}
    assert repr(study_from_mapping(said, Path()).settings) == repr(study_from_mapping(SMALLEST, Path()).settings)


@pytest.mark.parametrize("preset", PRESETS)
def test_ready_study_files_say_what_their_preset_brings(preset: str, tmp_path: Path) -> None:
    """A copied file must behave as the preset that it names, and stay true when the preset changes."""
    text = (CONFIGS / f"{preset}.toml").read_text()
    study = study_of(tmp_path, text)
    assert study.settings == study_from_mapping({"image": {"preset": preset}}, tmp_path).settings
    lines = [line.removeprefix("# ") if "=" in line or "[" in line else line for line in text.split("\n")]
    with_examples = tomllib.loads("\n".join(lines))
    del with_examples["study"]
    study_from_mapping(with_examples, tmp_path)


# ---- what must be refused


SECTIONS = ("study", "image", "scale", "segment", "radius", "classes", "shape", "blood", "network", "run", "output")
ALL_KEYS = [
    (section, key)
    for section in SECTIONS
    for key in StudyModel.model_fields[section].annotation.model_fields  # type: ignore[union-attr]
]
NONSENSE = [True, float("nan"), float("inf"), -1, "nonsense", [], {"a": {"b": 1}}, [True, False]]
SWITCHES = {
    ("study", "allow_outside"),
    ("output", "overlay"),
    ("output", "print"),
    ("blood", "hematocrit_split"),
    ("segment", "overlap_adds"),
    ("network", "trees_by_class"),
}
TEXTS = {("study", "name"), ("study", "sheet")}


@pytest.mark.parametrize(("table", "key"), ALL_KEYS)
@pytest.mark.parametrize(
    "value", [True, float("nan"), float("inf"), -1, "nonsense", [], {"a": {"b": 1}}, [True, False]]
)
def test_no_key_takes_nonsense(table: str, key: str, value: object) -> None:
    """`true` passes as 1 in Python, and TOML has nan and inf: each would shape a number without a word."""
    is_fine = ((table, key) in SWITCHES and value is True) or ((table, key) in TEXTS and value == "nonsense")
    said = {table: {**SMALLEST.get(table, {}), key: value}}
    if (table, key) == ("study", "sheet") and is_fine:
        assert "no such file" in faults(**said)[0]
    elif is_fine:
        study_from_mapping({**SMALLEST, **said}, Path())
    else:
        assert any(problem.startswith(f"study mapping {table}.{key}") for problem in faults(**said))


@pytest.mark.parametrize(("table", "key"), ALL_KEYS)
def test_misspelt_keys_name_the_nearest_known_one(table: str, key: str) -> None:
    """A misspelt key that is ignored leaves the default in force."""
    slip = key[:2] + key[3:] if len(key) > 3 else key + "s"
    found = faults(**{table: {**SMALLEST.get(table, {}), slip: 1}})
    assert found == [f"study mapping {table}.{slip}: unknown key; the nearest known one is {key!r}."]


FAULTY = {
    "a table": ({"imag": {}}, "imag: unknown key; the nearest known one is 'image'."),
    "a key in another table": ({"scale": {"hematocrit": 0.4}}, "it belongs in [blood]."),
    "an enum": ({"image": {"preset": "fundus", "polarity": "drak"}}, "'drak' must be one of 'dark', 'bright'. Did you"),
    "a preset": ({"image": {"preset": "fondus"}}, "Did you mean 'fundus'?"),
    "no preset": ({"image": {}}, "image.preset: is missing. Give [image] a preset: 'fundus', 'angiogram'"),
    "a channel": ({"image": {"preset": "fundus", "channel": "gren"}}, "Did you mean 'green'?"),
    "radii turned round": ({"segment": {"radius_um": [5, 4]}}, "must be two radii in um, the smaller first"),
    "decimal commas": (
        {"segment": {"radius_um": [3, 0, 40, 0]}},
        "has 4 numbers where 2 are needed. Are those decimal",
    ),
    "per cent": ({"blood": {"hematocrit": 45}}, "at most 0.75. It is a fraction, not per cent: write 0.45."),
    "a single scenario": ({"scenario": {"name": "x"}}, "Write [[scenario]], with two brackets."),
    "one radius": ({"segment": {"radius_um": [5]}}, "[5] has 1 number where 2 are needed."),
    "doubt below nothing": ({"blood": {"hematocrit_se": -0.01}}, "-0.01 must be at least 0."),
    "packed cells": ({"blood": {"hematocrit": 0.76}}, "0.76 must be at most 0.75."),
    "no viscosity": ({"blood": {"plasma_viscosity_mpa_s": 0}}, "0 must be greater than 0."),
    "a law": ({"blood": {"law": "pries-in-vivi"}}, "Did you mean 'pries-in-vivo'?"),
    "a segmenter": ({"segment": {"method": "rigde"}}, "Did you mean 'ridge'?"),
    "a split": ({"blood": {"split_law": "2004"}}, "must be one of '1990', '2005'. Did you mean '2005'?"),
    "a scaling without cells": ({"blood": {"diameter_scaling": "red-cell-volume"}}, "Give the cells' mean volume"),
    "a core without viscosity": (
        {"blood": {"law": "haynes-marginal-zone", "parameters": {"marginal_zone_um": 2.0}}},
        "blood.parameters.core_viscosity_mpa_s: is missing: law 'haynes-marginal-zone' needs it",
    ),
    "a rule of magnification": ({"scale": {"magnification": "benett"}}, "Did you mean 'bennett'?"),
    "a camera without an eye": ({"scale": {"camera_factor": 0.02}}, "gives no pixel size without an eye"),
    "a camera factor in other units": ({"scale": {"camera_factor": 1.37}}, "1.37 must be at most 1."),
    "a camera's doubt without a camera": ({"scale": {"camera_factor_se": 0.01}}, "needs camera_factor"),
    "a disc in millimetres": ({"scale": {"disc_diameter_um": 1.8}}, "1.8 must be at least 1000."),
    "a disc known worse than its size": (
        {"scale": {"disc_diameter_um": 1800, "disc_diameter_se_um": 1800}},
        "1800 is not below disc_diameter_um = 1800.",
    ),
    "a reference eye of 2 mm": ({"scale": {"reference_axial_length_mm": 2}}, "2 must be at least 15."),
    "a parameter": ({"segment": {"parameters": {"a": "b"}}}, "segment.parameters.a: 'b' must be a number."),
    "a scenario's key": (
        {"scenario": [{"name": "x", "radius_factor": 1.1, "where": {"radius_below": 3}}]},
        "scenario[1].where.radius_below: unknown key; the nearest known one is 'radius_um_below'.",
    ),
    "an empty range": (
        {"scenario": [{"name": "x", "radius_factor": 1, "where": {"radius_um_below": 3, "radius_um_above": 3}}]},
        "no radius is above 3 and below 3 um.",
    ),
    "a scenario without a question": (
        {"scenario": [{"name": "x"}]},
        "scenario[1]: give either radius_factor, or wanted_ratio",
    ),
    "a scenario with two questions": (
        {"scenario": [{"name": "x", "radius_factor": 1.1, "wanted_ratio": 0.8}]},
        "scenario[1]: give either radius_factor, or wanted_ratio",
    ),
    "a wanted ratio that is there": (
        {"scenario": [{"name": "x", "wanted_ratio": 1}]},
        "scenario[1].wanted_ratio: 1 must differ from 1",
    ),
    "estimates without a target": (
        {"network": {"terminals": "estimate", "target_pressure_mmhg": 30}},
        'network.target_wall_shear_pa: is missing: terminals = "estimate" draws',
    ),
    "a target for no class": (
        {"network": {"target_pressure_mmhg": {"arteriol": 30}}},
        "Did you mean 'arteriole'?",
    ),
    "a target that is no pressure": (
        {"network": {"target_pressure_mmhg": {"arteriole": -30}}},
        "must be a number greater than 0, or a table of them with keys among arteriole, venule, capillary.",
    ),
    "scenarios of one name": (
        {"scenario": [{"name": "x", "radius_factor": 1.1}, {"name": "x", "radius_factor": 0.9}]},
        "scenario[2].name: 'x' occurs twice.",
    ),
}


@pytest.mark.parametrize("name", FAULTY)
def test_faulty_studies_say_what_to_do(name: str) -> None:
    said, words = FAULTY[name]
    assert any(words in problem for problem in faults(**said)), faults(**said)


def test_known_laws_and_segmenters_are_listed() -> None:
    (law,) = faults(blood={"law": "water"})
    assert all(repr(name) in law for name in law_names())
    (method,) = faults(segment={"method": "by hand"})
    assert all(repr(name) in method for name in segmenter_names())


def test_study_and_sheet_are_told_together(tmp_path: Path) -> None:
    """Who mends the study file should not find the sheet's faults one run later."""
    text = '[study]\nsheet = "images.csv"\n[image]\npreset = "fundus"\ngama = 1.0\n'
    found = problems(lambda: study_of(tmp_path, text, "image_id,file\n..,a.tif\n"))
    assert [problem.split(":")[0] for problem in found] == ["study.toml image.gama", "images.csv"]


COMPARE = {"outcomes": ["networks.resistance_pa_s_m3"], "by": "group", "reference": "control"}
COMPARISONS = {
    "an outcome in two tables": (
        {"outcomes": ["resistance_pa_s_m3"]},
        "occurs in more than one table. Say networks.resistance_pa_s_m3 or segments.resistance_pa_s_m3.",
    ),
    "a misspelt outcome": ({"outcomes": ["networks.resistence_pa_s_m3"]}, "Did you mean networks.resistance_pa_s_m3?"),
    "an outcome that is text": ({"outcomes": ["segments.vessel_class"]}, "is no number that a table"),
    "no outcome": ({"outcomes": []}, "compare.outcomes"),
    "a column that is not there": ({"by": "condition"}, "compare.by: 'condition' is no such column of the image sheet"),
    "a column of files": ({"by": "file"}, "compare.by: 'file' is no such column"),
    "a covariate that is not there": ({"covariates": ["age"]}, "compare.covariates: 'age' is no such column"),
    "a reference that nobody has": (
        {"reference": "controls"},
        "'controls' is no value of group; there are NA,",
    ),
    "a covariate that is compared": ({"covariates": ["group"]}, "cannot be a covariate too"),
    "a ratio of one": ({"plan_ratio": 1.0}, "must differ from 1"),
}


@pytest.mark.parametrize("name", COMPARISONS)
def test_comparisons_are_checked_before_anything_is_measured(name: str, tmp_path: Path) -> None:
    """A week of computing must not end at a misspelt outcome."""
    said, words = COMPARISONS[name]
    (tmp_path / "images.csv").write_text(SHEET)
    tables = {**SMALLEST, "study": {"sheet": "images.csv"}, "compare": {**COMPARE, **said}}
    found = problems(lambda: study_from_mapping(tables, tmp_path))
    assert any(words in problem for problem in found), found


def test_a_mask_for_every_image_where_masks_are_the_method(tmp_path: Path) -> None:
    (tmp_path / "images.csv").write_text("image_id,file,mask_file\na,a.tif,m.png\nb,b.tif,\n")
    tables = {**SMALLEST, "study": {"sheet": "images.csv"}, "segment": {"method": "mask"}}
    (problem,) = problems(lambda: study_from_mapping(tables, tmp_path))
    assert "needs a mask_file for every image; b have none" in problem
    tables = {**SMALLEST, "study": {"sheet": "images.csv"}, "network": {"terminals": "file"}}
    assert "a, b have no terminals" in study_from_mapping(tables, tmp_path).warnings[0]


BROKEN = {
    "a word without quotes": (
        b"[image]\npreset = fundus\n",
        'study.toml:2: is no valid TOML: Invalid value (at line 2, column 10). Text needs quotes: preset = "fundus".',
    ),
    "a decimal comma": (
        b"[scale]\npixel_size_um = 1,25 # of the camera\n",
        "study.toml:2: is no valid TOML: Expected newline or end of document after a statement (at line 2, column 18).",
    ),
    "an image": (b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR", "study.toml: is an image, where a study file (.toml) is wanted."),
    "a key twice": (b"[image]\npreset = 'fundus'\npreset = 'fundus'\n", "study.toml:3: is no valid TOML: "),
    "an open string": (b"[image]\npreset = 'fundus\n", "study.toml:2: is no valid TOML: "),
    "a date that is none": (b"[image]\nx = 2020-13-01\n", "study.toml:2: is no valid TOML: "),
    "deep brackets": (b"x = " + b"[" * 20_000, "study.toml: its brackets are nested too deeply."),
    "a huge number": (b"x = " + b"9" * 5_000, "study.toml:1: is no valid TOML: "),
    "UTF-16": ("[image]\n".encode("utf-16"), "study.toml:1: looks like UTF-16"),
    "Latin-1": ("[image]\n# é\n".encode("latin-1"), "study.toml:2: is not UTF-8"),
    "binary": (b"\x89PNG\r\n\x1a\n\xff", "study.toml:1: is not UTF-8 text: it is binary"),
    "NUL": (b"[image]\n\0", "study.toml:2: is no valid TOML: "),
    "more than 1 MB": (b"#" * 1_000_001, "study.toml: has 1 MB: it is no study file"),
    "a large exponent": (
        b"[image]\npreset = 'fundus'\ngamma = 1e400\n",
        "study.toml image.gamma: inf must be",
    ),
    "no sheet": (b"[image]\npreset = 'fundus'\n", "study.toml study.sheet: is missing."),
    "a sheet elsewhere": (
        b"[study]\nsheet = '/etc/images.csv'\n[image]\npreset = 'fundus'\n",
        "study.toml study.sheet: '/etc/images.csv' must be a path relative",
    ),
    "a sheet that is not there": (
        b"[study]\nsheet = 'no.csv'\n[image]\npreset = 'fundus'\n",
        "no.csv: no such file (looked for '",
    ),
}


@pytest.mark.parametrize("name", BROKEN)
def test_broken_files_name_the_line(name: str, tmp_path: Path) -> None:
    """Odd but legal, or hostile, TOML must end as a message within two seconds, never as a traceback."""
    data, words = BROKEN[name]
    start = time.monotonic()
    found = problems(lambda: study_of(tmp_path, data))
    assert any(problem.startswith(words) for problem in found), found
    assert time.monotonic() - start < 2


def test_a_decimal_comma_is_told_for_what_it_is(tmp_path: Path) -> None:
    found = problems(lambda: study_of(tmp_path, b"[scale]\npixel_size_um = 1,25 # of the camera\n"))
    assert found[0].endswith("Is that a decimal comma? Write 1.25.")


def test_files_that_are_none(tmp_path: Path) -> None:
    assert problems(lambda: read_study(tmp_path / "no.toml")) == [
        f"no.toml: no such file (looked for '{tmp_path / 'no.toml'}')."
    ]
    assert problems(lambda: read_study(tmp_path)) == [f"{tmp_path.name}: is not a file."]
    (tmp_path / "zero.toml").symlink_to("/dev/zero")
    assert problems(lambda: read_study(tmp_path / "zero.toml")) == ["zero.toml: is not a file."]


def test_a_byte_order_mark_is_no_fault(tmp_path: Path) -> None:
    assert study_of(tmp_path, b"\xef\xbb\xbf" + textwrap.dedent(CONTRACT).encode()).name == "demo"


# ---- images named on the command line


def test_ids_from_file_names_are_legal_and_unique(tmp_path: Path) -> None:
    """Each image needs a folder of its own, on every system."""
    names = ["a b.tif", "A_B.ome.tif", "x/a b.png", "CON.png", "é.png", "..tif", "a" * 150 + ".tif", "a" * 150 + ".png"]
    study = ad_hoc_study([Path(name) for name in names], 7.0, "fundus")
    ids = [source.image_id for source in study.images]
    assert ids[:6] == ["a_b", "A_B-2", "a_b-3", "image_CON", "image", "image-2"]
    assert len({name.casefold() for name in ids}) == len(ids)
    assert max(map(len, ids)) == 100
    rows = "".join(f"{name},x.tif\n" for name in ids)
    assert len(study_of(tmp_path, CONTRACT.split("[compare]", maxsplit=1)[0], "image_id,file\n" + rows).images) == len(
        ids
    )
    assert study.settings.scale.pixel_size_um == 7.0
    assert all(source.file.is_absolute() for source in study.images)


def test_faulty_requests_on_the_command_line() -> None:
    assert problems(lambda: ad_hoc_study([], 7.0, "fundus")) == ["command line: no images."]
    assert "Did you mean 'fundus'?" in problems(lambda: ad_hoc_study([Path("a.tif")], 7.0, "fundos"))[0]
    assert "must be at least 0.001" in problems(lambda: ad_hoc_study([Path("a.tif")], 0.0, "fundus"))[0]
    assert ad_hoc_study([Path("a.tif")], None, "fundus").settings.scale.pixel_size_um is None


def test_python_callers_may_give_tuples() -> None:
    study = study_from_mapping({**SMALLEST, "segment": {"radius_um": (2, 9)}}, Path())
    assert study.settings.segment.radius_um == (2.0, 9.0)
    assert study.images == ()
