"""From tables to files: an image's folder appears whole or not at all, with the record beside the tables."""

import errno
import hashlib
import json
import os
import re
import secrets
import shutil
import time
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

from vasohm.results.colouring import ColourBy
from vasohm.results.column import Column
from vasohm.results.columns_images import DISC
from vasohm.results.encode import frame_pieces, graphml_bytes, json_bytes, mask_bytes
from vasohm.results.image_page import image_page
from vasohm.results.overlay import draw_for_print, draw_overlay
from vasohm.results.schema import COLUMNS, OWN_IMAGE_NAMES, SCHEMA_VERSION, image_columns
from vasohm.results.tables import ImageTables
from vasohm.results.thumbnail import draw_thumbnail

RECORD = "record.json"
PARTIAL_SUFFIX = ".partial"  # of files and folders that a run has begun and not finished
RENAME_TRIES = 5  # a virus scanner or an open viewer can hold a file for a moment
RENAME_WAIT_S = 0.2
IMAGE_FILES = frozenset(
    [f"{table}.csv" for table in COLUMNS if table != "failures"]
    + ["graph.graphml", "mask.tif", "fov.tif", "overlay.png", "overlay.pdf", "thumbnail.jpg", "index.html", RECORD]
)


@dataclass(frozen=True, slots=True)
class EncodedFile:
    """A file's bytes, piece by piece as they are wanted; `rows` is None where it is no table."""

    pieces: Iterable[bytes]
    rows: int | None = None


def write_atomically(path: Path, content: bytes) -> None:
    """Write a file so that it is at no moment half there: a new one beside it, then a rename."""
    partial = path.with_name(f".{path.name}.{tag()}{PARTIAL_SUFFIX}")
    try:
        _write_durably(partial, content)
        replace_durably(partial, path)
    except BaseException:
        partial.unlink(missing_ok=True)
        raise


def replace_durably(partial: Path, path: Path) -> None:
    """Rename a file over another in the same folder and make the rename last."""
    for attempt in range(RENAME_TRIES):
        try:
            partial.replace(path)
            break
        except PermissionError:
            if attempt == RENAME_TRIES - 1:
                raise
            time.sleep(RENAME_WAIT_S)
    _sync_folder(path.parent)


def write_image(
    tables: ImageTables,
    folder: Path,
    record: Mapping[str, Any],
    *,
    overlay: bool,
    colour: ColourBy = "radius",
    for_print: bool = False,
) -> None:
    """Write all files of one image; the folder is complete when its record is there.

    Parameters
    ----------
    tables : what was measured.
    folder : `.../images/IMAGE_ID`; an older one is replaced, files of other names in it are kept.
    record : what the caller knows: hash of inputs and settings, versions, warnings. Our own keys are schema_version,
        image_id, status, notes and files.
    overlay : whether the picture is drawn.
    colour : what colours its segments.
    for_print : whether it is drawn for print too.

    Raises
    ------
    OSError : the folder cannot be written; nothing of it is left half done under its own name.
    ValueError : a key of `record` is one of our own, or a value that JSON cannot hold.
    """
    own: dict[str, Any] = {
        "schema_version": SCHEMA_VERSION,
        "image_id": tables.image_id,
        "status": tables.status,
        "notes": tables.notes,
        "files": {},
    }
    taken = sorted(own.keys() & record.keys())
    if taken:
        msg = f"record of image {tables.image_id}: keys {', '.join(taken)} are written here; give them other names."
        raise ValueError(msg)
    folder.parent.mkdir(exist_ok=True)
    partial = folder.with_name(f".{folder.name}.{tag()}{PARTIAL_SUFFIX}")
    partial.mkdir()
    try:
        for name, file in _encode(tables, colour, overlay=overlay, for_print=for_print):
            own["files"][name] = _write_pieces(partial / name, file)
        _write_durably(partial / RECORD, json_bytes({**own, **record}))
        _sync_folder(partial)
        _put_folder(partial, folder)
    finally:
        shutil.rmtree(partial, ignore_errors=True)


def read_record(folder: Path) -> dict[str, Any] | None:
    """Read an image's record, or None where there is none that can be read."""
    try:
        record = json.loads((folder / RECORD).read_bytes())
    except (OSError, ValueError):
        return None
    return record if isinstance(record, dict) else None


