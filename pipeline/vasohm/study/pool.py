"""Worker processes under supervision: one that dies costs one image at most, and never the run.

A process pool whose worker dies breaks as a whole and cannot say which task was to blame. So no more tasks are
handed out than there are workers, all that were running when it broke are suspects, and each suspect is run again
alone in a fresh pool. What dies alone too is to blame; the others come through.
"""

import faulthandler
import multiprocessing
import os
import signal
import threading
import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from multiprocessing import resource_tracker
from multiprocessing.process import BaseProcess
from pathlib import Path
from typing import Protocol

from vasohm.study.cores import THREAD_VARIABLES
from vasohm.study.interrupt import ENDING_SIGNALS, signals_held
from vasohm.study.outcome import CRASHED, Failure, Outcome, Task, failed, too_long

GRACE_S = 30.0  # that running images have after the first request to stop
_POLL_S = 0.1
_REAPING_S = 2.0  # for a dead worker to be told of
_ORPHAN_STATUS = 70  # EX_SOFTWARE of sysexits.h; seen by nobody, since the parent is gone
_START_S = 120.0  # that a worker may take to load its libraries before an image's time begins
_DEATHS = 2  # in company, then alone

Work = Callable[[Task], Outcome]


class Pool(Protocol):
    """Whatever measures images: processes of this machine, or workers of many."""

    def run(
        self, tasks: Iterable[Task], stops: Callable[[], int], on_retry: Callable[[Task, str], None]
    ) -> Iterator[Outcome]:
        """Yield each task's outcome as it comes; see `SupervisedPool.run`."""


def _start_worker(output: Path) -> None:
    """Prepare a fresh worker process.

    It leaves the end to its parent (signals to the group are ignored), ends when the parent dies, and writes what
    libraries print to `output` and not across the progress line.
    """
    for number in ENDING_SIGNALS:
        signal.signal(number, signal.SIG_IGN)
    signal.pthread_sigmask(signal.SIG_UNBLOCK, ENDING_SIGNALS)
    threading.Thread(target=_end_with_parent, daemon=True).start()
    descriptor = os.open(output, os.O_CREAT | os.O_APPEND | os.O_WRONLY, 0o666)
    for stream in (1, 2):
        os.dup2(descriptor, stream)
    os.close(descriptor)
    faulthandler.enable(2)


