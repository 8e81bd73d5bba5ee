"""One image measured from Python, in this process and without a file written."""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from vasohm.arrays import AnyArray
from vasohm.config.sheet import ImageSource, read_edits, read_terminals
from vasohm.config.study_file import Study, read_toml, study_from_mapping
from vasohm.errors import Problem, RequestError
from vasohm.flags import Flag
from vasohm.flow.rheology import HIGHEST_HEMATOCRIT
from vasohm.image.calibrate import TypedScale
from vasohm.image.disc import OpticDisc
from vasohm.image.eye import Eye
from vasohm.image.read import RawImage, in_blocks, read_image
from vasohm.pipeline import measure_pixels
from vasohm.results.tables import ImageTables

SECTIONS = ("scale", "segment", "radius", "classes", "shape", "blood", "network", "scenario")


def measure_image(  # noqa: PLR0913  one keyword a column of the sheet and a section of the study file
    image: str | Path | AnyArray,
    *,
    pixel_size_um: float | None = None,
    pixel_size_se_um: float | None = None,
    preset: str | None = None,
    study: str | Path | Mapping[str, Any] | None = None,
    scale: Mapping[str, Any] | None = None,
    segment: Mapping[str, Any] | None = None,
    radius: Mapping[str, Any] | None = None,
    classes: Mapping[str, Any] | None = None,
    shape: Mapping[str, Any] | None = None,
    blood: Mapping[str, Any] | None = None,
    network: Mapping[str, Any] | None = None,
    scenario: Sequence[Mapping[str, Any]] | None = None,
    image_id: str = "image",
    subject: str = "",
    eye: str = "",
    group: str = "",
    condition: str = "",
    time: str = "",
    mask_file: str | Path | None = None,
    fov_file: str | Path | None = None,
    class_file: str | Path | None = None,
    terminals_file: str | Path | None = None,
    edits_file: str | Path | None = None,
    disc_x_px: float | None = None,
    disc_y_px: float | None = None,
    disc_radius_px: float | None = None,
    axial_length_mm: float | None = None,
    axial_length_se_mm: float | None = None,
    refraction_d: float | None = None,
    hematocrit: float | None = None,
) -> ImageTables:
    """Measure one image.

    Parameters
    ----------
    image : path, or array [y, x] or [y, x, colour]
        The picture, truth values, whole or real numbers; of an array bigger is brighter, and a fourth colour, the
        opacity, plays no part.
    pixel_size_um, pixel_size_se_um : float, µm
        Edge of a pixel and its standard uncertainty. A file may tell the first itself.
    preset : str
        fundus, angiogram, fluorescence or intravital; fundus where neither this nor `study` says one.
    study : path or mapping
        A study file or what it would hold; its sheet is not read. `scale`, `segment`, `radius`, `classes`, `shape`,
        `blood`, `network` and `scenario` stand for its sections of that name and win over it, key by key.
    image_id, subject, eye, group, condition, time, mask_file, fov_file, class_file, terminals_file, edits_file,
    disc_x_px, disc_y_px, disc_radius_px, axial_length_mm, axial_length_se_mm, refraction_d, hematocrit
        The columns of the image sheet; files may lie anywhere.

    Returns
    -------
    ImageTables
        `segments`, `points`, `nodes`, `networks`, `branchings`, `crossings`, `scenarios`, `image`: pandas frames with
        the columns of the output tables (µm, mPa·s, Pa·s/m³, mmHg, nL/min); `graph`: networkx.MultiGraph.

    Raises
    ------
    RequestError
        A wrong value of a keyword or of `study`, or an array that is no picture.
    ReadError, ScaleError, MaskError, ImageError
        A file that is no picture, no pixel size, a mask that does not fit, a picture that cannot be measured.
    """
    if hematocrit is not None and not 0 <= hematocrit <= HIGHEST_HEMATOCRIT:
        problem = f"hematocrit is {hematocrit!r}; give a fraction between 0 and {HIGHEST_HEMATOCRIT}, not per cent."
        raise RequestError([Problem("measure_image", problem)])
    sections = dict(zip(SECTIONS, (scale, segment, radius, classes, shape, blood, network, scenario), strict=True))
    settings = _resolved(study, preset, sections).settings
    source = ImageSource(
        image_id=image_id,
        file=Path(image) if isinstance(image, str | Path) else Path("array"),
        scale=TypedScale(pixel_size_um, pixel_size_se_um, Eye(axial_length_mm, axial_length_se_mm, refraction_d)),
        mask_file=_path(mask_file),
        fov_file=_path(fov_file),
        class_file=_path(class_file),
        terminals=read_terminals(Path(terminals_file)) if terminals_file else (),
        edits=read_edits(Path(edits_file)) if edits_file else (),
        disc=_disc(disc_x_px, disc_y_px, disc_radius_px),
        hematocrit=hematocrit,
        design={"subject": subject, "eye": eye, "group": group, "condition": condition, "time": time},
    )
    if isinstance(image, str | Path):
        raw = read_image(source.file, settings.read)
    else:
        raw = in_blocks(_from_array(image), settings.read.block_megapixels)
    return measure_pixels(raw, source, settings, lambda _: None)


def _resolved(study: str | Path | Mapping[str, Any] | None, preset: str | None, sections: Mapping[str, Any]) -> Study:
    """Lay the keywords over the study and check the whole."""
    if isinstance(study, str | Path):
        path = Path(study)
        said: dict[str, Any] = {**read_toml(path)}
    else:
        path = Path.cwd() / "study"
        said = {**(study or {})}
    said["study"] = {key: value for key, value in said.get("study", {"name": "python"}).items() if key != "sheet"}
    said["image"] = {"preset": "fundus", **said.get("image", {}), **({"preset": preset} if preset else {})}
    for name, section in sections.items():
        if section is not None:
            said[name] = [*section] if name == "scenario" else {**said.get(name, {}), **section}
    return study_from_mapping(said, path.parent)


def _path(given: str | Path | None) -> Path | None:
    return None if given is None else Path(given)


def _disc(x: float | None, y: float | None, radius: float | None) -> OpticDisc | None:
    if x is None and y is None and radius is None:
        return None
    if x is None or y is None or radius is None:
        problem = "give disc_x_px, disc_y_px and disc_radius_px together, or none of them."
        raise RequestError([Problem("measure_image", problem)])
    return OpticDisc(x, y, radius, "sheet", 1.0)


def _from_array(pixels: AnyArray) -> RawImage:
    """Take an array as it is; integers tell their own white level."""
    pixels = np.array(pixels)
    if pixels.dtype.kind not in "buif":
        problem = f"an array of {pixels.dtype} is no picture: truth values, whole or real numbers are needed."
        raise RequestError([Problem("measure_image", problem)])
    if pixels.size == 0:
        problem = f"an array of shape {pixels.shape} holds no pixel."
        raise RequestError([Problem("measure_image", problem)])
    if pixels.ndim not in (2, 3) or (pixels.ndim == 3 and pixels.shape[2] not in (3, 4)):
        problem = f"an array of shape {pixels.shape} is no picture: [y, x], [y, x, 3] or [y, x, 4] is needed."
        raise RequestError([Problem("measure_image", problem)])
    if pixels.ndim == 3:
        pixels = pixels[..., :3]
    if pixels.dtype == np.bool_:
        pixels = pixels.astype(np.uint8)
    white = float(np.iinfo(pixels.dtype).max) if np.issubdtype(pixels.dtype, np.integer) else None
    return RawImage(pixels, white, "", None, "", (), Flag.NONE)
