"""From a recipe to a folder that can be measured as it is: images, sheet, study file, and the truth beside them."""

import csv
import io
import json
import zlib
from pathlib import Path

import numpy as np
import pandas as pd
import tifffile
from PIL import Image

from vasohm_synthetic.arrays import AnyIntImage
from vasohm_synthetic.backdrop import digitise
from vasohm_synthetic.clearance import Field
from vasohm_synthetic.errors import RecipeError, refuse
from vasohm_synthetic.fundus import fundus_scene
from vasohm_synthetic.mesh import OUTSIDE_PX, mesh_scene
from vasohm_synthetic.recipe import DESIGN, Entry, ImageRecipe, Recipe, SceneRecipe
from vasohm_synthetic.render import render
from vasohm_synthetic.scene import Scene
from vasohm_synthetic.tone import retone
from vasohm_synthetic.trees import Root, grow_trees
from vasohm_synthetic.truth import truth_tables
from vasohm_synthetic.tubes import tube_scene
from vasohm_synthetic.view import look

_GEOMETRY, _PICTURE = 0, 1  # streams of random numbers


def make_phantoms(recipe: Recipe, out_dir: Path) -> tuple[str, ...]:
    """Write all pictures of a recipe, `images.csv`, `study.toml`, terminals and `truth/IMAGE_ID/*.csv`.

    The same recipe gives the same bytes.

    Returns
    -------
    tuple[str, ...]
        The names of the images, in the recipe's order.

    Raises
    ------
    RecipeError
        When a scene cannot be made, before anything is written; or when the folder is a file, or holds a study that
        is none of phantoms.
    """
    out_dir = Path(out_dir)
    scenes = _scenes(recipe)
    _take_over(out_dir)
    rows = []
    for image, scene in zip(recipe.images, scenes, strict=True):
        picture = draw(recipe, image, scene)
        tables = truth_tables(
            scene,
            image.picture_pixel_size_um,
            recipe.blood,
            image_id=image.image_id,
            drive_mmhg=recipe.drive_mmhg,
            optics=image.optics,
        )
        file = f"{image.image_id}.{recipe.file_format}"
        _write_picture(out_dir / file, picture)
        tables["image"] = _image(image, scene)
        _write_truth(out_dir / "truth" / image.image_id, tables)
        rows.append({"image_id": image.image_id, "file": file, **_row(recipe, image, scene)})
        if recipe.write_terminals:
            terminals = tables["nodes"].loc[tables["nodes"]["role"] != "", ["x_px", "y_px", "role"]]
            rows[-1]["terminals_file"] = f"{image.image_id}_terminals.csv"
            _write(out_dir / str(rows[-1]["terminals_file"]), terminals.to_csv(index=False, lineterminator="\n"))
    _write(out_dir / "images.csv", _sheet(rows))
    _write(out_dir / "study.toml", study_text(recipe))
    return tuple(image.image_id for image in recipe.images)


def _scenes(recipe: Recipe) -> list[Scene]:
    """Make the scene of every picture, and tell all that cannot be made at once, by image."""
    beds: dict[str, Scene] = {}
    scenes, problems = [], []
    for image in recipe.images:
        try:
            if image.bed not in beds:
                beds[image.bed] = build_bed(recipe, image)
            scene = beds[image.bed]
            for number, tone in enumerate(image.tones, 1):
                toned = retone(scene, [tone], image.pixel_size_um)
                if all(a is b for a, b in zip(scene.vessels, toned.vessels, strict=True)):
                    problems.append(f"image {image.image_id!r} tone {number}: changes no vessel; none is of its kind")
                scene = toned
            scenes.append(look(scene, image.view))
        except RecipeError as wrong:
            problems += [f"image {image.image_id!r}: {problem}" for problem in wrong.problems]
    refuse(problems)
    return scenes


def _take_over(out_dir: Path) -> None:
    """Create the folder, unless it is one whose files are not ours to write over."""
    if out_dir.exists() and not out_dir.is_dir():
        refuse([f"{out_dir}: is a file. Give another folder"])
    held = [name for name in ("study.toml", "images.csv") if (out_dir / name).exists()]
    if held and not (out_dir / "truth").is_dir():
        refuse([f"{out_dir}: holds {' and '.join(held)} that no phantoms belong to. Give another folder"])
    try:
        out_dir.mkdir(parents=True, exist_ok=True)
    except OSError as fault:
        refuse([f"{out_dir}: cannot be created: {fault.strerror}. Give another folder"])


def build_bed(recipe: Recipe, image: ImageRecipe) -> Scene:
    """Make the bed of one picture, before any change of tone."""
    return _bed(image.scene, _stream(recipe.seed, image.bed, _GEOMETRY))


def draw(recipe: Recipe, image: ImageRecipe, scene: Scene) -> AnyIntImage:
    """Take the picture of a scene in whole grey levels, [y, x] or [y, x, colour]."""
    light = render(scene, image.optics, _stream(recipe.seed, image.image_id, _PICTURE))
    return digitise(light, image.optics.camera.bits)


