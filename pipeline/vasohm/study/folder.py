"""The results folder: whether it can be written, which study it belongs to, where things lie in it."""

import os
import secrets
from collections.abc import Iterable, Iterator
from pathlib import Path

from vasohm.errors import Problem, RequestError
from vasohm.results.encode import json_bytes
from vasohm.results.write import IMAGE_FILES, RECORD
from vasohm.study.state import read_json

OWNER = "run/study.json"  # names the study from its first run on, also where only parts have run


def image_folder(out: Path, image_id: str) -> Path:
    """Return where the results of one image lie."""
    return out / "images" / image_id


def run_folder(out: Path, part: str) -> Path:
    """Return where log, times and errors of a run lie: a part has its own."""
    return out / "run" / part if part else out / "run"


def probe(out: Path) -> None:
    """Create the results folder and write a file in it, before any work is done.

    Raises
    ------
    RequestError
        When it cannot be created or written, or a symbolic link in it could lead out of it.
    """
    path = out / f".probe-{secrets.token_hex(4)}"
    try:
        out.mkdir(parents=True, exist_ok=True)
        with path.open("xb") as stream:
            stream.write(b"vasohm")
            stream.flush()
            os.fsync(stream.fileno())
        path.unlink()
        _refuse_links(out)
    except OSError as fault:
        what = "is a file" if out.is_file() else (fault.strerror or str(fault))
        message = f"no results can be written here: {what}. Give --out a folder that can be written."
        raise RequestError([Problem(file=str(out), message=message)]) from None


def identity(out: Path) -> tuple[int, int] | None:
    """Return what stays of a folder when its name changes; None where it is not there."""
    try:
        status = out.stat()
    except OSError:
        return None
    return status.st_dev, status.st_ino


def refuse_other_study(out: Path, study: str) -> None:
    """Refuse a folder that holds the results of a study with another name.

    Raises
    ------
    RequestError
        Naming the other study.
    """
    for owner in _owners(out):
        if owner != study:
            message = (
                f"holds the results of study {owner!r}, not of {study!r}. Give --out another folder, or --force to "
                "take this one over (images of the other study are removed)."
            )
            raise RequestError([Problem(file=str(out), message=message)])


def refuse_own_inputs(out: Path, study: str, inputs: Iterable[Path]) -> None:
    """Refuse a folder that holds what is to be measured, unless results of this study lie in it already.

    Raises
    ------
    RequestError
        Naming the first input that lies there.
    """
    place = out.resolve()
    lies_there = next((path for path in inputs if path.parent.resolve() in (place, place / "images")), None)
    if lies_there is None or study in _owners(out):
        return
    message = f"holds the study's own {lies_there.name}. Give --out a folder of its own, as in {out / 'results'}."
    raise RequestError([Problem(file=str(out), message=message)])


def claim(out: Path, study: str, image_ids: frozenset[str]) -> None:
    """Write the study's name into the folder; of another study, whose folder is taken over, nothing stays."""
    if any(owner != study for owner in _owners(out)):
        for folder in (out / "images").glob("*"):
            if folder.name not in image_ids:
                remove_image(folder)
        for stale in (out / OWNER, out / "study.json", *(out / "parts").glob("*-of-*.json")):
            stale.unlink(missing_ok=True)
    owner = out / OWNER
    owner.parent.mkdir(parents=True, exist_ok=True)
    fresh = owner.with_name(f".study-{secrets.token_hex(4)}")
    fresh.write_bytes(json_bytes({"study": study}))
    try:
        os.link(fresh, owner)  # exclusive and whole at once, where a rename would replace another's
    except FileExistsError:
        pass
    finally:
        fresh.unlink()
    refuse_other_study(out, study)


def remove_image(folder: Path) -> None:
    """Remove an image's results, the record first; files that are not ours stay."""
    if folder.is_symlink() or not folder.is_dir():
        return
    for name in (RECORD, *sorted(IMAGE_FILES - {RECORD})):
        (folder / name).unlink(missing_ok=True)
    if not any(folder.iterdir()):
        folder.rmdir()


def _owners(out: Path) -> Iterator[str]:
    for path in (out / OWNER, out / "study.json", *sorted((out / "parts").glob("*-of-*.json"))):
        content = read_json(path)
        if content is not None and "study" in content:
            yield str(content["study"])


def _refuse_links(out: Path) -> None:
    """Refuse links where this program writes; those in the place of an image's folder or file are replaced."""
    places = [place for name in ("images", "run", "parts") if (place := out / name).is_symlink()]
    if not places:
        places = sorted(path for path in (out / "run").rglob("*") if path.is_symlink())
    message = "is a symbolic link, where only folders and files of this program's own may be. Remove it."
    if places:
        raise RequestError([Problem(file=str(place), message=message) for place in places])
