"""The command `appraise` as a person runs it, on phantoms that were measured."""

import json
import os
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from frictionless import Resource, Schema
from PIL import Image

from vasohm.errors import RequestError
from vasohm.results.columns_appraisal import APPRAISAL
from vasohm.results.schema import table_schema
from vasohm.study.appraise import appraise
from vasohm.study.appraise_masks import appraise_masks
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
    *(f"{table}.csv" for table in APPRAISAL if table != "appraisal_masks"),
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
        if table == "appraisal_masks":
            continue
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


def rewritten(truth: Path, name: str, change: Callable[[pd.DataFrame], pd.DataFrame]) -> None:
    path = truth / "NA" / f"{name}.csv"
    change(pd.read_csv(path, keep_default_na=False)).to_csv(path, index=False)


def changed(truth: Path, column: str, value: float) -> None:
    rewritten(truth, "image", lambda table: table.assign(**{column: value}))


@pytest.mark.parametrize(
    ("deed", "told"),
    [
        (
            lambda truth: changed(truth, "width_px", 200),
            "the truth is of a picture of 200 x 128 px, measured was one of",
        ),
        (lambda truth: changed(truth, "pixel_size_um", 2.1), "the truth has pixels of 2.1 µm, measured was with 2 µm"),
        (lambda truth: [f.rename(truth / f"other-{f.name}") for f in list(truth.iterdir())], "no image is in both"),
        (lambda truth: [f.unlink() for f in truth.glob("*/*.csv")], "holds no truth"),
        (lambda truth: [f.unlink() for f in truth.glob("*/points.csv")], r"NA.points\.csv: is not there"),
        (lambda truth: (truth / "NA" / "nodes.csv").unlink(), r"NA.nodes\.csv: is not there"),
        (lambda truth: rewritten(truth, "points", lambda t: t.assign(image_id="b")), "is of image 'b'"),
        (lambda truth: rewritten(truth, "points", lambda t: t.assign(radius_um=0)), "have a radius that is not above"),
        (lambda truth: rewritten(truth, "points", lambda t: t.assign(x_px=900)), "lie outside a picture of 160 x 128"),
        (lambda truth: rewritten(truth, "points", lambda t: t.iloc[:9]), "1 of 2 segments have fewer than two points"),
        (lambda truth: rewritten(truth, "segments", lambda t: t.iloc[:1]), "points are of segments not in"),
        (lambda truth: rewritten(truth, "segments", lambda t: t.assign(segment_id=1)), "have the id of another one"),
        (lambda truth: rewritten(truth, "segments", lambda t: t.assign(network_id=9)), "are of networks not in"),
        (lambda truth: changed(truth, "pixel_size_um", 0), "says no size or no pixel size"),
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


def drawn_masks(measured: Path, folder: Path, suffix: str = "_drawn") -> Path:
    """Masks of the true lumina, as a careful person would draw them."""
    folder.mkdir()
    y, x = np.mgrid[:128, :160]
    for image_id in ("NA", "second"):
        points = pd.read_csv(measured / "made" / "truth" / image_id / "points.csv")
        away = np.hypot(x[..., None] - points["x_px"].to_numpy(), y[..., None] - points["y_px"].to_numpy())
        lumen = (away <= points["radius_um"].to_numpy() / 2.0).any(axis=-1)
        Image.fromarray(np.where(lumen, 255, 0).astype(np.uint8)).save(folder / f"{image_id}{suffix}.png")
    return folder


def test_results_against_drawn_masks(measured: Path, tmp_path: Path) -> None:
    """Whoever has masks drawn by hand gets scores of each image and of all, printed and as a table with a schema."""
    masks = drawn_masks(measured, tmp_path / "masks")
    done = run("appraise", measured / "results", "--truth", masks, "--out", tmp_path / "out")
    assert done.returncode == 0, done.stderr
    resource = Resource(path="appraisal_masks.csv", basepath=str(tmp_path / "out"))
    resource.schema = Schema.from_descriptor(table_schema(APPRAISAL["appraisal_masks"]))
    assert resource.validate().valid
    table = pd.read_csv(tmp_path / "out" / "appraisal_masks.csv", keep_default_na=False)
    assert table["image_id"].tolist() == ["NA", "second", ""]
    assert table["n_both_px"].iloc[2] == table["n_both_px"].iloc[:2].sum()
    assert (table["n_view_px"].iloc[:2] == 160 * 128).all()
    rim = 250 * 2 / (250 * 13)  # both outlines of 250 px of vessel, half a pixel off, over its area of 250 x 13 px
    assert (table["dice"] > 1 - rim).all()
    assert (table["length_recall"] > 1 - 10 / 250).all()
    assert (tmp_path / "out" / "appraisal_masks.txt").read_text(encoding="utf-8") == done.stdout
    (masks / "second_drawn.png").rename(masks / "third_drawn.png")
    part = run("appraise", measured / "results", "--truth", masks)
    assert part.returncode == 0, part.stderr
    assert "second: there is no mask second_drawn of it; left out." in part.stdout
    assert "third_drawn.png: is of no measured image; left out." in part.stdout


GREYS = r"NA_drawn.png: \d+ of 20480 pixels lie between black and white"


def repainted(masks: Path, paint: Callable[[np.ndarray], np.ndarray], suffix: str = "_drawn") -> None:
    pixels = np.asarray(Image.open(masks / "NA_drawn.png")).copy()
    Image.fromarray(paint(pixels)).save(masks / f"NA{suffix}.png")


@pytest.mark.parametrize(
    ("deed", "told"),
    [
        (lambda masks: repainted(masks, lambda p: p[:, :100]), "NA_drawn.png: is 100 x 128 px, but its image is 160"),
        (lambda masks: repainted(masks, lambda p: np.maximum(p, np.eye(*p.shape, dtype=np.uint8) * 77)), GREYS),
        (lambda masks: repainted(masks, lambda p: 0 * p), "holds no vessel inside the field of view"),
        (lambda masks: repainted(masks, lambda p: p, "_other"), None),  # one image has two: the set of all is taken
        (
            lambda masks: [f.rename(f"{f}.tif".replace("_drawn", "_again")) for f in masks.glob("N*")],
            "more than one set",
        ),
        (lambda masks: [f.rename(masks / f"x{f.name}") for f in masks.glob("*.png")], "no mask is named by an image"),
        (lambda masks: shutil.copy(masks / "NA_drawn.png", masks / "NA_drawn.bmp"), "more than one mask of an image"),
    ],
)
def test_masks_that_do_not_fit_are_refused(measured: Path, tmp_path: Path, deed, told: str | None) -> None:
    """A mask of another picture, or one saved with smooth edges, would give a score that says nothing."""
    masks = drawn_masks(measured, tmp_path / "masks")
    deed(masks)
    if told is None:
        assert len(appraise_masks(measured / "results", masks).table) == 3
        return
    with pytest.raises(RequestError, match=told):
        appraise_masks(measured / "results", masks)


def test_results_without_a_field_of_view_are_refused(measured: Path, tmp_path: Path) -> None:
    """Scores over what the camera's housing hides would be too good."""
    masks = drawn_masks(measured, tmp_path / "masks")
    shutil.copytree(measured / "results", tmp_path / "results")
    (tmp_path / "results" / "images" / "NA" / "fov.tif").unlink()
    with pytest.raises(RequestError, match=r"fov\.tif: is not there: this image was measured by an earlier version"):
        appraise_masks(tmp_path / "results", masks)
