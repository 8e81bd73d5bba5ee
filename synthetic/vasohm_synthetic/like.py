"""Phantoms like a laboratory's own pictures: blur, noise, contrast, calibres and scale read from measured results."""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from vasohm_synthetic.arrays import FloatArray
from vasohm_synthetic.blood import LAW_NAMES, Blood
from vasohm_synthetic.errors import RecipeError, refuse
from vasohm_synthetic.mesh import MeshShape
from vasohm_synthetic.optics import PROFILES, Camera, Channel, Optics
from vasohm_synthetic.recipe import ImageRecipe, Recipe, SceneRecipe, recipe_problems
from vasohm_synthetic.trees import TreeShape

MAX_PHANTOM_PX = 1024  # a larger picture is stood for by a part of it
BACKGROUND = {"dark": 0.6, "bright": 0.1}  # fraction of full scale
BRIGHT_CONTRAST = 0.4  # a bright picture's own units are those of its file: only contrast over noise is kept
MESH_LOOPS = 3  # in one network, from which on it is drawn as a mesh
UNKNOWN_PROFILE = "cylinder"
MAX_LOSS = 0.99  # of the light, by a dark vessel
TYPED_KEYS = (
    "radius.blur_px", "radius.profile", "segment.method", "segment.false_alarms_per_mpx",
    "segment.crossing_probability", "skeletonize.spur_px", "skeletonize.spur_radii",
)  # fmt: skip


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
    tree. The phantoms are measured as the study was: what it typed about blur, profile and segmentation stands in
    their study file too. What a phantom does not take over: backdrop, colour, crossings, correlated noise.

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
    typed_blur = said.get("radius.blur_px")
    blur_px = float(typed_blur) if isinstance(typed_blur, (int, float)) else np.nan
    measured = [found for folder in _folders(results_dir) if (found := _read(folder, blur_px)) is not None]
    if not measured:
        why = "no picture in it was measured with known blur, noise and contrast"
        how = "Where vessels cannot tell the blur, set blur_px in [radius] of the study and measure again"
        refuse([f"{results_dir}: {why}. {how}"])
    if len(measured) > most:
        measured = [measured[i] for i in np.linspace(0, len(measured) - 1, most).round().astype(int)]
    polarity = str(said["image.polarity"])
    low, high = said["segment.radius_um"]
    recipe = Recipe(
        name=f"like {said['study.name']}",
        seed=seed,
        pixel_size_um=float(measured[0].image["pixel_size_um"]),
        pixel_size_se_um=_positive(measured[0].image.get("pixel_size_se_um")),
        preset=str(said["image.preset"]),
        radius_um=(float(low), float(high)),
        file_format="png",
        drive_mmhg=float(said["network.drive_mmhg"]),
        write_terminals=True,
        blood=_blood(said),
        images=tuple(_phantom(one, polarity) for one in measured),
        measured_with=_typed(configuration),
    )
    refuse(recipe_problems(recipe))
    return recipe


def _folders(results_dir: Path) -> list[Path]:
    return sorted(path.parent for path in (results_dir / "images").glob("*/record.json"))


def _typed(configuration: dict[str, Any]) -> dict[str, dict[str, Any]]:
    """What a person set in the study file and that a phantom can be measured with too, by section."""
    sections: dict[str, dict[str, Any]] = {}
    for key in TYPED_KEYS:
        entry = configuration.get(key, {})
        if entry.get("source") == "study" and entry["value"] is not None and entry["value"] != "mask":
            section, _, name = key.partition(".")
            sections.setdefault(section, {})[name] = entry["value"]
    return sections


def _positive(value: Any) -> float | None:
    number = float(value) if value is not None else np.nan
    return number if number > 0 else None


def _read(folder: Path, typed_blur_px: float) -> _Measured | None:
    """Read one picture's folder; None where it does not say what a phantom needs.

    A blur that was typed is not in `image.csv`, which holds what vessels tell.
    """
    image = pd.read_csv(folder / "image.csv")
    segments = pd.read_csv(folder / "segments.csv")
    networks = pd.read_csv(folder / "networks.csv")
    if len(image) != 1 or segments.empty:
        return None
    row = image.iloc[0].copy()
    if np.isfinite(typed_blur_px):
        row["blur_px"] = typed_blur_px
    known = row[["blur_px", "noise", "contrast"]].astype(float)
    if not (np.isfinite(known).all() and (known[["noise", "contrast"]] > 0).all() and known["blur_px"] >= 0):
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
    middle = _weighted_median(radius_px, length_px)
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


def _weighted_median(values: FloatArray, weights: FloatArray) -> float:
    order = np.argsort(values)
    share = np.cumsum(weights[order])
    return float(values[order][np.searchsorted(share, 0.5 * share[-1])])


def _optics(one: _Measured, polarity: str, radius_px: float) -> Optics:
    """Contrast at the picture's median radius; noise so that contrast over noise is the picture's.

    A dark vessel's measured contrast is the share of light that it takes away, the phantom's an optical density: what
    was measured as an absorber, whose share of light saturates, is a cylinder of density.
    """
    dark = polarity == "dark"
    profile = "cylinder" if dark and one.profile == "absorber" else one.profile
    absorption_per_px = 0.5 / radius_px
    height = -np.expm1(-2.0 * absorption_per_px * radius_px) if profile == "absorber" else 1.0  # on the axis
    measured, noise = float(one.image["contrast"]), float(one.image["noise"])
    background = BACKGROUND[polarity]
    contrast = -float(np.log1p(-min(measured, MAX_LOSS))) if dark else BRIGHT_CONTRAST
    noise_sd = noise * background if dark else BRIGHT_CONTRAST * noise / measured
    return Optics(
        profile=profile,
        polarity=polarity,
        contrast=float(contrast / height),
        reference_radius_px=radius_px,
        absorption_per_px=absorption_per_px,
        blur_px=float(one.image["blur_px"]),
        channels=(Channel(background),),
        camera=Camera(noise_sd=noise_sd, bits=16),
    )
