"""A folder of results against the truth of its images: read both, hold them together, write what can be trusted."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from vasohm.config.blood_settings import blood_settings
from vasohm.errors import Problem, RequestError
from vasohm.flow.rheology import Blood, make_blood
from vasohm.results.columns_appraisal import APPRAISAL
from vasohm.results.encode import frame_bytes, json_bytes
from vasohm.results.schema import COLUMNS, SCHEMA_VERSION
from vasohm.results.write import write_atomically
from vasohm.study.accuracy import Appraisal, sum_up
from vasohm.study.certificate import draw_certificate, summary_lines
from vasohm.study.deviations import Bed, deviations
from vasohm.study.folder import image_folder, probe
from vasohm.study.outcome import EMPTY, MEASURED
from vasohm.study.state import StudyState, read_json, state_from
from vasohm.study.table_file import read_columns

# What is needed of each table; true tables may lack what is stated about a measurement only.
NEEDED: Mapping[str, tuple[str, ...]] = {
    "image": ("width_px", "height_px", "pixel_size_um"),
    "segments": ("segment_id", "network_id", "length_um", "radius_hydraulic_um", "hematocrit"),
    "points": ("segment_id", "point", "s_um", "x_px", "y_px", "radius_um"),
    "nodes": ("kind", "x_px", "y_px"),
    "crossings": ("x_px", "y_px"),
    "networks": ("network_id", "length_um", "loops", "resistance_pa_s_m3"),
}
_INTERVAL = ("resistance_lo_pa_s_m3", "resistance_hi_pa_s_m3", "ln_resistance_random_se", "ln_resistance_shared_se")
NEEDED_OF_OURS: Mapping[str, tuple[str, ...]] = {
    "segments": ("image_id", "resistance_pa_s_m3", "resistance_share", "flags", *_INTERVAL),
    "points": ("radius_se_um",),
    "networks": ("image_id", "flags", *_INTERVAL),
}
NEEDED_OF_TRUTH: Mapping[str, tuple[str, ...]] = {"segments": ("viscosity_mpa_s",)}
LARGEST_SCALE_DIFFERENCE = 0.01  # of pixel sizes, beyond which they are not of one picture
LEAST_POINTS_A_SEGMENT = 2  # a line has two ends
LARGEST_SCALE_Z = 4.0  # unless the stated uncertainty of the pixel size allows it


def appraise(results_dir: Path, truth_dir: Path) -> Appraisal:
    """Tell how far what was measured is from the truth.

    Parameters
    ----------
    results_dir : Path
        Folder that was `--out` of `measure`.
    truth_dir : Path
        Folder with one folder an image: `IMAGE_ID/image.csv, segments.csv, points.csv, nodes.csv, crossings.csv,
        networks.csv`, with the columns of the results, or the folder of phantoms, which holds it as `truth`.

    Returns
    -------
    Appraisal
        Ratios without unit, lengths in µm, radii in pixels and µm, resistances in Pa·s/m³.

    Raises
    ------
    RequestError
        When one of both is not what it should be, or they are not of the same images.
    PluginError
        When the viscosity law of the study is not installed.

    Notes
    -----
    A measured point belongs to the nearest true centreline within 45° of its direction and within the larger of 2 px
    and 0.75 true radii; how vessels are cut into segments does not matter. True resistances are the integral of
    μ(r) r⁻⁴ along the true vessel, by the law of the measurement (Sutera and Skalak, Annu Rev Fluid Mech 1993;25:1-20,
    doi:10.1146/annurev.fl.25.010193.000245, eq. 1, applied locally). Uncertainties are judged by the root mean square
    of error over stated uncertainty, and by how often the stated intervals hold the truth (JCGM 100:2008, 6.2.2).
    """
    state, named_dir = finished_study(results_dir), truth_dir
    if not truth_ids(truth_dir):
        truth_dir = truth_dir / "truth"  # the folder of phantoms itself was named
    ids = truth_ids(truth_dir)
    if not named_dir.is_dir():
        raise RequestError([Problem(file=str(named_dir), message="is no folder. Give the folder of phantoms.")])
    if not ids:
        message = (
            "holds no truth: neither IMAGE_ID/points.csv nor pictures of masks are in it. Give the folder of phantoms, "
            "or of drawn masks."
        )
        raise RequestError([Problem(file=str(named_dir), message=message)])
    finished = [image.image_id for image in state.images if image.status in (MEASURED, EMPTY)]
    common = [image_id for image_id in finished if image_id in ids]
    if not common:
        message = (
            f"holds truth of {few(sorted(ids))}, and {results_dir} has measured {few(finished)}: no image is "
            "in both. Give the truth of these images."
        )
        raise RequestError([Problem(file=str(truth_dir), message=message)])
    measured = [_bed(image_folder(results_dir, image_id), image_id, ours=True) for image_id in common]
    true = [_bed(truth_dir / image_id, image_id, ours=False) for image_id in common]
    problems = [problem for pair in zip(measured, true, strict=True) for problem in _mismatches(*pair)]
    if problems:
        raise RequestError(problems)
    blood, hematocrit = _blood(state.configuration, results_dir)
    found = [deviations(a, b, blood, hematocrit) for a, b in zip(measured, true, strict=True)]
    return sum_up(found, _notes(state, ids))


def write_appraisal(appraisal: Appraisal, out_dir: Path) -> None:
    """Write `appraisal_*.csv`, `appraisal.json`, `appraisal.txt` and `certificate.png` and `.svg`.

    Raises
    ------
    RequestError
        When the folder cannot be written.
    OSError
        When a file cannot be written.
    """
    probe(out_dir)
    frames = {
        "appraisal_radius": appraisal.radius,
        "appraisal_segments": appraisal.segments,
        "appraisal_networks": appraisal.networks,
        "appraisal_images": appraisal.images,
    }
    for table, frame in frames.items():
        write_atomically(out_dir / f"{table}.csv", frame_bytes(frame, APPRAISAL[table]))
    summary = {"schema_version": SCHEMA_VERSION, **appraisal.summary, "notes": appraisal.notes}
    write_atomically(out_dir / "appraisal.json", json_bytes(summary))
    write_atomically(out_dir / "appraisal.txt", ("\n".join(summary_lines(appraisal)) + "\n").encode())
    for file_format in ("png", "svg"):
        write_atomically(out_dir / f"certificate.{file_format}", draw_certificate(appraisal, file_format))


def finished_study(results_dir: Path) -> StudyState:
    """Read what became of each image of a measured study.

    Raises
    ------
    RequestError
        When the folder is none of results.
    """
    plain = read_json(results_dir / "study.json")
    if plain is None:
        message = "holds no study.json. Give the folder that was --out of measure; where it has parts, gather it first."
        raise RequestError([Problem(file=str(results_dir), message=message)])
    return state_from(plain, str(results_dir / "study.json"))


def truth_ids(folder: Path) -> set[str]:
    """Names of the images of which a folder holds true tables."""
    return {path.parent.name for table in NEEDED if table != "image" for path in folder.glob(f"*/{table}.csv")}


def few(ids: list[str]) -> str:
    """Name the first of some things, and how many more there are."""
    return ", ".join(ids[:3]) + (f" and {len(ids) - 3} more" if len(ids) > 3 else "") if ids else "nothing"


def _bed(folder: Path, image_id: str, *, ours: bool) -> Bed:
    problems: list[Problem] = []
    tables = {}
    for table in NEEDED:
        try:
            tables[table] = read_table(folder / f"{table}.csv", ours=ours)
        except RequestError as wrong:
            problems += wrong.problems
    if not problems and not ours:
        problems = _unsound(tables, folder)
    if problems:
        raise RequestError(problems)
    return Bed(image_id, tables)


def read_table(path: Path, *, ours: bool) -> pd.DataFrame:
    """Read a table: numbers as float64, texts as they stand, empty for none; other columns are left out.

    Raises
    ------
    RequestError
        When it is not there, is no table, or lacks columns.
    """
    columns = [column for column in COLUMNS[path.stem] if column.type != "boolean"]
    again = "Measure this image again." if ours else "Make the phantoms again, or give the folder as it was written."
    table = read_columns(path, path.stem, columns, again)
    needed = (*NEEDED[path.stem], *(NEEDED_OF_OURS if ours else NEEDED_OF_TRUTH).get(path.stem, ()))
    wanting = sorted(set(needed) - set(table.columns))
    if wanting or (path.stem == "image" and len(table) != 1):
        message = f"lacks {', '.join(wanting)}" if wanting else f"has {len(table)} rows where there is one image"
        raise RequestError([Problem(file=str(path), message=f"{message}. {again}")])
    return table


def _unsound(tables: Mapping[str, pd.DataFrame], folder: Path) -> list[Problem]:
    """What makes true tables no truth of one picture: numbers missing, ids that lead nowhere, places outside of it."""
    image, points, segments = tables["image"].iloc[0], tables["points"], tables["segments"]
    size = image[["width_px", "height_px"]].to_numpy(np.float64)
    if not (size > 0).all() or not image["pixel_size_um"] > 0:
        return [Problem(file=str(folder / "image.csv"), message="says no size or no pixel size. Give the true ones.")]
    place = points[["x_px", "y_px"]].to_numpy(np.float64)
    known = np.isfinite(points[["segment_id", "point", "s_um", "x_px", "y_px"]].to_numpy(np.float64)).all(axis=1)
    known &= (points["radius_um"] > 0).to_numpy() & (points["radius_um"] < np.inf).to_numpy()
    outside = known & ~((place >= -1) & (place <= size)).all(axis=1)
    per_segment = points["segment_id"].value_counts().reindex(segments["segment_id"], fill_value=0)
    strange = [
        Problem(file=str(folder / f"{name}.csv"), message=f"is of image {others[0]!r}. Give the folder of this image.")
        for name, table in tables.items()
        if "image_id" in table and (others := [held for held in table["image_id"].unique() if held != folder.name])
    ]
    checks = (
        ("points", ~known, "rows lack a number, or have a radius that is not above 0"),
        ("points", outside, f"points lie outside a picture of {size[0]:.0f} x {size[1]:.0f} px"),
        ("points", ~points["segment_id"].isin(segments["segment_id"]), "points are of segments not in segments.csv"),
        ("segments", segments["segment_id"].duplicated(), "segments have the id of another one"),
        ("segments", (per_segment < LEAST_POINTS_A_SEGMENT).to_numpy(), "segments have fewer than two points"),
        (
            "segments",
            ~segments["network_id"].isin(tables["networks"]["network_id"]),
            "segments are of networks not in networks.csv",
        ),
    )
    return strange + [
        Problem(
            file=str(folder / f"{table}.csv"),
            message=f"{int(np.sum(wrong))} of {len(wrong)} {what}. Give the folder as it was written.",
        )
        for table, wrong, what in checks
        if np.any(wrong)
    ]


def _mismatches(measured: Bed, true: Bed) -> list[Problem]:
    """What tells that truth and measurement are not of one picture."""
    ours, theirs = measured.tables["image"].iloc[0], true.tables["image"].iloc[0]
    problems = []
    size, true_size = ((int(one["width_px"]), int(one["height_px"])) for one in (ours, theirs))
    name = f"{true.image_id}/image.csv"
    if size != true_size:
        message = "the truth is of a picture of {} x {} px, measured was one of {} x {} px".format(*true_size, *size)
        problems.append(Problem(file=name, column="width_px, height_px", message=f"{message}. Give its own truth."))
    pixel_um, true_um = measured.pixel_size_um, true.pixel_size_um
    allowed = max(LARGEST_SCALE_DIFFERENCE, LARGEST_SCALE_Z * measured.pixel_size_rel_se)
    if not abs(pixel_um / true_um - 1) <= allowed:
        message = (
            f"the truth has pixels of {true_um:g} µm, measured was with {pixel_um:g} µm. Give the truth of this "
            "picture, or measure it with its pixel size."
        )
        problems.append(Problem(file=name, column="pixel_size_um", message=message))
    return problems


def _blood(configuration: Mapping[str, Any], results_dir: Path) -> tuple[Blood, float]:
    """Blood and hematocrit as the study was measured with them."""
    try:
        settings = blood_settings({name: entry["value"] for name, entry in configuration.items()})
        return make_blood(settings), float(settings.hematocrit)
    except (KeyError, TypeError, ValueError) as fault:
        message = f"does not say which blood was assumed ({fault}). Measure again with this version."
        raise RequestError([Problem(file=str(results_dir / "study.json"), message=message)]) from None


def _notes(state: StudyState, ids: set[str]) -> list[str]:
    notes = []
    for image in state.images:
        if image.image_id not in ids:
            notes.append(f"{image.image_id}: there is no truth of it; left out.")
        elif image.status not in (MEASURED, EMPTY):
            notes.append(f"{image.image_id}: is {image.status}; left out, and its vessels are not counted as missed.")
    wanting = sorted(ids - {image.image_id for image in state.images})
    notes += [f"{image_id}: has truth and was not measured; left out." for image_id in wanting]
    return notes