def _end_with_parent() -> None:
    """Workers outlive a killed parent whatever the start method; this thread does not let them."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(_ORPHAN_STATUS)


class SupervisedPool:
    """Runs tasks in `workers` spawned processes.

    Parameters
    ----------
    work
        An importable function: what is done with a task.
    workers
        Number of processes.
    output
        File for what the workers' libraries print.
    """

    def __init__(self, work: Work, workers: int, output: Path) -> None:
        self._work = work
        self._workers = workers
        self._output = output
        self._strangers = set(multiprocessing.active_children())
        self._children: set[BaseProcess] = set()
        self._executor: ProcessPoolExecutor | None = None
        self._running: dict[Future[Outcome], Task] = {}
        self._suspects: deque[Task] = deque()
        self._deaths: dict[str, int] = {}
        self._begun: dict[Future[Outcome], float] = {}

    def run(
        self, tasks: Iterable[Task], stops: Callable[[], int], on_retry: Callable[[Task, str], None]
    ) -> Iterator[Outcome]:
        """Yield each task's outcome as it comes.

        Parameters
        ----------
        tasks
            Drawn one by one, as workers become free.
        stops
            Number of requests to stop: at 1 nothing more is handed out and what runs has `GRACE_S`, at 2 all ends.
        on_retry
            Told of each task that will be run again because its worker died, and how.
        """
        waiting = iter(tasks)
        deadline = float("inf")
        try:
            while True:
                if not stops():
                    self._hand_out(waiting)
                elif deadline == float("inf"):
                    deadline = time.monotonic() + GRACE_S
                if not self._running or stops() > 1 or time.monotonic() > deadline:
                    return
                yield from self._collect(tell_nobody if stops() else on_retry)
                yield from self._end_late(tell_nobody if stops() else on_retry)
        finally:
            self._end(by_force=bool(self._running))

    def _hand_out(self, waiting: Iterator[Task]) -> None:
        while len(self._running) < self._workers:
            if self._suspects:
                if not self._running:
                    self._submit(self._suspects.popleft())
                return
            task = next(waiting, None)
            if task is None:
                return
            self._submit(task)

    def _submit(self, task: Task) -> None:
        task.trail.unlink(missing_ok=True)
        resource_tracker.ensure_running()  # its start lets signals through again: the hold must come after it
        with signals_held(), _one_thread_each():
            if self._executor is None:
                self._executor = ProcessPoolExecutor(
                    self._workers,
                    mp_context=multiprocessing.get_context("spawn"),
                    initializer=_start_worker,
                    initargs=(self._output,),
                )
            try:
                future = self._executor.submit(self._work, task)
            except BrokenProcessPool as broken:  # a worker died at rest: this task has not begun
                future = Future()
                future.set_exception(broken)
        self._running[future] = task
        self._begun[future] = time.monotonic() + _START_S
        self._children |= set(multiprocessing.active_children()) - self._strangers

    def _collect(self, on_retry: Callable[[Task, str], None]) -> Iterator[Outcome]:
        finished, _ = wait(self._running, timeout=_POLL_S, return_when=FIRST_COMPLETED)
        if any(isinstance(future.exception(), BrokenProcessPool) for future in finished):
            finished, _ = wait(self._running)  # a broken pool settles all its tasks
        victims = []
        for future in sorted(finished, key=lambda future: self._running[future].image_id):
            task = self._running.pop(future)
            del self._begun[future]
            if isinstance(future.exception(), BrokenProcessPool):
                victims.append(task)
            elif (fault := future.exception()) is not None:
                message = f"{type(fault).__name__}: {fault} (between processes: a fault of the program)"
                yield failed(task, Failure(stage="start", error="unexpected", message=message))
            else:
                yield future.result()
        if victims:
            yield from self._bury(victims, on_retry)

    def _end_late(self, on_retry: Callable[[Task, str], None]) -> Iterator[Outcome]:
        """End the workers when an image takes too long; who was at work beside it is run again and is no suspect."""
        late = [task for future, task in self._running.items() if self._is_late(future, task)]
        if not late:
            return
        causes = [(task, _stage(task)) for task in late]
        innocent = [task for task in self._running.values() if task.image_id not in {one.image_id for one in late}]
        self._end(by_force=True)
        for task, stage in causes:
            yield too_long(task, stage)
        for task in innocent:
            self._suspects.append(task)
            on_retry(task, f"its worker was ended with that of {late[0].image_id}, which took too long")

    def _is_late(self, future: "Future[Outcome]", task: Task) -> bool:
        """Tell whether a task has used its time up, counted from when its worker was seen to begin."""
        limit_s, now = task.limits.image_timeout_s, time.monotonic()
        if limit_s is None or future.done():
            return False
        if task.trail.exists():
            self._begun[future] = min(self._begun[future], now)
        return now > self._begun[future] + limit_s

    def _bury(self, victims: list[Task], on_retry: Callable[[Task, str], None]) -> Iterator[Outcome]:
        """Replace the broken pool; run each victim again alone, or give it up."""
        causes = {task.image_id: self._cause(task) for task in victims}
        self._end(by_force=True)
        for task in victims:
            deaths = self._deaths[task.image_id] = self._deaths.get(task.image_id, 0) + 1
            stage, how = causes[task.image_id]
            if deaths < _DEATHS:
                self._suspects.append(task)
                on_retry(task, f"{how}, in stage {stage}")
                continue
            message = f"the worker died twice in stage {stage} ({how}). The other images are not touched by it."
            yield failed(task, Failure(stage=stage, error=CRASHED, message=message))

    def _cause(self, task: Task) -> tuple[str, str]:
        """Return the last stage a task reached and how its worker ended."""
        try:
            pid, *stages = task.trail.read_text(encoding="utf-8").split()
        except (OSError, ValueError):
            ended = [child.exitcode for child in self._children if child.exitcode]
            return "start", f"a worker did not start, {_end_in_words(ended[0])}" if ended else "a worker did not start"
        for child in self._children:
            if str(child.pid) == pid:
                return stages[-1], _end_in_words(_exit_code(child))
        return stages[-1], "it ended without a word"

    def _end(self, *, by_force: bool) -> None:
        if self._executor is None:
            return
        if by_force:
            for child in self._children:
                child.kill()
        self._executor.shutdown(wait=True, cancel_futures=True)
        self._executor = None
        self._children.clear()
        self._running.clear()
        self._begun.clear()


def _stage(task: Task) -> str:
    """Return the last stage a task reached."""
    try:
        return task.trail.read_text(encoding="utf-8").split()[-1]
    except (OSError, ValueError, IndexError):
        return "start"


def tell_nobody(_task: Task, _how: str) -> None:
    """After a request to stop nothing is run again, so that there is nothing to tell."""


def _exit_code(child: BaseProcess) -> int | None:
    """Wait for how a worker ended: the pool's own thread may be reaping it at this moment and tells a little later."""
    patience = time.monotonic() + _REAPING_S
    while child.exitcode is None and time.monotonic() < patience:
        child.join(_POLL_S)
        time.sleep(_POLL_S / 10)
    return child.exitcode


def _end_in_words(exit_code: int | None) -> str:
    if exit_code is None:
        return "its worker was ended with that of another image"
    if exit_code >= 0:
        return f"exit status {exit_code}"
    name = signal.Signals(-exit_code).name
    return f"{name}, likely out of memory" if name == "SIGKILL" else name


@contextmanager
def _one_thread_each() -> Iterator[None]:
    """Let processes started in this block compute on one thread; libraries read these when they are loaded."""
    before = {name: os.environ.get(name) for name in THREAD_VARIABLES}
    os.environ.update(dict.fromkeys(THREAD_VARIABLES, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value
