"""What a comparison reads of measured results: gathered tables, and the vessels around each optic disc."""

from collections.abc import Collection, Mapping
from pathlib import Path

import numpy as np
import pandas as pd

from vasohm.cohorts.zone import POINTS, SEGMENTS, zone_rows
from vasohm.errors import Problem, RequestError
from vasohm.results.cells import unguard_text
from vasohm.results.columns_cohorts import ZONE
from vasohm.results.columns_images import DISC
from vasohm.results.schema import COLUMNS, GATHERED, outcome_columns
from vasohm.study.folder import image_folder
from vasohm.study.table_file import read_columns

_OF_DISC = {column.name for column in DISC}


def read_outcome_tables(results_dir: Path, needed: Mapping[str, Collection[str]]) -> dict[str, pd.DataFrame]:
    """Read columns of the gathered tables.

    Parameters
    ----------
    results_dir : root of the results.
    needed : columns by table; those of an optic disc are empty where no image has one.

    Raises
    ------
    RequestError
        A table is not there, cannot be read, or lacks a column.
    """
    files = {table: file for file, table in GATHERED.items()}
    return {
        table: _read(results_dir / files[table], table, names, "Gather the results again.")
        for table, names in needed.items()
    }


def read_zone(results_dir: Path, images: pd.DataFrame) -> pd.DataFrame:
    """Sum up the vessels around the optic disc of each image that has one.

    Parameters
    ----------
    results_dir : root of the results.
    images : one row an image, with its disc and zone.

    Returns
    -------
    DataFrame
        The table `zone`, in the order of the images.

    Raises
    ------
    RequestError
        A table of an image cannot be read.
    """
    found = []
    for _, image in images[np.isfinite(images["zone_outer_px"]) & np.isfinite(images["disc_x_px"])].iterrows():
        folder = image_folder(results_dir, str(image["image_id"]))
        again = "Measure this image again."
        points = _read(folder / "points.csv", "points", POINTS, again)
        segments = _read(folder / "segments.csv", "segments", SEGMENTS, again)
        found.append(zone_rows(image, points, segments))
    empty = pd.DataFrame({c.name: pd.Series(dtype=object if c.type == "string" else np.float64) for c in ZONE})
    filled = [rows for rows in found if not rows.empty]
    return pd.concat(filled, ignore_index=True) if filled else empty


def _read(path: Path, table: str, needed: Collection[str], again: str) -> pd.DataFrame:
    """Read columns of a table: numbers as float64, texts as they stand, empty for none."""
    columns = outcome_columns(table) if table == "image" else COLUMNS[table]
    wanted = [column for column in columns if column.name in needed]
    frame = read_columns(path, table, wanted, again)
    texts = [column.name for column in wanted if column.type not in ("number", "integer")]
    absent = {column.name for column in wanted} - set(frame.columns)
    if absent - _OF_DISC:
        message = f"lacks {', '.join(sorted(absent - _OF_DISC))}. {again}"
        raise RequestError([Problem(file=str(path), message=message)])
    frame = frame.assign(**{name: frame[name].map(unguard_text) for name in texts if name not in absent})
    return frame.assign(**{name: "" if name in texts else np.nan for name in sorted(absent)})
