"""Results against masks that a person drew: find each image's mask, compare inside the field of view, write scores."""

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import reduce
from operator import add
from pathlib import Path

import pandas as pd

from vasohm.arrays import BoolArray
from vasohm.cohorts.matching import track
from vasohm.errors import Problem, RequestError, VasohmError
from vasohm.image.read import read_mask
from vasohm.results.columns_appraisal import APPRAISAL
from vasohm.results.encode import frame_bytes
from vasohm.results.write import write_atomically
from vasohm.study.annotation import Agreement, agreement
from vasohm.study.appraise import few, finished_study, read_table, truth_ids
from vasohm.study.folder import image_folder, probe
from vasohm.study.outcome import EMPTY, MEASURED

MASK_SUFFIXES = frozenset((".png", ".tif", ".tiff", ".bmp", ".gif", ".jpg", ".jpeg"))
MOSTLY_VESSEL = 0.5  # of the field of view: a drawn mask with more is likely black for white


@dataclass(frozen=True, slots=True, eq=False)
class MaskAppraisal:
    """How far measured masks agree with drawn ones; `table` has the columns of `appraisal_masks.csv`."""

    table: pd.DataFrame  # one row an image, then one for all together with an empty image_id
    notes: tuple[str, ...]


def holds_masks(folder: Path) -> bool:
    """Whether a folder of truth holds drawn masks and no tables."""
    return not truth_ids(folder) and not truth_ids(folder / "truth") and bool(_images_in(folder))


def appraise_masks(results_dir: Path, mask_dir: Path) -> MaskAppraisal:
    """Tell how far the vessels that were found agree with those that a person drew.

    Parameters
    ----------
    results_dir : Path
        Folder that was `--out` of `measure`.
    mask_dir : Path
        Folder with one picture an image: named by its image_id, or by it and a suffix that all have in common
        (`IMAGE_ID_drawn.png`); nonzero is vessel.

    Raises
    ------
    RequestError
        When no image has a mask, or a mask is of another size, has greys between black and white, or is empty; with
        all problems at once.
    """
    state = finished_study(results_dir)
    finished = [image.image_id for image in state.images if image.status in (MEASURED, EMPTY)]
    paths, notes = _masks_of(finished, mask_dir)
    notes += [
        f"{image.image_id}: is {image.status}; left out."
        for image in state.images
        if image.status not in (MEASURED, EMPTY)
    ]
    found: dict[str, Agreement] = {}
    problems: list[Problem] = []
    for image_id, path in paths.items():
        try:
            found[image_id] = _held_against(image_folder(results_dir, image_id), path)
        except RequestError as wrong:
            problems += wrong.problems
        except VasohmError as wrong:
            problems.append(Problem(file=str(path.parent), message=str(wrong)))
    if problems:
        raise RequestError(problems)
    notes += [
        f"{image_id}: {100 * share:.0f} % of the field of view is drawn as vessel; are black and white swapped?"
        for image_id, held in found.items()
        if (share := _drawn_share(held)) > MOSTLY_VESSEL
    ]
    rows = [_row(image_id, held) for image_id, held in found.items()]
    rows.append(_row("", reduce(add, found.values())))
    columns = [column.name for column in APPRAISAL["appraisal_masks"]]
    return MaskAppraisal(pd.DataFrame(rows)[columns], tuple(notes))


def write_mask_appraisal(appraisal: MaskAppraisal, out_dir: Path, lines: Sequence[str]) -> None:
    """Write `appraisal_masks.csv` and what is printed as `appraisal_masks.txt`.

    Raises
    ------
    RequestError
        When the folder cannot be written.
    OSError
        When a file cannot be written.
    """
    probe(out_dir)
    content = frame_bytes(appraisal.table, APPRAISAL["appraisal_masks"])
    write_atomically(out_dir / "appraisal_masks.csv", content)
    write_atomically(out_dir / "appraisal_masks.txt", ("\n".join(lines) + "\n").encode())


