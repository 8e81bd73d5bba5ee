"""One run over the images of a study: what is current is left, the rest is measured, and the folder is made whole."""

import errno
import shutil
from collections.abc import Iterator, Mapping, Sequence
from contextlib import AbstractContextManager, ExitStack
from dataclasses import dataclass
from pathlib import Path

from vasohm.config.settings import Settings
from vasohm.config.sheet import ImageSource
from vasohm.config.study_file import Study
from vasohm.errors import Problem, RequestError
from vasohm.results.write import read_record, record_is_whole, remove_partials
from vasohm.study.current import content_key, reason_to_run, versions_used
from vasohm.study.dask_meeting import meeting
from vasohm.study.dask_pool import DaskPool, joined
from vasohm.study.ending import EXIT_OK, EXIT_SOME_FAILED
from vasohm.study.events import Event, Kind, Listener
from vasohm.study.folder import (
    claim,
    identity,
    image_folder,
    probe,
    refuse_other_study,
    refuse_own_inputs,
    remove_image,
    run_folder,
)
from vasohm.study.gather import methods_used, write_root, write_state
from vasohm.study.interrupt import Interrupts, StopNowError
from vasohm.study.journal import Journal
from vasohm.study.marker import hold_marker
from vasohm.study.outcome import EMPTY, FAILED, MEASURED, PENDING, LostError, Outcome, Task
from vasohm.study.parts import Part, remove_parts, states_before, write_part
from vasohm.study.pool import Pool, SupervisedPool
from vasohm.study.state import ImageState, StudyState
from vasohm.study.worker import measure_and_write

_AT_ONCE = 2  # requests to stop that leave no image to its end
IO_FAILURES_IN_A_ROW = 3  # then the disk is to blame, and measuring on is in vain


@dataclass(frozen=True, slots=True)
class RunRequest:
    """What the command asks beside the study."""

    out: Path
    workers: int
    part: Part | None
    only: tuple[str, ...]
    force: bool
    dask: str  # address of a scheduler, from `safe_address`; "" where processes of this machine do the work


@dataclass(frozen=True, slots=True)
class RunReport:
    """How a run ended: `state` is what study.json or the part's file holds."""

    state: StudyState
    current: int
    stopped: str  # why images were left, "" where none were


@dataclass(frozen=True, slots=True)
class Decision:
    """Whether one image would run: `reason` is empty where its results are current."""

    image_id: str
    reason: str


def decide(study: Study, request: RunRequest) -> Iterator[Decision]:
    """Tell of each selected image whether it would run and why; nothing is written.

    Raises
    ------
    RequestError
        When ``--only`` names an image that the study does not have, or the folder holds another study.
    """
    selected = _select(study, request)
    refuse_own_inputs(request.out, study.name, _inputs(study))
    before = {}
    if request.out.is_dir():
        if not request.force:
            refuse_other_study(request.out, study.name)
        before = states_before(request.out)
    versions = versions_used(study.settings)
    for source in selected:
        name = source.image_id
        folder = image_folder(request.out, name)
        reason = _reason(source, folder, study.settings, versions=versions, before=before.get(name))
        yield Decision(name, reason)


def run_study(study: Study, request: RunRequest, listeners: Sequence[Listener]) -> RunReport:
    """Measure the selected images that are not current, and write what belongs to the study as a whole.

    Parameters
    ----------
    study : Study
        From `read_study` or `ad_hoc_study`.
    request : RunRequest
        Options of the command.
    listeners : sequence of callable
        Told of everything that happens.

    Returns
    -------
    RunReport
        Its `state.exit_status` is the exit status of the command.

    Raises
    ------
    RequestError
        When nothing was done because the request is wrong, the folder is in use, or a Dask worker would measure
        otherwise.
    OSError
        When the files at the root of the results folder cannot be written.
    """
    _select(study, request)  # what is wrong with it is told before the folder is touched
    refuse_own_inputs(request.out, study.name, _inputs(study))
    probe(request.out)
    if not request.force:
        refuse_other_study(request.out, study.name)
    part = str(request.part or "")
    with ExitStack() as stack:
        interrupts = stack.enter_context(Interrupts())
        stack.enter_context(hold_marker(request.out / "run", study.name, part))
        journal = stack.enter_context(Journal(run_folder(request.out, part)))
        told: tuple[Listener, ...] = (journal, *listeners)
        pool: Pool
        if request.dask:
            pool = stack.enter_context(_joined(study, request, told, interrupts))
        else:
            pool = SupervisedPool(measure_and_write, request.workers, journal.folder / "workers.txt")
        claim(request.out, study.name, frozenset(source.image_id for source in study.images))
        return _Run(study, request, journal=journal, listeners=told, interrupts=interrupts).carry_out(pool)


