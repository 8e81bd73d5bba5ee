"""A folder of results against the truth of its images: read both, hold them together, write what can be trusted."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from vasohm.errors import Problem, RequestError
from vasohm.flow.rheology import Blood, BloodSettings, make_blood
from vasohm.results.column import Column
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

TABLES = ("image", "segments", "points", "nodes", "crossings", "networks")
LARGEST_SCALE_DIFFERENCE = 0.01  # of pixel sizes, beyond which they are not of one picture
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
    state = _state(results_dir)
    if not any(truth_dir.glob("*/points.csv")) and (truth_dir / "truth").is_dir():
        truth_dir = truth_dir / "truth"  # the folder of phantoms itself was named
    truth_ids = _truth_ids(truth_dir)
    finished = [image.image_id for image in state.images if image.status in (MEASURED, EMPTY)]
    common = [image_id for image_id in finished if image_id in truth_ids]
    if not common:
        message = (
            f"holds truth of {_few(sorted(truth_ids))}, and {results_dir} has measured {_few(finished)}: no image is "
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
    return sum_up(found, _notes(state, truth_ids))


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


def _state(results_dir: Path) -> StudyState:
    plain = read_json(results_dir / "study.json")
    if plain is None:
        message = "holds no study.json. Give the folder that was --out of measure; where it has parts, gather it first."
        raise RequestError([Problem(file=str(results_dir), message=message)])
    return state_from(plain, str(results_dir / "study.json"))


def _truth_ids(truth_dir: Path) -> set[str]:
    found = {path.parent.name for path in truth_dir.glob("*/points.csv")}
    if not found:
        message = "holds no truth: there is no IMAGE_ID/points.csv in it. Give the folder of phantoms."
        raise RequestError([Problem(file=str(truth_dir), message=message)])
    return found


def _few(ids: list[str]) -> str:
    return ", ".join(ids[:3]) + (f" and {len(ids) - 3} more" if len(ids) > 3 else "") if ids else "nothing"


def _bed(folder: Path, image_id: str, *, ours: bool) -> Bed:
    return Bed(image_id, {table: _read(folder / f"{table}.csv", COLUMNS[table], ours=ours) for table in TABLES})


def _read(path: Path, columns: tuple[Column, ...], *, ours: bool) -> pd.DataFrame:
    """Read a table: numbers as float64, texts as they stand, empty for none; other columns are left out."""
    numbers = [column.name for column in columns if column.type in ("number", "integer")]
    texts = [column.name for column in columns if column.type in ("string", "list")]
    wanted = {*numbers, *texts}
    try:
        table = pd.read_csv(
            path,
            usecols=lambda name: name in wanted,
            dtype=dict.fromkeys(texts, str) | dict.fromkeys(numbers, np.float64),
            keep_default_na=False,
            na_values={name: [""] for name in numbers},
        )
    except (OSError, ValueError) as fault:
        message = f"cannot be read as a table of {path.stem}: {fault}. " + (
            "Measure this image again." if ours else "Make the phantoms again."
        )
        raise RequestError([Problem(file=str(path), message=message)]) from None
    needed = ("width_px", "height_px", "pixel_size_um") if path.stem == "image" else tuple(wanted)
    wanting = sorted(set(needed) - set(table.columns))
    if wanting or (path.stem == "image" and len(table) != 1):
        message = f"lacks {', '.join(wanting)}" if wanting else f"has {len(table)} rows where there is one image"
        raise RequestError([Problem(file=str(path), message=f"{message}. Give the folder as it was written.")])
    return table


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
        names = ("law", "hematocrit", "hematocrit_se", "plasma_viscosity_mpa_s", "viscosity_mpa_s", "parameters")
        settings = BloodSettings(**{name: configuration[f"blood.{name}"]["value"] for name in names})
        return make_blood(settings), float(settings.hematocrit)
    except (KeyError, TypeError, ValueError) as fault:
        message = f"does not say which blood was assumed ({fault}). Measure again with this version."
        raise RequestError([Problem(file=str(results_dir / "study.json"), message=message)]) from None


def _notes(state: StudyState, truth_ids: set[str]) -> list[str]:
    notes = []
    for image in state.images:
        if image.image_id not in truth_ids:
            notes.append(f"{image.image_id}: there is no truth of it; left out.")
        elif image.status not in (MEASURED, EMPTY):
            notes.append(f"{image.image_id}: is {image.status}; left out, and its vessels are not counted as missed.")
    wanting = sorted(truth_ids - {image.image_id for image in state.images})
    notes += [f"{image_id}: has truth and was not measured; left out." for image_id in wanting]
    return notes