def _images_in(folder: Path) -> list[Path]:
    if not folder.is_dir():
        return []
    return sorted(path for path in folder.iterdir() if path.suffix.lower() in MASK_SUFFIXES and path.is_file())


def _masks_of(ids: Sequence[str], mask_dir: Path) -> tuple[dict[str, Path], list[str]]:
    """The mask of each image, by the suffix with which most images have one, and what is left out.

    Raises
    ------
    RequestError
        When no image has a mask, or two sets of masks lie in the folder.
    """
    files = _images_in(mask_dir)
    by_stem: dict[str, list[Path]] = {}
    for path in files:
        by_stem.setdefault(path.stem, []).append(path)
    suffixes = Counter(stem[len(i) :] for i in ids for stem in by_stem if stem.startswith(i))
    most = max(suffixes.values(), default=0)
    if not most:
        message = (
            f"holds {few([path.name for path in files])}, and measured were {few(list(ids))}: no mask is named by an "
            "image. Name each IMAGE_ID.png, or all with one suffix."
        )
        raise RequestError([Problem(file=str(mask_dir), message=message)])
    best = [suffix for suffix, n in suffixes.items() if n == most]
    suffix = "" if "" in best else best[0]
    if len(best) > 1 and suffix:
        message = (
            f"holds more than one set of masks ({few([f'IMAGE_ID{one}' for one in sorted(best)])}). Give a folder with "
            "one."
        )
        raise RequestError([Problem(file=str(mask_dir), message=message)])
    twice = [path.name for i in ids for path in by_stem.get(i + suffix, []) if len(by_stem[i + suffix]) > 1]
    if twice:
        message = f"holds more than one mask of an image ({few(twice)}). Leave one."
        raise RequestError([Problem(file=str(mask_dir), message=message)])
    paths = {i: by_stem[i + suffix][0] for i in ids if i + suffix in by_stem}
    notes = [f"{i}: there is no mask {i}{suffix} of it; left out." for i in ids if i not in paths]
    used = set(paths.values())
    notes += [f"{path.name}: is of no measured image; left out." for path in files if path not in used]
    return paths, notes


def _held_against(folder: Path, path: Path) -> Agreement:
    """What one measured image has in common with its drawn mask."""
    image = read_table(folder / "image.csv", ours=True)
    shape = int(image["height_px"].iloc[0]), int(image["width_px"].iloc[0])
    drawn = read_mask(path, shape)
    fov = _field_of_view(folder, shape)
    if not (drawn & fov).any():
        message = "holds no vessel inside the field of view: all its pixels are 0. Leave it out, or draw the vessels."
        raise RequestError([Problem(file=str(path), message=message)])
    points, segments = (read_table(folder / f"{table}.csv", ours=True) for table in ("points", "segments"))
    line = track(points, segments, float(image["pixel_size_um"].iloc[0]), reaching=False)
    measured = read_mask(folder / "mask.tif", shape)
    return agreement(measured, drawn, fov, (line.x_px, line.y_px, line.weight_px))


def _field_of_view(folder: Path, shape: tuple[int, int]) -> BoolArray:
    path = folder / "fov.tif"
    if not path.is_file():
        message = "is not there: this image was measured by an earlier version. Measure it again."
        raise RequestError([Problem(file=str(path), message=message)])
    return read_mask(path, shape)


def _drawn_share(held: Agreement) -> float:
    inside = held.n_both + held.n_measured_only + held.n_drawn_only + held.n_neither
    return (held.n_both + held.n_drawn_only) / inside


def _row(image_id: str, held: Agreement) -> Mapping[str, object]:
    return {
        "image_id": image_id,
        "n_view_px": held.n_both + held.n_measured_only + held.n_drawn_only + held.n_neither,
        "n_drawn_px": held.n_both + held.n_drawn_only,
        "n_measured_px": held.n_both + held.n_measured_only,
        "n_both_px": held.n_both,
        **held.scores,
    }
