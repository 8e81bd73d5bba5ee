"""A whole eye with known classes: calibre equivalents, and networks of one class, against exact truth."""

import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from PIL import Image
from scipy.spatial import cKDTree

from vasohm_synthetic.make import make_phantoms
from vasohm_synthetic.recipe import parse_recipe

RECIPE = Path(__file__).parents[2] / "configs" / "phantom-fundus.toml"
SIDE_PX = 640
ZONE_DD = (0.5, 1.0)
TRUNKS_DEG = [-147.3, -121.6, -44.4, -18.7, 58.4, 84.1, 161.3]  # evenly apart, each with a venule beside it
EYES = {
    5201: {"disc_radius_px": 60.0, "tree": {"root_radius_px": 5.0, "min_radius_px": 2.0, "bend_radius_px": 70.0,
                                            "asymmetry": [0.4, 0.9]}},
    5203: {"disc_radius_px": 56.0, "tree": {"root_radius_px": 4.6, "min_radius_px": 2.2}},
}  # fmt: skip
BIAS = 0.02  # of the equivalents together, as asked of them
WIDEST_MISS = 0.03  # of one of them: the bias and its noise, of about 0.9 % by what it states without the pixel size


def make_eye(seed: int, folder: Path) -> None:
    """Seven trunks of each class around a disc, with a label image drawn from the truth."""
    recipe = tomllib.loads(RECIPE.read_text(encoding="utf-8"))
    recipe["phantom"] |= {"seed": seed}
    layout = {"disc_x": 0.47, "centre_x": 0.8, "trunks_deg": TRUNKS_DEG, "venule_offset_deg": 25.7}
    recipe["scene"] |= {"width_px": SIDE_PX, "height_px": SIDE_PX, "fundus": layout | EYES[seed]}
    recipe["image"] = [{"image_id": "eye", "eye": "left"}]
    make_phantoms(parse_recipe(recipe), folder)
    points, segments = (pd.read_csv(folder / "truth" / "eye" / f"{name}.csv") for name in ("points", "segments"))
    points = points.merge(segments[["segment_id", "vessel_class"]], on="segment_id")
    row, column = np.mgrid[:SIDE_PX, :SIDE_PX]
    away, nearest = cKDTree(points[["x_px", "y_px"]]).query(np.column_stack((column.ravel(), row.ravel())))
    pixel_um = pd.read_csv(folder / "images.csv").pixel_size_um[0]
    kind = np.where(points.vessel_class == "arteriole", 1, 2)[nearest]
    label = np.where(away <= points.radius_um.to_numpy()[nearest] / pixel_um + 2, kind, 0)
    Image.fromarray(label.reshape(SIDE_PX, SIDE_PX).astype(np.uint8)).save(folder / "classes.png")
    sheet = pd.read_csv(folder / "images.csv", dtype=str).drop(columns="terminals_file")
    sheet.assign(class_file="classes.png").to_csv(folder / "images.csv", index=False)


def true_equivalent(truth: Path, disc: pd.Series, kind: str) -> float:
    """By Knudtson et al. 2003 from the true radii of the vessels that meet the middle of the zone."""
    points, segments, nodes = (pd.read_csv(truth / f"{name}.csv") for name in ("points", "segments", "nodes"))
    near, far = (disc.disc_radius_px * (1 + 2 * limit) for limit in ZONE_DD)
    off_node = dict(zip(nodes.node_id, np.hypot(nodes.x_px - disc.disc_x_px, nodes.y_px - disc.disc_y_px), strict=True))
    widths = []
    for segment in segments[segments.vessel_class == kind].itertuples():
        own = points[points.segment_id == segment.segment_id]
        off = np.hypot(own.x_px - disc.disc_x_px, own.y_px - disc.disc_y_px).to_numpy()
        beyond = np.concatenate(([off_node[segment.node_a]], off, [off_node[segment.node_b]])) > (near + far) / 2
        if beyond.any() and not beyond.all():
            inside = (off >= near) & (off <= far)
            widths.append(2 * own.radius_um.to_numpy()[inside].mean())
    coefficient = {"arteriole": 0.88, "venule": 0.95}[kind]
    left = sorted(widths)[-6:]
    assert len(left) == 6
    while len(left) > 1:
        half = len(left) // 2
        pairs = [coefficient * np.hypot(left[k], left[-1 - k]) for k in range(half)]
        left = sorted([*pairs, *left[half : len(left) - half]])
    return left[0]


@pytest.mark.slow
def test_equivalents_of_an_eye_are_those_of_its_true_vessels(tmp_path):
    """Wrong if zone, choice of vessels, radius or the parting of trees were; 2 % of a calibre are 8 % of R."""
    ln_ratio = []
    for seed in EYES:
        folder, out = tmp_path / str(seed), tmp_path / f"{seed}-out"
        make_eye(seed, folder)
        command = [sys.executable, "-m", "vasohm", "measure", folder / "study.toml", "--out", out, "--quiet"]
        subprocess.run(command, check=True)
        image = pd.read_csv(out / "images" / "eye" / "image.csv").iloc[0]
        assert (image.n_zone_arterioles, image.n_zone_venules) == (6, 6)
        for kind, name in (("arteriole", "crae_um"), ("venule", "crve_um")):
            ln_ratio.append(float(np.log(image[name] / true_equivalent(folder / "truth" / "eye", image, kind))))
        segments = pd.read_csv(out / "images" / "eye" / "segments.csv")
        said = segments[segments.vessel_class.notna()]
        pairs = said[["network_id", "vessel_class"]].drop_duplicates()
        assert pairs.network_id.is_unique
        assert set(said.vessel_class) == {"arteriole", "venule"}
    assert abs(np.mean(ln_ratio)) < BIAS
    assert np.abs(ln_ratio).max() < WIDEST_MISS
