"""What shape cannot be told of is left empty and said why; what is no class file is refused by name."""

from collections.abc import Callable

import numpy as np
import pytest
from conftest import SIZE_PX, DrawnStudy
from PIL import Image
from skimage import measure

import vasohm
from vasohm.errors import MaskError
from vasohm.results.tables import ImageTables

SIDE_PX, MIDDLE_PX, DISC_PX = 320, 159.5, 28.0
PIXEL_SIZE_UM = 7.0
RADII_PX = (5.0, 4.0)  # of arterioles and venules by turns, six each
ZONE_PX = (2 * DISC_PX, 3 * DISC_PX)  # half a disc diameter to a whole one from the margin


def drawn(ways: list[tuple[np.ndarray, np.ndarray, float]]) -> np.ndarray:
    """Dark tubes between pairs of points (x, y) on a grey ground with a little noise."""
    y, x = np.mgrid[:SIDE_PX, :SIDE_PX].astype(float)
    depth = np.zeros(y.shape)
    for start, stop, radius in ways:
        way = stop - start
        along = np.clip(((x - start[0]) * way[0] + (y - start[1]) * way[1]) / (way @ way), 0.0, 1.0)
        away = np.hypot(x - start[0] - along * way[0], y - start[1] - along * way[1])
        depth = np.maximum(depth, 2.0 * np.sqrt(np.maximum(radius**2 - away**2, 0.0)))
    light = 180.0 * np.exp(-0.05 * depth) + np.random.default_rng(1).normal(0.0, 1.5, y.shape)
    return np.clip(np.rint(light), 0, 255).astype(np.uint8)


def spoke(k: int, *, reach_px: float) -> np.ndarray:
    turn = 2 * np.pi * (k + 0.3) / 12
    return MIDDLE_PX + reach_px * np.array([np.cos(turn), np.sin(turn)])


@pytest.fixture(scope="module")
def eye(tmp_path_factory: pytest.TempPathFactory) -> Callable[..., ImageTables]:
    """Twelve vessels that run out of a disc, and a function that measures them with what a person says of it."""
    folder = tmp_path_factory.mktemp("eye")
    ways = [(spoke(k, reach_px=25.0), spoke(k, reach_px=260.0), RADII_PX[k % 2]) for k in range(12)]
    picture = drawn(ways)
    y, x = np.mgrid[:SIDE_PX, :SIDE_PX] - MIDDLE_PX
    sector = np.floor((np.arctan2(y, x) / (2 * np.pi) * 12 - 0.3 + 0.5) % 12).astype(np.uint8)
    classes = 1 + sector % 2

    def measure_eye(kinds: tuple[int, ...] = (1, 2), disc_x_px: float = MIDDLE_PX) -> ImageTables:
        Image.fromarray(np.where(np.isin(classes, kinds), classes, 0)).save(folder / "classes.png")
        return vasohm.measure_image(
            picture, pixel_size_um=PIXEL_SIZE_UM, preset="fundus", class_file=folder / "classes.png",
            disc_x_px=disc_x_px, disc_y_px=MIDDLE_PX, disc_radius_px=DISC_PX,
        )  # fmt: skip

    return measure_eye


def test_one_class_alone_gives_its_own_equivalent(eye: Callable[..., ImageTables]) -> None:
    """CRAE of six equal arterioles by the formula of Knudtson et al. 2003, Curr Eye Res 27:143; no venule, no ratio."""
    image = eye(kinds=(1,)).image.iloc[0]
    pair = 0.88 * np.sqrt(2)  # of one width: three pairs; a pair of these; that with the one left over
    crae_um = 0.88 * np.hypot(pair * pair, pair) * 2 * RADII_PX[0] * PIXEL_SIZE_UM
    assert image["crae_um"] == pytest.approx(crae_um, rel=0.01)
    assert image["crae_se_um"] > 0
    assert image[["crve_um", "crve_se_um", "avr", "avr_se"]].isna().all()
    assert image[["n_zone_arterioles", "n_zone_venules"]].tolist() == [6, 0]
    assert "few_venules" in image["flags"].split(";")
    assert "few_arterioles" not in image["flags"].split(";")


@pytest.mark.parametrize(("x_px", "flag"), [(10.0, "disc_outside"), (ZONE_PX[0] - 10.0, "zone_cut")])
def test_a_disc_at_the_border_is_told(eye: Callable[..., ImageTables], x_px: float, flag: str) -> None:
    """Vessels that lie beyond the border are missing from the equivalents, and nobody would see it by their number."""
    image = eye(disc_x_px=x_px).image.iloc[0]
    assert flag in image["flags"].split(";")
    assert image[["crae_um", "crve_um", "avr"]].isna().all()


