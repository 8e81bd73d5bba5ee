"""Workers of a Dask cluster that stands already, behind the same door as the processes of one machine.

One image at a time is pinned to each worker, so that a worker that is lost is known by the one image it had. The
image runs again; it is given up when it ends two workers that had nothing else of this run on their machine, at
moments when no other worker was lost (the end of an allotted time takes many at once, and is no image's fault).
"""

import secrets
import time
from collections import Counter, deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import CancelledError
from contextlib import AbstractContextManager, contextmanager, suppress
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any
from urllib.parse import urlsplit

from vasohm.errors import Problem, RequestError
from vasohm.study.dask_meeting import ANSWER_S, Meeting, connected, introduce, objections
from vasohm.study.outcome import CRASHED, Failure, LostError, Outcome, Task, failed, too_long
from vasohm.study.pool import GRACE_S, Work, tell_nobody

if TYPE_CHECKING:
    from distributed import Client, Future

MEET_S = 120.0  # for workers to answer: their first word loads the program, perhaps from a slow shared disk
PATIENCE_S = 120.0  # without any worker, then the run ends; a nanny starts a worker anew within seconds
_POLL_S = 0.05
_LOOK_S = 1.0  # between two looks at who is there
_SETTLE_S = 1.0  # workers that are lost for one reason are missed within it
_DEATHS = 2  # alone
_LOSSES = 5  # for whatever reason: an image longer than every allotted time must end too
_PENDING = "pending"


@dataclass(frozen=True, slots=True)
class _Running:
    task: Task
    worker: str
    alone: bool


@contextmanager
def joined(
    address: str,
    work: Work,
    met: AbstractContextManager[Meeting],
    *,
    tell: Callable[[str], None],
    stops: Callable[[], int],
) -> Iterator["DaskPool"]:
    """Work with the cluster at `address` while the block runs.

    Parameters
    ----------
    address
        Of the scheduler.
    work, tell
        As `DaskPool` takes them.
    met
        From `meeting`.
    stops
        Number of requests to stop: at 1 no worker is waited for.

    Raises
    ------
    RequestError
        When no scheduler answers, there is no worker, or a worker would measure otherwise.
    """
    with connected(address) as client, met as what:
        pool = DaskPool(work, client, what, tell)
        pool.meet(stops)
        yield pool