def record_is_whole(folder: Path) -> bool:
    """Tell whether every file that the record lists is there, byte for byte."""
    record = read_record(folder)
    if record is None or folder.is_symlink() or record.get("schema_version") != SCHEMA_VERSION:
        return False
    files = record.get("files")
    if not isinstance(files, dict) or not files:
        return False
    try:
        return all((folder / name).stat().st_size == held["bytes"] for name, held in files.items()) and all(
            hashlib.sha256((folder / name).read_bytes()).hexdigest() == held["sha256"] for name, held in files.items()
        )
    except (OSError, KeyError, TypeError):
        return False


def remove_partials(parent: Path, name: str = "") -> None:
    """Remove what was left unfinished in a folder by runs or workers that have died.

    Parameters
    ----------
    parent : where it lies; no other run may be writing there, unless `name` is given.
    name : of a file or folder, to remove only what would have become it.
    """
    wanted = re.compile(rf"\.{re.escape(name) if name else '.*'}\.\d+-[0-9a-f]+{re.escape(PARTIAL_SUFFIX)}")
    for path in parent.glob(f".*{PARTIAL_SUFFIX}"):
        if not wanted.fullmatch(path.name):
            continue
        if path.is_dir() and not path.is_symlink():
            shutil.rmtree(path, ignore_errors=True)
        else:
            path.unlink(missing_ok=True)


def _encode(
    tables: ImageTables, colour: ColourBy, *, overlay: bool, for_print: bool
) -> Iterator[tuple[str, EncodedFile]]:
    """Make every file but the record, one at a time: all at once would need more memory than the measurement."""
    for table, frame in tables.tables.items():
        if table == "scenarios" and frame.empty:
            continue
        columns = _image_table_columns(tables) if table == "image" else COLUMNS[table]
        yield f"{table}.csv", EncodedFile(frame_pieces(frame, columns), len(frame))
    yield "graph.graphml", EncodedFile([graphml_bytes(tables.graph)])
    yield "mask.tif", EncodedFile([mask_bytes(tables.mask, tables.pixel_size_um)])
    yield "fov.tif", EncodedFile([mask_bytes(tables.fov, tables.pixel_size_um)])
    if overlay:
        yield "overlay.png", EncodedFile([draw_overlay(tables, colour)])
    if for_print:
        yield "overlay.pdf", EncodedFile([draw_for_print(tables, colour)])
    yield "thumbnail.jpg", EncodedFile([draw_thumbnail(tables, colour)])
    yield "index.html", EncodedFile([image_page(tables, colour if overlay else None).encode()])


def _image_table_columns(tables: ImageTables) -> tuple[Column, ...]:
    carried = [str(name) for name in tables.image if name not in OWN_IMAGE_NAMES]
    return image_columns(carried, with_disc=DISC[0].name in tables.image)


def _write_pieces(path: Path, file: EncodedFile) -> dict[str, Any]:
    """Write a file and return what the record says of it."""
    digest, n_bytes = hashlib.sha256(), 0
    with path.open("xb") as stream:
        for piece in file.pieces:
            stream.write(piece)
            digest.update(piece)
            n_bytes += len(piece)
        sync_file(stream)
    held: dict[str, Any] = {"sha256": digest.hexdigest(), "bytes": n_bytes}
    if file.rows is not None:
        held["rows"] = file.rows
    return held


def _put_folder(partial: Path, folder: Path) -> None:
    """Give the finished folder its name; into an older one files go one by one, the record out first, in last."""
    if folder.is_symlink():
        folder.unlink()
    try:
        partial.rename(folder)
    except OSError as error:
        if error.errno not in (errno.ENOTEMPTY, errno.EEXIST, errno.EACCES) or not folder.is_dir():
            raise
    else:
        _sync_folder(folder.parent)
        return
    (folder / RECORD).unlink(missing_ok=True)
    _sync_folder(folder)
    names = sorted((path.name for path in partial.iterdir()), key=lambda name: (name == RECORD, name))
    for stale in IMAGE_FILES.difference(names):
        (folder / stale).unlink(missing_ok=True)
    for name in names:
        replace_durably(partial / name, folder / name)


def _write_durably(path: Path, content: bytes) -> None:
    with path.open("xb") as file:
        file.write(content)
        sync_file(file)


def sync_file(file: IO[bytes]) -> None:
    """Bring what was written to a file onto the disk."""
    file.flush()
    os.fsync(file.fileno())


def _sync_folder(folder: Path) -> None:
    """Make renames in a folder survive a power cut, where the system knows how."""
    if os.name == "nt":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    except OSError as error:
        if error.errno not in (errno.EINVAL, errno.ENOTSUP):
            raise
    finally:
        os.close(handle)


def tag() -> str:
    """Two processes that write the same name at once must not share a partial file."""
    return f"{os.getpid()}-{secrets.token_hex(4)}"