def test_tissue_that_the_field_cannot_judge_is_told() -> None:
    """One vessel beside the left border: how far the right side lies from vessels beyond the border nobody sees."""
    picture = drawn([(np.array([14.0, 0.0]), np.array([14.0, 319.0]), 4.0)])[:, :160]
    image = vasohm.measure_image(picture, pixel_size_um=PIXEL_SIZE_UM, preset="fundus").image.iloc[0]
    assert "tissue_unseen" in image["flags"].split(";")
    assert 0.05 < image["tissue_unseen_fraction"] < 1.0
    assert np.isnan(image["tissue_distance_p95_um"])
    assert np.isfinite(image["tissue_distance_p05_um"])


def test_a_mesh_has_no_orders_and_is_told() -> None:
    """Two rails with two rungs: a loop, in which no vessel comes before the other. Beside it a tree, with orders."""
    rail = [np.array([at, 0.0]) for at in (60.0, 130.0)]
    down = np.array([0.0, 319.0])
    ways = [(top, top + down, 5.0) for top in rail]
    ways += [(rail[0] + [0.0, at], rail[1] + [0.0, at], 3.5) for at in (110.0, 210.0)]
    fork = np.array([240.0, 150.0])
    ways += [(np.array([240.0, 0.0]), fork, 6.0)]
    ways += [(fork, fork + np.array([side * 45.0, 169.0]), 5.0) for side in (-1, 1)]
    found = vasohm.measure_image(drawn(ways), pixel_size_um=PIXEL_SIZE_UM, preset="fundus")
    loops = found.networks.set_index("network_id")["loops"]
    assert sorted(loops) == [0, 1]
    holes = len(loops) - measure.euler_number(found.mask, connectivity=2)
    assert loops.sum() == holes  # scikit-image's count on the mask
    mesh, tree = loops.idxmax(), loops.idxmin()
    flags = found.networks.set_index("network_id")["flags"].str.split(";")
    assert "order_loops" in flags[mesh]
    assert "order_loops" not in flags[tree]
    of_mesh = found.segments["network_id"] == mesh
    assert found.segments.loc[of_mesh, ["order_strahler", "order_diameter"]].isna().all().all()
    assert found.segments.loc[~of_mesh, "order_strahler"].tolist().count(2) == 1
    assert set(found.tables["orders"]["network_id"]) == {tree}
    doubt = ["ln_resistance_series_random_se", "ln_resistance_parallel_shared_se"]
    assert (found.tables["orders"][doubt] > 0).all().all()
    horton = found.tables["horton"][found.tables["horton"]["network_id"] == mesh]
    assert horton[["highest_order", "bifurcation_ratio", "length_ratio", "radius_ratio"]].isna().all().all()
    assert set(horton["flags"]) == {"order_loops"}


def test_what_is_no_class_file_is_refused_by_name(make_study: Callable[..., DrawnStudy]) -> None:
    """Labels 4 and 255 are somebody's other scheme; a picture of another size lies beside the vessels it names."""
    study = make_study(4)
    cells = np.zeros((SIZE_PX, SIZE_PX), np.uint8)
    for name, change in (("four", 4), ("white", 255)):
        Image.fromarray(np.where(np.arange(SIZE_PX) < 9, change, cells).astype(np.uint8)).save(
            study.folder / f"{name}.png"
        )
    Image.fromarray(cells[:-1]).save(study.folder / "short.png")
    picture = np.full((SIZE_PX, SIZE_PX), 200, np.uint8)
    for image_id in study.ids:
        Image.fromarray(picture).save(study.folder / f"{image_id}.png")
    files = ("four.png", "white.png", "short.png", "gone.png")
    study.sheet(
        {image_id: f"{image_id}.png,{file}" for image_id, file in zip(study.ids, files, strict=True)},
        "image_id,file,class_file",
    )
    words = (
        "four.png: 864 pixels have values that are no class (4, ...). Use 0 not said, 1 arteriole, 2 venule",
        "white.png: 864 pixels have values that are no class (255, ...)",
        "short.png: is 96 x 95 px, but its image is 96 x 96 px as stored",
        "gone.png",
    )
    checked = study.run("check", study.file)
    assert checked.status == 2
    for row, text in enumerate(words, start=2):
        assert any(f"images.csv:{row} class_file" in line and text in line for line in checked.complained.splitlines())
    with pytest.raises(MaskError, match=r"short\.png: is 96 x 95 px, but its image is 96 x 96 px as stored"):
        vasohm.measure_image(picture, pixel_size_um=PIXEL_SIZE_UM, class_file=study.folder / "short.png")
