"""The command `appraise` as a person runs it, on phantoms that were measured."""

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest
from frictionless import Resource, Schema

from vasohm.errors import RequestError
from vasohm.results.columns_appraisal import APPRAISAL
from vasohm.results.schema import table_schema
from vasohm.study.appraise import appraise
from vasohm_synthetic.make import make_phantoms
from vasohm_synthetic.recipe import parse_recipe

RECIPE = {
    "phantom": {
        "seed": 3,
        "pixel_size_um": 2.0,
        "pixel_size_se_um": 0.02,
        "radius_um": [3, 20],
        "preset": "intravital",
    },
    "optics": {"contrast": 0.5, "camera": {"noise_sd": 0.01}},
    "scene": {
        "kind": "tubes",
        "width_px": 160,
        "height_px": 128,
        "tube": [
            {"x_px": 80, "y_px": 35, "radius_px": 4, "length_px": 120, "angle_deg": 10},
            {"x_px": 80, "y_px": 90, "radius_px": 2.5, "length_px": 130, "angle_deg": -15},
        ],
    },
    "image": [{"image_id": "NA"}, {"image_id": "second"}],
}
FILES = {
    "appraisal.json",
    "appraisal.txt",
    "certificate.png",
    "certificate.svg",
    *(f"{table}.csv" for table in APPRAISAL),
}


def run(*words: object) -> "subprocess.CompletedProcess[str]":
    done = subprocess.run(
        [sys.executable, "-m", "vasohm", *map(str, words)],
        capture_output=True,
        text=True,
        check=False,
        timeout=200,
        env={**os.environ, "OMP_NUM_THREADS": "1", "PYTHONUTF8": "1"},
    )
    assert "Traceback" not in done.stderr, done.stderr
    return done


@pytest.fixture(scope="module")
def measured(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the phantoms in `made` and what was measured in `results`."""
    folder = tmp_path_factory.mktemp("appraise")
    make_phantoms(parse_recipe(RECIPE), folder / "made")
    done = run("measure", folder / "made" / "study.toml", "--out", folder / "results", "--workers", 1, "--quiet")
    assert done.returncode == 0, done.stderr
    return folder


def test_appraisal_is_written_and_told(measured: Path, tmp_path: Path) -> None:
    """Tables that do not fit their description, or a summary that differs from them, mislead whoever reads on."""
    results, truth = measured / "results", measured / "made" / "truth"
    done = run("appraise", results, "--truth", truth, "--out", tmp_path / "out")
    assert done.returncode == 0, done.stderr
    assert {path.name for path in (tmp_path / "out").iterdir()} == FILES
    assert (tmp_path / "out" / "appraisal.txt").read_text(encoding="utf-8") == done.stdout
    assert "What can be trusted" in done.stdout
    for table, columns in APPRAISAL.items():
        schema = Schema.from_descriptor(table_schema(columns))
        resource = Resource(path=f"{table}.csv", basepath=str(tmp_path / "out"), schema=schema)
        report = resource.validate()
        assert report.valid, report.flatten(["rowNumber", "fieldName", "note"])
    images = pd.read_csv(tmp_path / "out" / "appraisal_images.csv", keep_default_na=False)
    assert images["image_id"].tolist() == ["NA", "second"]
    summary = json.loads((tmp_path / "out" / "appraisal.json").read_text(encoding="utf-8"))
    true_um = 2 * 2.0 * (120 + 130)
    assert summary["length"]["length_true_um"] == pytest.approx(true_um)
    assert summary["length"]["length_found_um"] > 0.95 * true_um  # wide tubes of high contrast: only ends may lack
    assert summary["segments"]["n_compared"] >= 4
    assert summary["branchings"]["true"] == 0
    again = run("appraise", results, "--truth", truth, "--out", tmp_path / "again")
    assert again.stdout == done.stdout
    for name in FILES:
        assert (tmp_path / "again" / name).read_bytes() == (tmp_path / "out" / name).read_bytes(), name


def test_what_is_not_in_both_is_told(measured: Path, tmp_path: Path) -> None:
    """An image without truth, or truth of an image that was not measured, must not pass in silence."""
    shutil.copytree(measured / "made" / "truth", tmp_path / "truth")
    (tmp_path / "truth" / "second").rename(tmp_path / "truth" / "third")
    done = run("appraise", measured / "results", "--truth", tmp_path / "truth")
    assert done.returncode == 0, done.stderr
    assert "1 image," in done.stdout
    assert "second: there is no truth of it; left out." in done.stdout
    assert "third: has truth and was not measured; left out." in done.stdout


def changed(truth: Path, column: str, value: float) -> None:
    path = truth / "NA" / "image.csv"
    table = pd.read_csv(path, keep_default_na=False)
    table[column] = value
    table.to_csv(path, index=False)


@pytest.mark.parametrize(
    ("deed", "told"),
    [
        (
            lambda truth: changed(truth, "width_px", 200),
            "the truth is of a picture of 200 x 128 px, measured was one of",
        ),
        (lambda truth: changed(truth, "pixel_size_um", 2.1), "the truth has pixels of 2.1 µm, measured was with 2 µm"),
        (lambda truth: [f.rename(truth / f"other-{f.name}") for f in list(truth.iterdir())], "no image is in both"),
        (lambda truth: [f.unlink() for f in truth.glob("*/points.csv")], "holds no truth"),
        (lambda truth: (truth / "NA" / "nodes.csv").unlink(), "cannot be read as a table of nodes"),
        (lambda truth: (truth / "NA" / "nodes.csv").write_text("node_id\n1\n"), "lacks"),
        (lambda truth: (truth / "NA" / "image.csv").write_text("width_px,height_px,pixel_size_um\n"), "has 0 rows"),
        (lambda truth: (truth / "NA" / "points.csv").write_text("x_px\nfar\n"), "cannot be read as a table of points"),
    ],
)
def test_truth_that_does_not_belong_is_refused(measured: Path, tmp_path: Path, deed, told: str) -> None:
    """Truth of other pictures would call a good measurement bad."""
    shutil.copytree(measured / "made" / "truth", tmp_path / "truth")
    deed(tmp_path / "truth")
    with pytest.raises(RequestError, match=told):
        appraise(measured / "results", tmp_path / "truth")


def test_folders_that_are_none_are_refused(measured: Path, tmp_path: Path) -> None:
    """The folder of phantoms serves as well as the truth in it; one without truth, and one without results, do not."""
    assert run("appraise", measured / "results", "--truth", measured / "made").returncode == 0
    none = run("appraise", measured / "results", "--truth", tmp_path, "--out", tmp_path / "out")
    assert none.returncode == 2
    assert "holds no truth" in none.stderr
    assert not (tmp_path / "out").exists()
    with pytest.raises(RequestError, match=r"holds no study\.json"):
        appraise(tmp_path, measured / "made" / "truth")
    shutil.copytree(measured / "results", tmp_path / "results")
    study = json.loads((tmp_path / "results" / "study.json").read_text(encoding="utf-8"))
    del study["configuration"]["blood.law"]
    (tmp_path / "results" / "study.json").write_text(json.dumps(study), encoding="utf-8")
    with pytest.raises(RequestError, match=r"does not say which blood was assumed \('blood\.law'\)"):
        appraise(tmp_path / "results", measured / "made" / "truth")
