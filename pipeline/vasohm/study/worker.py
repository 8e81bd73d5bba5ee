"""What happens inside a worker process: one image measured and written, its fate returned as text and numbers."""

import os
import resource
import shutil
import sys
import time
import traceback
import warnings
from collections.abc import Iterable
from contextlib import suppress
from pathlib import Path
from typing import Any

from threadpoolctl import threadpool_limits  # type: ignore[import-untyped]

from vasohm.errors import ImageError, VasohmError
from vasohm.pipeline import measure_source
from vasohm.results.write import write_image
from vasohm.study.current import INPUTS, content_key
from vasohm.study.memory import MB, memory_limited, predicted_mb, refuse_beyond
from vasohm.study.outcome import FAILED, Failure, Outcome, Task

_WARNINGS_KEPT = 20


def measure_and_write(task: Task) -> Outcome:
    """Measure one image and write its folder; every fault ends as an `Outcome`, none leaves this function.

    Parameters
    ----------
    task : Task
        The image.

    Returns
    -------
    Outcome
        ``failed`` with the stage where it happened, or the status of the image.
    """
    trail = Trail(task.trail)
    _reset_peak()
    status, failure, trace = FAILED, None, ""
    with warnings.catch_warnings(record=True) as caught, threadpool_limits(1):
        warnings.simplefilter("default")
        try:
            with memory_limited(task.limits.memory_limit_mb):
                status = _measure(task, trail)
        except (Exception, SystemExit) as fault:  # noqa: BLE001  one image must never cost another
            failure = _failure(fault, trail.stage_name, task)
            if not isinstance(fault, VasohmError):
                trace = _hidden(traceback.format_exc(), (Path(sys.prefix), Path(__file__).parents[2]))
    told = dict.fromkeys(f"{one.category.__name__}: {one.message}" for one in caught)
    return Outcome(
        image_id=task.image_id,
        status=status,
        failure=failure,
        seconds=trail.close(),
        peak_rss_mb=_peak_mb(),
        warnings=tuple(told)[:_WARNINGS_KEPT],
        traceback=trace,
    )


def _measure(task: Task, trail: "Trail") -> str:
    if task.limits.memory_limit_mb is not None:
        refuse_beyond(task.source.file, task.limits.memory_limit_mb, task.settings.read.block_megapixels)
    key = content_key(task.source, task.settings, task.versions)
    tables = measure_source(task.source, task.settings, trail.stage)
    trail.stage("write")
    if content_key(task.source, task.settings, task.versions) != key:
        msg = (
            f"{task.source.file.name}: an input file changed while it was being measured. Run again when it is at rest."
        )
        raise ImageError(msg)
    record: dict[str, Any] = key.plain()
    output = task.settings.output
    write_image(tables, task.folder, record, overlay=output.overlay, colour=output.colour, for_print=output.for_print)
    return tables.status


class Trail:
    """Notes each stage in a file as it begins, so that a dead worker's last stage is known, and its seconds."""

    def __init__(self, path: Path) -> None:
        self.stage_name = "start"
        self._seconds: dict[str, float] = {}
        self._begun = time.monotonic()
        path.parent.mkdir(exist_ok=True)
        self._file = path.open("w", encoding="utf-8", buffering=1)
        self._file.write(f"{os.getpid()}\nstart\n")

    def stage(self, name: str) -> None:
        """Note that the stage `name` begins."""
        self._count()
        self.stage_name = name
        self._file.write(f"{name}\n")

    def close(self) -> dict[str, float]:
        """End the last stage and return the seconds of each."""
        self._count()
        self._file.close()
        return self._seconds

    def _count(self) -> None:
        now = time.monotonic()
        self._seconds[self.stage_name] = self._seconds.get(self.stage_name, 0.0) + now - self._begun
        self._begun = now


def _failure(fault: BaseException, stage: str, task: Task) -> Failure:
    if isinstance(fault, VasohmError):
        error, message = fault.code, str(fault)
    elif isinstance(fault, MemoryError):
        error, message = "memory", f"not enough memory ({fault}). {_wanted(task)}"
    elif isinstance(fault, OSError):
        name = Path(os.fsdecode(fault.filename)).name if fault.filename else "a file"
        error, message = "io", f"{name}: {fault.strerror or fault}. {_free(task.folder)} Run again when mended."
    else:
        error = "unexpected"
        message = f"{type(fault).__name__}: {fault} (a fault of the program: please report the file in run/errors)"
    places = [path for name in INPUTS if (path := getattr(task.source, name)) is not None]
    message = _hidden(message, [task.folder.parent, *(path.parent for path in places)])
    return Failure(stage=stage, error=error, message=" ".join(message.split()))


def _wanted(task: Task) -> str:
    limit_mb = task.limits.memory_limit_mb
    wanted_mb = predicted_mb(task.source.file, task.settings.read.block_megapixels)
    wanted = f"About {wanted_mb:.0f} MB were predicted" if wanted_mb is not None else "What it takes is not known"
    limit = f"memory_limit_mb is {limit_mb:g}" if limit_mb is not None else "no memory_limit_mb is set"
    return f"{wanted}, {limit}. Use fewer workers, a higher limit in [run], or a machine with more memory."


def _free(folder: Path) -> str:
    for place in folder.parents:
        if place.is_dir():
            return f"{shutil.disk_usage(place).free / MB:.0f} MB are free in the results folder."
    return ""


def _hidden(text: str, folders: Iterable[Path]) -> str:
    """Take the paths of this machine out of a text that will be passed on."""
    known = {str(folder) for folder in folders} | {os.path.expanduser("~")}  # noqa: PTH111  Path.home() may raise
    with suppress(FileNotFoundError):  # the working folder may be gone
        known.add(str(Path.cwd()))
    for folder in sorted(known, key=len, reverse=True):
        if len(folder) > 1:
            text = text.replace(f"{folder}{os.sep}", "")
    return text


def _reset_peak() -> None:
    """Let the kernel count the peak anew (proc(5), clear_refs), so that it is this image's own."""
    try:
        Path("/proc/self/clear_refs").write_text("5", encoding="ascii")
    except OSError:  # then the peak is the process's own so far
        return


def _peak_mb() -> float:
    try:
        for line in Path("/proc/self/status").read_text(encoding="ascii", errors="replace").splitlines():
            if line.startswith("VmHWM:"):
                return float(line.split()[1]) / 1024.0
    except OSError:
        pass
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0
