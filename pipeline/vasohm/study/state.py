"""What became of each image, as study.json and the files of parts/ hold it: exit status and last line come from it."""

import json
import platform
from collections import Counter
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

from vasohm.errors import Problem, RequestError
from vasohm.results.methods import Methods
from vasohm.study.outcome import EMPTY, FAILED, MEASURED, PENDING, Failure


@dataclass(frozen=True, slots=True)
class ImageState:
    """One image: its status, and why where it failed."""

    image_id: str
    status: str  # measured | empty | failed | pending
    failure: Failure | None = None


@dataclass(frozen=True, slots=True)
class StudyState:
    """A study and the state of all images of its sheet, in the sheet's order."""

    study: str
    configuration: Mapping[str, Any]
    versions: Mapping[str, str]
    methods: Methods
    warnings: tuple[str, ...]
    images: tuple[ImageState, ...]
    exit_status: int

    @property
    def counts(self) -> dict[str, int]:
        """Number of images in each status; they add up to the sheet."""
        found = Counter(image.status for image in self.images)
        return {status: found[status] for status in (MEASURED, EMPTY, FAILED, PENDING)}

    def with_images(self, ended: Mapping[str, ImageState]) -> "StudyState":
        """Return the state with some images in another one."""
        return replace(self, images=tuple(ended.get(image.image_id, image) for image in self.images))

    def plain(self) -> dict[str, Any]:
        """Return what study.json holds: nothing in it differs between equal runs."""
        return {
            "study": self.study,
            "exit_status": self.exit_status,
            "counts": self.counts,
            "images": [_image_plain(image) for image in self.images],
            "warnings": list(self.warnings),
            "methods": asdict(self.methods),
            "configuration": dict(self.configuration),
            "versions": dict(self.versions),
            "environment": environment(),
        }


def environment() -> dict[str, str]:
    """Return what of this machine may move a last digit, without naming it."""
    return {
        "python": platform.python_version(),
        "implementation": platform.python_implementation(),
        "system": platform.system(),
        "machine": platform.machine(),
    }


def state_from(plain: Mapping[str, Any], file: str) -> StudyState:
    """Rebuild a state from `StudyState.plain`.

    Raises
    ------
    RequestError
        When the file is none of ours.
    """
    try:
        images = tuple(
            ImageState(
                str(one["image_id"]), str(one["status"]), Failure(**one["failure"]) if "failure" in one else None
            )
            for one in plain["images"]
        )
        return StudyState(
            study=str(plain["study"]),
            configuration=plain["configuration"],
            versions=plain["versions"],
            methods=_methods_from(plain["methods"]),
            warnings=tuple(plain["warnings"]),
            images=images,
            exit_status=int(plain["exit_status"]),
        )
    except (KeyError, TypeError, ValueError, AttributeError) as fault:
        message = f"not a state that vasohm wrote ({fault}). Delete the file and run again; finished images are kept."
        raise RequestError([Problem(file=file, message=message)]) from None


def _methods_from(plain: Mapping[str, Any]) -> Methods:
    return Methods(str(plain["paragraph"]), tuple(plain["references"]), tuple(plain["cautions"]))


def read_json(path: Path) -> dict[str, Any] | None:
    """Read a JSON object; None where there is no such file.

    Raises
    ------
    RequestError
        When it holds something else.
    """
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        return None
    except (OSError, ValueError) as fault:
        message = f"cannot be read ({fault}). Delete the file and run again; finished images are kept."
        raise RequestError([Problem(file=path.name, message=message)]) from None
    if not isinstance(content, dict):
        message = "holds no JSON object. Delete the file and run again; finished images are kept."
        raise RequestError([Problem(file=path.name, message=message)])
    return content


def _image_plain(image: ImageState) -> dict[str, Any]:
    plain: dict[str, Any] = {"image_id": image.image_id, "status": image.status}
    if image.failure is not None:
        plain["failure"] = asdict(image.failure)
    return plain
