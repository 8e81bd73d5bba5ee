"""Parts of a study that run apart: which images are in which, and what each leaves behind for `gather`."""

import hashlib
import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from vasohm.errors import Problem, RequestError
from vasohm.results.encode import json_bytes
from vasohm.results.write import write_atomically
from vasohm.study.ending import EXIT_OK, EXIT_SOME_FAILED
from vasohm.study.outcome import PENDING
from vasohm.study.state import ImageState, StudyState, read_json, state_from

_ALIKE = ("study", "configuration", "versions", "sheet")
# Of sbatch(1) and qsub(1): number of the task, first and last of its array, and what shows that none is left out.
_ARRAYS = (
    ("SLURM_ARRAY_TASK_ID", "SLURM_ARRAY_TASK_MIN", "SLURM_ARRAY_TASK_MAX", "SLURM_ARRAY_TASK_COUNT"),
    ("SGE_TASK_ID", "SGE_TASK_FIRST", "SGE_TASK_LAST", "SGE_TASK_STEPSIZE"),
)
_NAME = re.compile(r"([1-9]\d{0,5})-of-([1-9]\d{0,5})")


@dataclass(frozen=True, slots=True)
class Part:
    """Part `number` (from 1) of `of`."""

    number: int
    of: int

    def __str__(self) -> str:
        return f"{self.number}-of-{self.of}"

    def takes(self, image_id: str) -> bool:
        """Tell whether an image is in this part: by its id alone, so that other images never move it."""
        return int.from_bytes(hashlib.sha256(image_id.encode()).digest()[:8]) % self.of == self.number - 1


def parse_part(text: str, environ: Mapping[str, str]) -> Part:
    """Read ``K/N``, or take ``auto`` from the batch system that runs this process as one task of an array.

    Parameters
    ----------
    text : str
        What the command says.
    environ : Mapping of str to str
        Environment variables.

    Raises
    ------
    RequestError
        Unless 1 <= K <= N, or where ``auto`` is no task of an array that counts from 1 in steps of 1.
    """
    if text == "auto":
        return _array_part(environ)
    match = _NAME.fullmatch(text.replace("/", "-of-", 1))
    if match is None or int(match[1]) > int(match[2]):
        message = f"{text!r} is no part. Give K/N with 1 <= K <= N, such as 2/8."
        raise RequestError([Problem(file="--part", value=text, message=message)])
    return Part(int(match[1]), int(match[2]))


def _array_part(environ: Mapping[str, str]) -> Part:
    """Return the part of an array's task; an array of some of the numbers only would be taken for a smaller split."""
    for number_name, first_name, last_name, gaps_name in _ARRAYS:
        number = environ.get(number_name, "")
        if not number.isdecimal():  # absent, or "undefined" outside an array
            continue
        first, last, gaps = (environ.get(name, "") for name in (first_name, last_name, gaps_name))
        without_gaps = gaps == (last if gaps_name.endswith("COUNT") else "1")
        if first == "1" and without_gaps and last.isdecimal() and 1 <= int(number) <= int(last):
            return Part(int(number), int(last))
        message = (
            f"auto needs an array of all numbers from 1 to N; this is {first or '?'} to {last or '?'}, or has gaps. "
            f"To run some parts of N again, give --part {number}/N."
        )
        raise RequestError([Problem(file="--part", value="auto", message=message)])
    message = "auto finds no array task of Slurm or Grid Engine around it. Give K/N, as in --part $PBS_ARRAY_INDEX/8."
    raise RequestError([Problem(file="--part", value="auto", message=message)])


def write_part(out: Path, part: Part, state: StudyState, sheet: tuple[str, ...]) -> None:
    """Leave the state of a part's images, and the ids of the whole sheet, in ``parts/K-of-N.json``."""
    folder = out / "parts"
    folder.mkdir(exist_ok=True)
    write_atomically(folder / f"{part}.json", json_bytes(state.plain() | {"sheet": list(sheet)}))


def remove_parts(out: Path) -> None:
    """Remove what parts left, once a whole run has superseded it."""
    for path in _part_files(out):
        path.unlink(missing_ok=True)
    if (out / "parts").is_dir() and not any((out / "parts").iterdir()):
        (out / "parts").rmdir()


def read_state(out: Path) -> tuple[StudyState | None, tuple[Part, ...]]:
    """Read the state of a results folder, put together from its parts where it has any.

    Returns
    -------
    state : StudyState or None
        None where nothing has run; images of missing parts are pending.
    missing : tuple of Part
        Parts that have not ended yet.

    Raises
    ------
    RequestError
        When parts of different splits or of different studies are mixed.
    """
    files = _part_files(out)
    if not files:
        plain = read_json(out / "study.json")
        return (None if plain is None else state_from(plain, "study.json")), ()
    splits = sorted({part.of for part in files.values()})
    if len(splits) > 1:
        message = (
            f"parts of {' and of '.join(map(str, splits))} are mixed. Delete those of the split that is not meant."
        )
        raise RequestError([Problem(file="parts", message=message)])
    read = {path: read_json(path) or {} for path in files}
    first, *others = read
    for other in others:
        unlike = [name for name in _ALIKE if _compared(read[first], name) != _compared(read[other], name)]
        if unlike:
            message = (
                f"differs from {first.name} in {', '.join(unlike)}. Run both parts again with the same study file."
            )
            raise RequestError([Problem(file=f"parts/{other.name}", message=message)])
    missing = tuple(
        part for number in range(1, splits[0] + 1) if (part := Part(number, splits[0])) not in files.values()
    )
    return _joined(read, missing), missing


def _compared(plain: Mapping[str, Any], name: str) -> Any:
    """Return what parts must agree in: not in what an image may take, which is raised for the part that needs it."""
    held = plain.get(name)
    if name != "configuration" or not isinstance(held, Mapping):
        return held
    return {key: value for key, value in held.items() if not str(key).startswith("run.")}


def states_before(out: Path) -> dict[str, ImageState]:
    """Return the last known state of each image; of parts that do not fit together too, since each will run anew."""
    found: dict[str, ImageState] = {}
    for path in (out / "study.json", *_part_files(out)):
        plain = read_json(path)
        if plain is not None:
            found |= {image.image_id: image for image in state_from(plain, path.name).images}
    return found


def _joined(read: Mapping[Path, Mapping[str, Any]], missing: tuple[Part, ...]) -> StudyState:
    states = [state_from(plain, f"parts/{path.name}") for path, plain in read.items()]
    sheet = [str(image_id) for image_id in next(iter(read.values()))["sheet"]]
    known = {image.image_id: image for state in states for image in state.images}
    worst = max(state.exit_status for state in states)
    return replace(
        states[0],
        images=tuple(known.get(image_id, ImageState(image_id, PENDING)) for image_id in sheet),
        exit_status=EXIT_SOME_FAILED if worst or missing else EXIT_OK,
    )


def _part_files(out: Path) -> dict[Path, Part]:
    found = {}
    for path in (out / "parts").glob("*.json"):
        match = _NAME.fullmatch(path.stem)
        if match is not None:
            found[path] = Part(int(match[1]), int(match[2]))
    return dict(sorted(found.items(), key=lambda entry: (entry[1].of, entry[1].number)))
