"""From the images' folders to the study's own files: gathered tables, failures, data package, references."""

import csv
import hashlib
import re
import shutil
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path
from typing import IO, Any

from vasohm.results.cells import guard_text
from vasohm.results.column import Column
from vasohm.results.columns_images import DISC
from vasohm.results.encode import csv_bytes, json_bytes
from vasohm.results.markup import ASSETS, PLOTTING
from vasohm.results.methods import bibtex
from vasohm.results.schema import (
    COLUMNS,
    GATHERED,
    OWN_IMAGE_NAMES,
    PRIMARY_KEYS,
    SCHEMA_VERSION,
    TABLE_MEANING,
    image_columns,
    table_schema,
)
from vasohm.results.write import PARTIAL_SUFFIX, replace_durably, sync_file, tag, write_atomically

PACKAGE_PROFILE = "https://datapackage.org/profiles/2.0/datapackage.json"
OWN_SCRIPTS = ("image.js", "study.js")
PER_IMAGE_TABLES = ("nodes", "points", "scales")  # too many rows to gather: described where they are


@dataclass(frozen=True, slots=True)
class Failure:
    """An image that could not be measured; `error` is the code of a VasohmError or a word for what else happened."""

    image_id: str
    stage: str
    error: str
    message: str


@dataclass(frozen=True, slots=True)
class StudyTable:
    """One table at the root of a study's results."""

    file: str
    table: str
    columns: tuple[Column, ...]
    size: int
    sha256: str


def gather_tables(out_dir: Path, image_ids: Sequence[str]) -> tuple[StudyTable, ...]:
    """Join the images' tables into those at the root, row after row in the given order.

    Parameters
    ----------
    out_dir : root of the results; the images' folders are `images/IMAGE_ID`.
    image_ids : images that are measured or empty, in the order of the sheet.

    Returns
    -------
    What was written. `scenarios_all.csv` is written where an image has scenarios, and else removed.

    Raises
    ------
    OSError : a table cannot be read or written.
    ValueError : a table's columns are not those of this version.
    """
    written = []
    for file, table in GATHERED.items():
        sources = [out_dir / "images" / image_id / f"{table}.csv" for image_id in image_ids]
        if table == "scenarios":
            sources = [source for source in sources if source.exists()]
            if not sources:
                (out_dir / file).unlink(missing_ok=True)
                continue
        if table == "image":
            written.append(_gather_images(out_dir / file, sources))
        else:
            written.append(_gather_alike(out_dir / file, table, sources))
    return tuple(written)


def write_failures(out_dir: Path, failures: Sequence[Failure]) -> StudyTable:
    """Write failures.csv, one row a failed image in the given order; no failure leaves the header alone."""
    rows = [tuple(guard_text(text) for text in (f.image_id, f.stage, f.error, f.message)) for f in failures]
    content = csv_bytes(rows, [column.name for column in COLUMNS["failures"]])
    write_atomically(out_dir / "failures.csv", content)
    digest = hashlib.sha256(content).hexdigest()
    return StudyTable("failures.csv", "failures", COLUMNS["failures"], len(content), digest)


def write_datapackage(out_dir: Path, name: str, tables: Sequence[StudyTable], image_ids: Sequence[str]) -> None:
    """Describe every table as a Data Package (datapackage.org, version 2), units under the extra key `unit`.

    Parameters
    ----------
    out_dir : root of the results.
    name : the study's name.
    tables : those at the root.
    image_ids : images with a folder; their nodes and points are described as one table each, in many files.
    """
    resources = [_resource(table) for table in tables]
    for table in PER_IMAGE_TABLES:
        paths = [f"images/{image_id}/{table}.csv" for image_id in image_ids]
        if paths:
            resources.append(
                {
                    "name": table,
                    "type": "table",
                    "path": paths if len(paths) > 1 else paths[0],
                    "description": TABLE_MEANING[table],
                    **_format(COLUMNS[table], table),
                }
            )
    package = {
        "$schema": PACKAGE_PROFILE,
        "name": re.sub(r"[^a-z0-9]+", "-", name.lower()).strip("-") or "study",
        "title": name,
        "schema_version": SCHEMA_VERSION,
        "resources": resources,
    }
    write_atomically(out_dir / "datapackage.json", json_bytes(package))


