"""Phantoms like a laboratory's own pictures: blur, noise, contrast, calibres and scale read from measured results."""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from vasohm_synthetic.blood import LAW_NAMES, Blood
from vasohm_synthetic.errors import RecipeError, refuse
from vasohm_synthetic.mesh import MeshShape
from vasohm_synthetic.optics import MAX_DENSITY, PROFILES, Camera, Channel, Optics
from vasohm_synthetic.recipe import ImageRecipe, Recipe, SceneRecipe, recipe_problems
from vasohm_synthetic.trees import TreeShape

MAX_PHANTOM_PX = 1024  # a larger picture is stood for by a part of it
BACKGROUND = {"dark": 0.6, "bright": 0.1}  # fraction of full scale
BRIGHT_CONTRAST = 0.4  # a bright picture's own units are those of its file: only contrast over noise is kept
MESH_LOOPS = 3  # in one network, from which on it is drawn as a mesh
UNKNOWN_PROFILE = "cylinder"


@dataclass(frozen=True, slots=True)
class _Measured:
    """What one measured picture says about itself."""

    image_id: str
    image: "pd.Series[Any]"
    segments: pd.DataFrame
    loops: int
    profile: str


def recipe_like(results_dir: Path, *, seed: int = 0, most: int = 8) -> Recipe:
    """Make a recipe of phantoms like the pictures of a measured study.

    Each phantom takes blur, profile, scale and contrast over noise from one measured picture, and the range and
    spread of its radii from that picture's segments; it is a mesh where a network of the picture has loops, else a
    tree. What a phantom does not take over: backdrop, colour, crossings, correlated noise.

    Parameters
    ----------
    results_dir : Path
        Output folder of a measured study.
    most : int
        At most so many pictures, spread evenly over the study.

    Raises
    ------
    RecipeError
        When the folder holds no measured picture whose blur, noise and contrast are known.
    """
    results_dir = Path(results_dir)
    try:
        configuration = json.loads((results_dir / "study.json").read_text(encoding="utf-8"))["configuration"]
    except (OSError, ValueError, KeyError):
        raise RecipeError([f"{results_dir}: holds no study.json of a measured study"]) from None
    said = {key: entry["value"] for key, entry in configuration.items()}
    measured = [found for folder in _folders(results_dir) if (found := _read(folder)) is not None]
    if not measured:
        refuse([f"{results_dir}: no picture in it was measured with known blur, noise and contrast"])
    if len(measured) > most:
        measured = [measured[i] for i in np.linspace(0, len(measured) - 1, most).round().astype(int)]
    polarity = str(said["image.polarity"])
    low, high = said["segment.radius_um"]
    recipe = Recipe(
        name=f"like {said['study.name']}",
        seed=seed,
        pixel_size_um=float(measured[0].image["pixel_size_um"]),
        pixel_size_se_um=None,
        preset=str(said["image.preset"]),
        radius_um=(float(low), float(high)),
        file_format="png",
        drive_mmhg=float(said["network.drive_mmhg"]),
        write_terminals=True,
        blood=_blood(said),
        images=tuple(_phantom(one, polarity) for one in measured),
    )
    refuse(recipe_problems(recipe))
    return recipe


def _folders(results_dir: Path) -> list[Path]:
    return sorted(path.parent for path in (results_dir / "images").glob("*/record.json"))


def _read(folder: Path) -> _Measured | None:
    """Read one picture's folder; None where it does not say what a phantom needs."""
    image = pd.read_csv(folder / "image.csv")
    segments = pd.read_csv(folder / "segments.csv")
    networks = pd.read_csv(folder / "networks.csv")
    if len(image) != 1 or segments.empty:
        return None
    row = image.iloc[0]
    known = row[["blur_px", "noise", "contrast"]].astype(float)
    if not (np.isfinite(known).all() and (known > 0).all()):
        return None
    profile = str(row.get("profile", UNKNOWN_PROFILE))
    return _Measured(
        folder.name, row, segments, int(networks["loops"].max()), profile if profile in PROFILES else UNKNOWN_PROFILE
    )


def _blood(said: dict[str, Any]) -> Blood:
    """The study's blood, or that of a constant viscosity where its law is not known here."""
    law = str(said["blood.law"])
    return Blood(
        law=law if law in LAW_NAMES else "constant",
        hematocrit=float(said["blood.hematocrit"]),
        plasma_viscosity_mpa_s=float(said["blood.plasma_viscosity_mpa_s"]),
        viscosity_mpa_s=float(said["blood.viscosity_mpa_s"]),
    )


def _phantom(one: _Measured, polarity: str) -> ImageRecipe:
    pixel_size_um = float(one.image["pixel_size_um"])
    radius_px = one.segments["radius_mean_um"].to_numpy(float) / pixel_size_um
    length_px = one.segments["length_um"].to_numpy(float) / pixel_size_um
    width, height = (int(min(one.image[side], MAX_PHANTOM_PX)) for side in ("width_px", "height_px"))
    thin, wide = np.quantile(radius_px, [0.02, 0.98])
    wide = float(np.clip(wide, 1.0, min(width, height) / 12))
    thin = float(np.clip(thin, 0.5, 0.8 * wide))
    spread = one.segments["radius_sd_um"].to_numpy(float) / one.segments["radius_mean_um"].to_numpy(float)
    variation = float(np.clip(np.nanmedian(spread), 0.0, 0.3)) if np.isfinite(spread).any() else 0.0
    middle = float(np.average(radius_px, weights=length_px))
    tree = TreeShape(
        root_radius_px=wide,
        min_radius_px=thin,
        length_ratio=float(np.clip(np.median(length_px / np.sqrt(radius_px * wide)), 5.0, 20.0)),
        variation_sd=variation,
    )
    capillary = float(np.median(radius_px))
    mesh = MeshShape(
        spacing_px=float(max(1.7 * np.median(length_px), 9 * capillary, 24.0)),
        radius_px=capillary,
        radius_sd=float(np.clip(np.std(np.log(radius_px)), 0.0, 0.4)),
        feeder_radius_px=wide,
        variation_sd=variation,
    )
    kind = "mesh" if one.loops >= MESH_LOOPS else "tree"
    return ImageRecipe(
        image_id=one.image_id,
        bed=one.image_id,
        pixel_size_um=pixel_size_um,
        scene=SceneRecipe(kind=kind, width_px=width, height_px=height, tree=tree, mesh=mesh),
        optics=_optics(one, polarity, middle),
        tones=(),
        design={},
    )


def _optics(one: _Measured, polarity: str, radius_px: float) -> Optics:
    """Contrast at the picture's typical radius; noise so that contrast over noise is the picture's."""
    ratio = float(one.image["contrast"]) / float(one.image["noise"])
    background = BACKGROUND[polarity]
    contrast = min(float(one.image["contrast"]), MAX_DENSITY) if polarity == "dark" else BRIGHT_CONTRAST
    return Optics(
        profile=one.profile,
        polarity=polarity,
        contrast=contrast,
        reference_radius_px=radius_px,
        absorption_per_px=0.5 / radius_px,
        blur_px=float(one.image["blur_px"]),
        channels=(Channel(background),),
        camera=Camera(noise_sd=contrast / ratio * (background if polarity == "dark" else 1.0), bits=16),
    )
