"""What one image came to: small nouns of texts and numbers that pass between processes."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from vasohm.config.settings import NO_LIMITS, RunSettings, Settings
from vasohm.config.sheet import ImageSource
from vasohm.errors import VasohmError

CRASHED = "crashed"  # error of an image whose worker died twice
TIMEOUT = "timeout"  # of one that was ended because it took too long
MEASURED, EMPTY, FAILED, PENDING = "measured", "empty", "failed", "pending"


@dataclass(frozen=True, slots=True)
class Task:
    """One image to measure and where its results go."""

    image_id: str
    source: ImageSource
    settings: Settings
    versions: Mapping[str, str]
    folder: Path  # images/IMAGE_ID
    trail: Path  # file in which the worker notes each stage, for the case that it dies
    limits: RunSettings = NO_LIMITS


@dataclass(frozen=True, slots=True)
class Failure:
    """Why an image has no tables: one row of failures.csv."""

    stage: str
    error: str
    message: str


@dataclass(frozen=True, slots=True)
class Outcome:
    """One image's end. `seconds` by stage, `peak_rss_mb` and `traceback` go to run/ only."""

    image_id: str
    status: str  # measured | empty | failed
    failure: Failure | None
    seconds: Mapping[str, float]
    peak_rss_mb: float | None
    warnings: tuple[str, ...]
    traceback: str


class LostError(VasohmError):
    """The workers as a whole are gone: what was finished is kept, and nothing more can be done in this run."""

    code = "lost"


def failed(task: Task, failure: Failure) -> Outcome:
    """Return the outcome of a task whose worker could not tell it itself."""
    return Outcome(
        image_id=task.image_id,
        status=FAILED,
        failure=failure,
        seconds={},
        peak_rss_mb=None,
        warnings=(),
        traceback="",
    )


def too_long(task: Task, stage: str) -> Outcome:
    """Return the outcome of a task that has used its time up and was ended in `stage`."""
    message = (
        f"took longer than image_timeout_s = {task.limits.image_timeout_s:g} and was ended, in stage {stage}. "
        "Raise it in [run], or see what is odd in this picture."
    )
    return failed(task, Failure(stage=stage, error=TIMEOUT, message=message))