def write_study_json(out_dir: Path, content: Mapping[str, Any]) -> None:
    """Write study.json: configuration, versions, status of every image; nothing that differs between equal runs."""
    write_atomically(out_dir / "study.json", json_bytes({"schema_version": SCHEMA_VERSION, **content}))


def write_references(out_dir: Path, references: Sequence[str]) -> None:
    """Write references.bib, the sources that the run's methods lean on."""
    write_atomically(out_dir / "references.bib", bibtex(references).encode())


def write_scripts(out_dir: Path) -> None:
    """Write the scripts of the pages, the plotting library's and our own, that all pages share.

    Raises
    ------
    OSError : they cannot be read where they are installed, or not written.
    """
    folder = out_dir / ASSETS
    folder.mkdir(exist_ok=True)
    plotting = files("bokeh").joinpath("server", "static", "js")
    own = files("vasohm.results").joinpath("scripts")
    for place, names in ((plotting, PLOTTING), (own, OWN_SCRIPTS)):
        for name in names:
            write_atomically(folder / name, place.joinpath(name).read_bytes())


def _resource(table: StudyTable) -> dict[str, Any]:
    return {
        "name": table.file.removesuffix(".csv"),
        "type": "table",
        "path": table.file,
        "description": TABLE_MEANING[table.table],
        "bytes": table.size,
        "hash": f"sha256:{table.sha256}",
        **_format(table.columns, table.table),
    }


def _format(columns: Sequence[Column], table: str) -> dict[str, Any]:
    return {
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "schema": table_schema(columns, PRIMARY_KEYS.get(table, ())),
    }


def _gather_images(path: Path, sources: Sequence[Path]) -> StudyTable:
    """Join tables whose columns may differ: only some images have a disc. Cells are copied as they stand."""
    rows = [row for source in sources for row in _read_rows(source)]
    present = list(dict.fromkeys(name for row in rows for name in row))
    columns = image_columns(
        [name for name in present if name not in OWN_IMAGE_NAMES], with_disc=DISC[0].name in present
    )
    names = [column.name for column in columns]
    content = csv_bytes([[row.get(name, "") for name in names] for row in rows], names)
    write_atomically(path, content)
    return StudyTable(path.name, "image", columns, len(content), hashlib.sha256(content).hexdigest())


def _read_rows(source: Path) -> Iterator[dict[str, str]]:
    with source.open(encoding="utf-8", newline="") as file:
        yield from csv.DictReader(file, strict=True)


def _gather_alike(path: Path, table: str, sources: Sequence[Path]) -> StudyTable:
    """Join tables of equal columns without holding them in memory."""
    header = csv_bytes([], [column.name for column in COLUMNS[table]])
    partial = path.with_name(f".{path.name}.{tag()}{PARTIAL_SUFFIX}")
    try:
        with partial.open("xb") as joined:
            joined.write(header)
            for source in sources:
                _append_rows(joined, source, header)
            size = joined.tell()
            sync_file(joined)
        with partial.open("rb") as file:
            digest = hashlib.file_digest(file, "sha256").hexdigest()
        replace_durably(partial, path)
    except BaseException:
        partial.unlink(missing_ok=True)
        raise
    return StudyTable(path.name, table, COLUMNS[table], size, digest)


def _append_rows(joined: IO[bytes], source: Path, header: bytes) -> None:
    with source.open("rb") as file:
        if file.readline() != header:
            msg = f"{source}: the columns are not those of this version. Measure this image again."
            raise ValueError(msg)
        shutil.copyfileobj(file, joined)