def study_text(recipe: Recipe) -> str:
    """Text of the study file that measures the folder as it is."""
    polarity = recipe.images[0].optics.polarity
    blood = recipe.blood
    low, high = recipe.radius_um
    sections = {
        "segment": {"radius_um": [low, high], **recipe.measured_with.get("segment", {})},
        **{name: keys for name, keys in recipe.measured_with.items() if name != "segment"},
    }
    further = "\n".join(
        f"[{name}]\n" + "".join(f"{key} = {json.dumps(value, ensure_ascii=False)}\n" for key, value in keys.items())
        for name, keys in sections.items()
    )
    return f"""[study]
name  = {json.dumps(recipe.name, ensure_ascii=False)}
sheet = "images.csv"

[image]
preset   = "{recipe.preset}"
polarity = "{polarity}"

{further}
[blood]
law                    = "{blood.law}"
hematocrit             = {blood.hematocrit!r}
plasma_viscosity_mpa_s = {blood.plasma_viscosity_mpa_s!r}
viscosity_mpa_s        = {blood.viscosity_mpa_s!r}

[network]
drive_mmhg = {recipe.drive_mmhg!r}
"""


def _stream(seed: int, name: str, purpose: int) -> np.random.Generator:
    """Random numbers of their own for each bed and each picture, whatever else is in the recipe."""
    return np.random.default_rng([seed, zlib.crc32(name.encode()), purpose])


def _bed(scene: SceneRecipe, rng: np.random.Generator) -> Scene:
    size = (scene.height_px, scene.width_px)
    if scene.kind == "tubes":
        return tube_scene(scene.tubes, size, rng)
    if scene.kind == "mesh":
        return mesh_scene(scene.mesh, size, rng)
    if scene.kind == "fundus":
        return fundus_scene(scene.fundus, size, rng)
    roots = [_root(entry, number, size) for number, entry in enumerate(scene.entries)]
    return grow_trees(roots, scene.tree, Field(size, None, scene.tree.margin_px), rng)


def _root(entry: Entry, number: int, size: tuple[int, int]) -> Root:
    """Trunk that comes in square to a border, or turned from that."""
    height, width = size
    x, y, heading_deg = {
        "left": (-0.5, entry.at * height, 0.0),
        "right": (width - 0.5, entry.at * height, 180.0),
        "top": (entry.at * width, -0.5, 90.0),
        "bottom": (entry.at * width, height - 0.5, -90.0),
    }[entry.side]
    return Root(
        x_px=x,
        y_px=y,
        heading=float(np.deg2rad(heading_deg + entry.turn_deg)),
        vessel_class=entry.vessel_class,
        layer=number,
        flow_inwards=entry.flow_inwards,
        kin=number if entry.crosses else 0,
        crop_px=OUTSIDE_PX,
        radius_px=entry.radius_px,
    )


def _row(recipe: Recipe, image: ImageRecipe, scene: Scene) -> dict[str, object]:
    row: dict[str, object] = {"pixel_size_um": image.picture_pixel_size_um}
    if recipe.pixel_size_se_um is not None:
        row["pixel_size_se_um"] = recipe.pixel_size_se_um * image.picture_pixel_size_um / recipe.pixel_size_um
    if scene.disc is not None:
        row |= {
            "disc_x_px": scene.disc.x_px,
            "disc_y_px": scene.disc.y_px,
            "disc_radius_px": scene.disc.radius_px,
        }
    return row | dict(image.design)


def _image(image: ImageRecipe, scene: Scene) -> pd.DataFrame:
    """Size and scale of the picture: truth of another picture can be told from it."""
    height, width = scene.shape
    pixel_size_um = image.picture_pixel_size_um
    return pd.DataFrame(
        [{"image_id": image.image_id, "width_px": width, "height_px": height, "pixel_size_um": pixel_size_um}]
    )


def _sheet(rows: list[dict[str, object]]) -> str:
    """Text of the image sheet: the columns that any image has, in a fixed order."""
    order = (
        "image_id", "file", "pixel_size_um", "pixel_size_se_um", *DESIGN[:-1], "terminals_file", "disc_x_px",
        "disc_y_px", "disc_radius_px", "note",
    )  # fmt: skip
    columns = [name for name in order if any(name in row for row in rows)]
    text = io.StringIO()
    writer = csv.DictWriter(text, columns, restval="", lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return text.getvalue()


def _write_picture(path: Path, picture: AnyIntImage) -> None:
    if path.suffix == ".tif":
        colour = picture.ndim == 3
        tifffile.imwrite(
            path, picture, photometric="rgb" if colour else "minisblack", compression="deflate", metadata=None
        )
    else:
        Image.fromarray(picture).save(path, format="PNG", compress_level=9)


def _write_truth(folder: Path, tables: dict[str, pd.DataFrame]) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    for name, table in tables.items():
        _write(folder / f"{name}.csv", table.to_csv(index=False, lineterminator="\n"))


def _write(path: Path, text: str) -> None:
    path.write_bytes(text.encode("utf-8"))