def _joined(
    study: Study, request: RunRequest, listeners: Sequence[Listener], interrupts: Interrupts
) -> AbstractContextManager[DaskPool]:
    def tell(text: str) -> None:
        for listener in listeners:
            listener(Event("warning", text))

    return joined(
        request.dask,
        measure_and_write,
        meeting(request.out / "run", versions_used(study.settings), (one.file for one in _select(study, request))),
        tell=tell,
        stops=lambda: interrupts.count,
    )


class _Run:
    """The bookkeeping of one run, from the first image to the last line."""

    def __init__(
        self,
        study: Study,
        request: RunRequest,
        *,
        journal: Journal,
        listeners: Sequence[Listener],
        interrupts: Interrupts,
    ) -> None:
        self._study = study
        self._request = request
        self._selected = _select(study, request)
        self._listeners = tuple(listeners)
        self._journal = journal
        self._interrupts = interrupts
        self._versions = versions_used(study.settings)
        self._before = states_before(request.out)
        self._ended: dict[str, ImageState] = {}
        self._current = 0
        self._io_failures = 0
        self._stop_told = False
        self._lost = ""
        self._folder = identity(request.out)

    def carry_out(self, pool: Pool) -> RunReport:
        self._tell(Event("run", f"study {self._study.name}", total=len(self._selected)))
        for warning in self._study.warnings:
            self._tell(Event("warning", warning))
        if self._request.part is None:
            for folder in (self._request.out, self._request.out / "images"):
                remove_partials(folder)
            for name in self._strangers():
                self._tell(Event("warning", f"images/{name} is of no image of this study: it is left alone"))
        trails = self._journal.folder / "trails"
        try:
            for outcome in pool.run(self._tasks(trails), self._stops, self._note_retry):
                self._note_end(outcome)
        except LostError as lost:
            self._lost = str(lost)
        if identity(self._request.out) != self._folder:
            what = "the folder of the results was moved or removed while they were made"
            raise OSError(errno.ESTALE, what, str(self._request.out))
        shutil.rmtree(trails, ignore_errors=True)
        state = self._finish()
        stopped = self._why_stopped(state)
        self._tell(Event("end", f"exit status {state.exit_status}; {state.counts}"))
        return RunReport(state, self._current, stopped)

    def _tasks(self, trails: Path) -> Iterator[Task]:
        for source in self._selected:
            if self._stops():
                return
            name = source.image_id
            folder, settings = image_folder(self._request.out, name), self._study.settings
            if _reason(source, folder, settings, versions=self._versions, before=self._before.get(name)):
                yield Task(name, source, settings, self._versions, folder, trails / name, self._study.run)
                continue
            record = read_record(folder) or {}
            self._ended[name] = ImageState(name, str(record.get("status")))
            self._current += 1
            self._tell(Event("current", image_id=name))

    def _strangers(self) -> list[str]:
        known = {source.image_id for source in self._study.images}
        return sorted({path.name for path in (self._request.out / "images").glob("*")} - known)

    def _stops(self) -> int:
        if self._interrupts.count and not self._stop_told:
            self._stop_told = True
            self._tell(Event("stop", "Interrupted."))
        if identity(self._request.out) != self._folder:
            return _AT_ONCE
        return max(self._interrupts.count, int(self._io_failures >= IO_FAILURES_IN_A_ROW))

    def _note_retry(self, task: Task, how: str) -> None:
        remove_partials(task.folder.parent, task.image_id)
        self._tell(Event("retry", f"{how}: run again alone", image_id=task.image_id))

    def _note_end(self, outcome: Outcome) -> None:
        failure = outcome.failure
        if failure is not None:
            # Tables of an earlier run must not stand there as if they were this one's.
            folder = image_folder(self._request.out, outcome.image_id)
            remove_image(folder)
            remove_partials(folder.parent, outcome.image_id)
            if outcome.traceback:
                self._journal.error(outcome.image_id, outcome.traceback)
        self._io_failures = self._io_failures + 1 if failure is not None and failure.error == "io" else 0
        self._ended[outcome.image_id] = ImageState(outcome.image_id, outcome.status, failure)
        for warning in outcome.warnings:
            self._tell(Event("warning", warning, image_id=outcome.image_id))
        kinds: Mapping[str, Kind] = {MEASURED: "measured", EMPTY: "empty", FAILED: "failed"}
        self._tell(
            Event(
                kinds[outcome.status],
                text="" if failure is None else f"{failure.error}: {failure.message}",
                image_id=outcome.image_id,
                stage="" if failure is None else failure.stage,
                seconds=outcome.seconds,
                peak_rss_mb=outcome.peak_rss_mb,
            )
        )

    def _finish(self) -> StudyState:
        """Write what belongs to the study as a whole; the state is written last and says how far it came."""
        state = self._state(self._interrupts.exit_status if self._interrupts.count else None)
        part = self._request.part
        if part is not None:
            write_part(self._request.out, part, state, tuple(source.image_id for source in self._study.images))
            return state
        try:
            with self._interrupts.raising():
                write_root(self._request.out, state)
        except StopNowError:
            state = self._state(self._interrupts.exit_status)
            write_state(self._request.out, state)
        remove_parts(self._request.out)
        return state

    def _state(self, interrupted: int | None) -> StudyState:
        part = self._request.part
        mine = [s for s in self._study.images if part is None or part.takes(s.image_id)]
        images = tuple(self._ended.get(source.image_id) or self._standing(source) for source in mine)
        failed = any(image.status == FAILED for image in images)  # also of those that --only left out
        return StudyState(
            study=self._study.name,
            configuration=self._study.resolved,
            versions=self._versions,
            methods=methods_used(self._study, self._versions["vasohm"]),
            warnings=tuple(self._study.warnings),
            images=images,
            exit_status=interrupted or (EXIT_SOME_FAILED if failed or self._lost else EXIT_OK),
        )

    def _standing(self, source: ImageSource) -> ImageState:
        """Return the state of an image that this run did not come to: its inputs were not read anew."""
        before = self._before.get(source.image_id)
        if before is not None and before.status == FAILED:
            return before
        record = read_record(image_folder(self._request.out, source.image_id))
        if record is not None and isinstance(record.get("inputs"), dict):
            key = content_key(source, self._study.settings, self._versions, inputs=record["inputs"])
            if not reason_to_run(record, key):
                return ImageState(source.image_id, str(record["status"]))
        return ImageState(source.image_id, PENDING)

    def _why_stopped(self, state: StudyState) -> str:
        if self._interrupts.count:
            return "interrupted"
        if self._lost:
            return self._lost
        if self._io_failures >= IO_FAILURES_IN_A_ROW and state.counts[PENDING]:
            return f"{IO_FAILURES_IN_A_ROW} images in a row could not be written"
        return ""

    def _tell(self, event: Event) -> None:
        for listener in self._listeners:
            listener(event)


def _inputs(study: Study) -> Iterator[Path]:
    """Sheet and pictures of a study."""
    sheet = study.resolved["study.sheet"]["value"]
    if sheet:
        yield study.path.parent / sheet
    yield from (source.file for source in study.images)


def _select(study: Study, request: RunRequest) -> list[ImageSource]:
    known = {source.image_id for source in study.images}
    problems = [
        Problem(file="--only", value=name, message=f"{name!r} is no image_id of {study.path.name}.")
        for name in request.only
        if name not in known
    ]
    if problems:
        raise RequestError(problems)
    return [
        source
        for source in study.images
        if (not request.only or source.image_id in request.only)
        and (request.part is None or request.part.takes(source.image_id))
    ]


def _reason(
    source: ImageSource, folder: Path, settings: Settings, *, versions: Mapping[str, str], before: ImageState | None
) -> str:
    record = read_record(folder)
    if record is None:
        failure = before.failure if before is not None else None
        return f"failed before ({failure.error})" if failure is not None else "not measured yet"
    reason = reason_to_run(record, content_key(source, settings, versions))
    if not reason and not record_is_whole(folder):
        return "its files are not as they were written"
    return reason
