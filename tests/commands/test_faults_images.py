"""Degenerate pictures through the whole way to the files: a named end, full headers, and no number that is none.

How each is measured is held in tests/phantom (segmentation, quality, invariances); here is what reaches the tables.
"""

import csv
import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import tifffile
from conftest import DrawnStudy, contents, draw, failures, states
from PIL import Image

from vasohm.results.schema import COLUMNS

MakeStudy = Callable[..., DrawnStudy]


def with_nan(pixels: np.ndarray) -> np.ndarray:
    held = pixels.astype(np.float32)
    held[20, 70] = np.nan
    held[60:62] = np.inf
    return held


def line(width: int) -> np.ndarray:
    held = np.full((64, 64), 180, np.uint8)
    held[30 : 30 + width] = 60
    return held


NOISE = np.random.default_rng(5)
PICTURES: dict[str, tuple[np.ndarray, set[str]]] = {  # the ends that are right
    "black": (np.zeros((64, 64), np.uint8), {"empty"}),
    "seven": (np.full((64, 64), 7, np.uint8), {"empty"}),
    "white": (np.full((64, 64), 255, np.uint8), {"empty"}),
    "noise": (NOISE.integers(100, 110, (96, 96), np.uint8), {"empty", "measured"}),
    "one-pixel": (np.full((1, 1), 9, np.uint8), {"empty", "failed"}),
    "two-by-two": (np.array([[0, 9], [9, 0]], np.uint8), {"empty", "failed"}),
    "one-row": (NOISE.integers(0, 255, (1, 500), np.uint8), {"empty", "failed"}),
    "long-strip": (np.tile(line(5)[20:45, :20], (1, 100)), {"measured", "empty"}),
    "thin-line": (line(1), {"measured", "empty"}),
    "half-dark": (np.repeat(np.repeat(np.array([[50, 200]], np.uint8), 64, 0), 32, 1), {"measured", "empty"}),
    "at-the-border": (np.roll(line(6), 34, axis=0), {"measured", "empty"}),
    "holes": (with_nan(draw(0)), {"measured"}),
    "all-nan": (np.full((64, 64), np.nan, np.float32), {"failed", "empty"}),
    "all-inf": (np.full((64, 64), np.inf, np.float32), {"failed", "empty"}),
    "tiny-numbers": (draw(0).astype(np.float64) * 1e-300, {"measured", "failed", "empty"}),
    "huge-numbers": (draw(0).astype(np.float64) * 1e300, {"measured", "failed", "empty"}),
    "negative": (draw(0).astype(np.int16) - 300, {"measured", "failed", "empty"}),
}


@pytest.mark.usefixtures("one_process")
def test_degenerate_pictures_end_by_name_and_give_no_false_number(make_study: MakeStudy, tmp_path: Path) -> None:
    """An exception would be told as a fault of the program, an infinite cell breaks who reads the table."""
    study, out = make_study(1, method="ridge"), tmp_path / "out"
    for name, (pixels, _) in PICTURES.items():
        tifffile.imwrite(study.folder / f"{name}.tif", pixels, photometric="minisblack")
    study.sheet({name: f"{name}.tif" for name in PICTURES})
    study.measure(out)
    ends = states(out)
    assert {name: end for name, end in ends.items() if end not in PICTURES[name][1]} == {}, failures(out)
    assert not [row for row in failures(out).values() if row["error"] in ("unexpected", "crashed")]
    for folder in sorted((out / "images").iterdir()):
        for table in folder.glob("*.csv"):
            with table.open(encoding="utf-8", newline="") as stream:
                header, *rows = csv.reader(stream)
            assert {column.name for column in COLUMNS[table.stem]} <= {*header} or table.stem == "image"
            for row in rows:
                for cell in row:
                    assert cell.lower() not in ("nan", "inf", "-inf", "null")
                    assert all(len(row) == len(header) for row in rows)
    sums = [float(cell) for cell in column_of(out / "images" / "holes" / "segments.csv", "length_um")]
    assert sums
    assert all(math.isfinite(value) and value > 0 for value in sums)


def column_of(table: Path, name: str) -> list[str]:
    with table.open(encoding="utf-8", newline="") as stream:
        return [row[name] for row in csv.DictReader(stream)]


@pytest.mark.usefixtures("one_process")
def test_a_mask_that_is_all_vessel_or_nothing_gives_no_radii_from_its_size(
    make_study: MakeStudy, tmp_path: Path
) -> None:
    """Half the way to the border of an all-true mask is no radius; the picture has none of that width."""
    study, out = make_study(1), tmp_path / "out"
    study.file.write_text(study.file.read_text().replace('"told"', '"mask"'))
    for name, value in (("full", 255), ("none", 0)):
        Image.fromarray(np.full(draw(0).shape, value, np.uint8)).save(study.folder / f"{name}.png")
    study.sheet({name: f"image-0.png,{name}.png" for name in ("full", "none")}, "image_id,file,mask_file")
    study.measure(out)
    assert states(out)["none"] == "empty"
    if states(out)["full"] == "measured":
        radii = [float(cell) for cell in column_of(out / "images" / "full" / "segments.csv", "radius_mean_um") if cell]
        assert all(radius < 2.0 * 96 / 4 for radius in radii)
    else:
        assert failures(out)["full"]["error"] in ("mask", "image")


@pytest.mark.usefixtures("one_process")
def test_one_picture_in_many_files_gives_the_same_tables(make_study: MakeStudy, tmp_path: Path) -> None:
    """Byte order, tiles, compression, planes and the tag of white as zero are the file's, not the vessels'."""
    study, out = make_study(1), tmp_path / "out"
    grey = draw(0)
    ways = {
        "plain": {},
        "bigtiff": {"bigtiff": True, "byteorder": ">"},
        "tiled": {"tile": (16, 16), "compression": "zlib", "predictor": True},
        "oriented": {"extratags": [(274, 3, 1, 6, True)]},
    }
    for name, how in ways.items():
        tifffile.imwrite(study.folder / f"{name}.tif", grey, photometric="minisblack", **how)
    tifffile.imwrite(study.folder / "white-zero.tif", 255 - grey, photometric="miniswhite")
    Image.fromarray(grey).save(study.folder / "flat.png")
    study.sheet({**{name: f"{name}.tif" for name in (*ways, "white-zero")}, "flat": "flat.png"})
    assert study.measure(out).status == 0
    tables = {}
    for folder in (out / "images").iterdir():
        text = (folder / "points.csv").read_text().replace(f"{folder.name},", "")
        tables[folder.name] = (text, contents(folder)["mask.tif"])
    assert len(set(tables.values())) == 1
    assert "orientation_tag" in (out / "images" / "oriented" / "image.csv").read_text()