class DaskPool:
    """Runs tasks on the workers of a Dask cluster.

    Parameters
    ----------
    work
        An importable function: what is done with a task.
    client
        From `connected`.
    meeting
        What every worker must agree with before it is given an image.
    tell
        Told of workers that are not used and why, once the run has begun.
    """

    def __init__(self, work: Work, client: "Client", meeting: Meeting, tell: Callable[[str], None]) -> None:
        self._work = work
        self._client = client
        self._meeting = meeting
        self._tell = tell
        self._greeted: dict[str, Future[dict[str, Any]]] = {}
        self._admitted: set[str] = set()
        self._refused: set[str] = set()
        self._running: dict[Future[Outcome], _Running] = {}
        self._suspects: deque[Task] = deque()
        self._deaths: Counter[str] = Counter()
        self._losses: Counter[str] = Counter()
        self._begun: dict[str, float] = {}  # when an image was seen at work
        self._exhausted = False
        self._looked = self._seen_any = 0.0

    def meet(self, stops: Callable[[], int]) -> None:
        """Wait for the workers that are there, and refuse the run if one of them would measure otherwise.

        Parameters
        ----------
        stops
            Number of requests to stop: at 1 nobody is waited for.

        Raises
        ------
        RequestError
            Naming every worker that cannot take part, or that there is none.
        """
        deadline = time.monotonic() + MEET_S
        problems: list[Problem] = []
        while time.monotonic() < deadline and not (self._admitted | self._refused and not self._greeted):
            try:
                self._greet()
            except LostError as lost:
                raise RequestError([Problem(file="--dask", message=f"{lost}. Start it again.")]) from None
            problems += [Problem(file=f"worker {worker}", message=why) for worker, why in self._answers()]
            if stops():
                return
            time.sleep(_POLL_S)
        silent = f"does not answer within {MEET_S:.0f} s. Is it busy or stopped? End it, or wait for it."
        problems += [Problem(file=f"worker {worker}", message=silent) for worker in sorted(self._greeted)]
        if not self._admitted and not problems:
            message = f"the scheduler has no worker within {MEET_S:.0f} s. Start some: dask worker ADDRESS --nthreads 1"
            problems = [Problem(file="--dask", message=message)]
        if problems:
            raise RequestError(problems)

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
            Told of each task that will be run again because its worker was lost, and how.

        Raises
        ------
        LostError
            When the scheduler is gone, or no worker has been there for `PATIENCE_S`.
        """
        waiting = iter(tasks)
        deadline = float("inf")
        self._seen_any = time.monotonic()
        try:
            while True:
                if time.monotonic() > self._looked + _LOOK_S:
                    yield from self._look_round(tell_nobody if stops() else on_retry)
                if not stops():
                    self._hand_out(waiting)
                elif deadline == float("inf"):
                    deadline = time.monotonic() + GRACE_S
                done = self._exhausted and not self._suspects
                if (not self._running and (done or stops())) or stops() > 1 or time.monotonic() > deadline:
                    return
                yield from self._collect(tell_nobody if stops() else on_retry)
        finally:
            self._end()

    def _look_round(self, on_retry: Callable[[Task, str], None]) -> Iterator[Outcome]:
        """See which workers came and which are lost, and what that means for their images."""
        present = self._greet()
        for worker, why in self._answers():
            self._tell(f"worker {worker} is not used: {why}")
        if self._admitted - present:
            time.sleep(_SETTLE_S)
            present = self._greet()
        lost = self._admitted - present
        self._admitted -= lost
        for future, one in list(self._running.items()):
            if one.worker in lost and future.status == _PENDING:
                del self._running[future]
                with _asking():
                    future.cancel()
                yield from self._bury(one, on_retry, among_others=len(lost) > 1)
        yield from self._end_late()
        now = time.monotonic()
        self._looked = now
        if self._admitted:
            self._seen_any = now
        elif now > self._seen_any + PATIENCE_S:
            msg = f"no Dask worker was left for {PATIENCE_S:.0f} s"
            raise LostError(msg)

    def _end_late(self) -> Iterator[Outcome]:
        """End the workers of images that take too long; one without a nanny, which would do that, is used no more."""
        now = time.monotonic()
        for future, one in list(self._running.items()):
            limit_s, stage = one.task.limits.image_timeout_s, _last_stage(one.task)
            if limit_s is None or not stage or future.status != _PENDING:
                continue
            if now <= self._begun.setdefault(one.task.image_id, now) + limit_s:
                continue
            del self._running[future]
            self._admitted.discard(one.worker)
            with _asking():
                future.cancel()
                try:
                    self._client.restart_workers([one.worker], timeout=ANSWER_S, raise_for_error=False)
                except ValueError:
                    self._refused.add(one.worker)
                    self._tell(f"worker {one.worker} is used no more: it has no nanny to end {one.task.image_id}")
            yield too_long(one.task, stage)

    def _greet(self) -> set[str]:
        """Ask workers that are new who they are; return all that are there."""
        threads = self._threads()
        for worker in sorted(threads.keys() - self._admitted - self._refused - self._greeted.keys()):
            with _asking():
                self._greeted[worker] = self._client.submit(
                    introduce, self._meeting.question, workers=[worker], pure=False, key=_key("introduce")
                )
        for worker in self._greeted.keys() - threads.keys():
            del self._greeted[worker]
        self._refused &= threads.keys()
        return set(threads)

    def _answers(self) -> Iterator[tuple[str, str]]:
        """Admit workers that have answered as they should; yield those that have not, and why."""
        threads = self._threads()
        for worker, future in sorted(self._greeted.items()):
            if not future.done():
                continue
            del self._greeted[worker]
            with _asking():
                fault = future.exception() if future.status == "error" else None
                answer = future.result() if future.status == "finished" else {}
            why = objections(self._meeting, answer, fault, threads.get(worker, 1))
            if why:
                self._refused.add(worker)
                yield worker, why
            else:
                self._admitted.add(worker)

    def _threads(self) -> dict[str, int]:
        """Threads of each worker by its address, asked of the scheduler."""
        if self._client.status != "running":
            raise _scheduler_lost()
        with _asking():
            return dict(self._client.nthreads(callback_timeout=ANSWER_S))

    def _hand_out(self, waiting: Iterator[Task]) -> None:
        """Give each free worker an image; a suspect gets one whose machine has no other image of this run."""
        busy = Counter(_machine(one.worker) for one in self._running.values())
        closed = {_machine(one.worker) for one in self._running.values() if one.alone}
        occupied = {one.worker for one in self._running.values()}
        free = [worker for worker in sorted(self._admitted) if worker not in occupied]
        if self._suspects:
            machines = sorted({_machine(worker) for worker in self._admitted} - closed)
            quiet = min(machines, key=lambda machine: busy[machine], default="")
            closed.add(quiet)
            if quiet and not busy[quiet]:
                worker = next(worker for worker in free if _machine(worker) == quiet)
                self._submit(self._suspects.popleft(), worker, alone=True)
        for worker in free:
            if _machine(worker) in closed or self._exhausted:
                continue
            task = next(waiting, None)
            if task is None:
                self._exhausted = True
                return
            self._submit(task, worker, alone=False)

    def _submit(self, task: Task, worker: str, *, alone: bool) -> None:
        task.trail.unlink(missing_ok=True)
        self._begun.pop(task.image_id, None)
        with _asking():
            future = self._client.submit(self._work, task, workers=[worker], pure=False, key=_key(task.image_id))
        self._running[future] = _Running(task, worker, alone)

    def _collect(self, on_retry: Callable[[Task, str], None]) -> Iterator[Outcome]:
        time.sleep(_POLL_S)
        if self._client.status != "running":
            raise _scheduler_lost()
        settled = [future for future in self._running if future.status != _PENDING]
        for future in sorted(settled, key=lambda future: self._running[future].task.image_id):
            yield from self._settle(future, self._running.pop(future), on_retry)

    def _settle(
        self, future: "Future[Outcome]", one: _Running, on_retry: Callable[[Task, str], None]
    ) -> Iterator[Outcome]:
        """Fetch what came of one image."""
        if future.status == "lost":
            raise _scheduler_lost()
        if future.status == "finished":
            try:
                outcome = future.result()
            except (OSError, CancelledError):  # its worker has gone with the answer, or the scheduler too
                self._threads()
                yield from self._bury(one, on_retry, among_others=False)
            else:
                yield outcome
            return
        if future.status == "cancelled" or type(future.exception()).__name__ == "KilledWorker":
            yield from self._bury(one, on_retry, among_others=False)
            return
        fault = future.exception()
        message = f"{type(fault).__name__}: {fault} (between processes: a fault of the program)"
        yield failed(one.task, Failure(stage="start", error="unexpected", message=message))

    def _bury(self, one: _Running, on_retry: Callable[[Task, str], None], *, among_others: bool) -> Iterator[Outcome]:
        """Run the image of a lost worker again, or give it up."""
        task = one.task
        stage = _last_stage(task)
        self._losses[task.image_id] += 1
        self._deaths[task.image_id] += one.alone and not among_others and stage != ""
        if self._deaths[task.image_id] < _DEATHS and self._losses[task.image_id] < _LOSSES:
            self._suspects.append(task)
            on_retry(task, f"worker {one.worker} was lost in stage {stage or 'start'}")
            return
        message = (
            f"its Dask worker was lost {self._losses[task.image_id]} times, the last time in stage {stage or 'start'}. "
            "The worker's log says how it ended; want of memory is common. The other images are not touched by it."
        )
        yield failed(task, Failure(stage=stage or "start", error=CRASHED, message=message))

    def _end(self) -> None:
        """Take back what has not begun; what runs comes to its end on its worker, and the next run finds it."""
        if self._client.status == "running" and self._running:
            with suppress(OSError):
                self._client.cancel(list(self._running), force=True)
        self._running.clear()


@contextmanager
def _asking() -> Iterator[None]:
    """Around each question to the scheduler: it may be gone at any of them."""
    try:
        yield
    except OSError:  # a TimeoutError is one too
        raise _scheduler_lost() from None


def _scheduler_lost() -> LostError:
    return LostError("the Dask scheduler was lost")


def _machine(worker: str) -> str:
    return urlsplit(worker).hostname or worker


def _key(name: str) -> str:
    return f"vasohm-{name}-{secrets.token_hex(8)}"


def _last_stage(task: Task) -> str:
    """Return the last stage that a task reached, "" where it has not begun."""
    try:
        _, *stages = task.trail.read_text(encoding="utf-8").split()
    except (OSError, ValueError):
        return ""
    return stages[-1] if stages else ""
