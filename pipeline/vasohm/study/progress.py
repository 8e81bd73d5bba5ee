"""How a run is told to the person who waits: a bar on a terminal, now and then a line elsewhere, closing words."""

import time
from collections import Counter
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Self

from rich.console import Console
from rich.markup import escape
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

from vasohm.results.pages import images_without_resistance, lines_without_resistance, named
from vasohm.study.ending import CAUTION
from vasohm.study.events import Event
from vasohm.study.gather import GatherReport
from vasohm.study.journal import printable
from vasohm.study.outcome import EMPTY, FAILED, MEASURED, PENDING
from vasohm.study.run import RunReport
from vasohm.study.state import ImageState, StudyState

LINE_EVERY_S = 30.0
LINE_EVERY_FRACTION = 0.05
_ENDS = ("measured", "empty", "failed", "current")
_STILL_RUNNING = "Images at work may finish; interrupt again to stop at once."


class ProgressBar:
    """A bar with the time left, for a terminal; failures stand above it."""

    def __init__(self, console: Console) -> None:
        self._bar = Progress(
            TextColumn("{task.description}"),
            BarColumn(),
            MofNCompleteColumn(),
            TimeRemainingColumn(),
            console=console,
            transient=True,
        )
        self._task = self._bar.add_task("images", total=None)
        self._failed = 0

    def __enter__(self) -> Self:
        self._bar.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._bar.stop()

    def __call__(self, event: Event) -> None:
        """Move the bar, or say above it what needs saying."""
        if event.kind == "run":
            self._bar.update(self._task, total=event.total)
        if event.kind in _ENDS:
            self._failed += event.kind == "failed"
            self._bar.update(
                self._task, advance=1, description=f"images, {self._failed} failed" if self._failed else "images"
            )
        line = _worth_a_line(event)
        if line:
            self._bar.console.print(escape(line), highlight=False)


class PlainLines:
    """Lines for a log: failures at once, the count at most every 30 s or 5 %."""

    def __init__(self, say: Callable[[str], None]) -> None:
        self._say = say
        self._total = 0
        self._ended: Counter[str] = Counter()
        self._begun = self._said = time.monotonic()
        self._said_at = 0

    def __call__(self, event: Event) -> None:
        """Say what needs saying."""
        if event.kind == "run":
            self._total = event.total
        line = _worth_a_line(event)
        if line:
            self._say(line)
        if event.kind in _ENDS:
            self._ended[event.kind] += 1
            self._count()

    def _count(self) -> None:
        done, now = self._ended.total(), time.monotonic()
        step = done - self._said_at >= max(1.0, LINE_EVERY_FRACTION * self._total)
        if done < self._total and not step and now - self._said < LINE_EVERY_S:
            return
        self._said, self._said_at = now, done
        worked = done - self._ended["current"]
        left = f", about {_in_words((now - self._begun) / worked * (self._total - done))} left" if worked else ""
        failed = f", {self._ended['failed']} failed" if self._ended["failed"] else ""
        self._say(f"{done}/{self._total} images{failed}{left if done < self._total else ''}")


def closing_lines(report: RunReport, out: Path, *, in_parts: bool) -> list[str]:
    """Return what is said at the end of a run; the last line names the same exit status as study.json.

    Parameters
    ----------
    report : RunReport
        How the run ended.
    out : Path
        The results folder, as the person wrote it.
    in_parts : bool
        Whether this was one part of several.
    """
    state = report.state
    lines = _failed_and_empty(state.images, "" if in_parts else str(out / "failures.csv"))
    if report.stopped:
        lines.append(f"Stopped: {report.stopped}. What was finished is kept; the same command carries on from there.")
    elif in_parts:
        lines.append(f"When all parts have ended, put them together: vasohm gather {out}")
    else:
        lines += _without_resistance(state.images, out)
        lines.append(f"Look at {out / 'index.html'}")
    lines.append(CAUTION)
    lines.append(_counts_line(state, report.current))
    return lines


def gathered_lines(report: GatherReport, out: Path) -> list[str]:
    """Return what is said after gathering: what is wanting first, the counts and the exit status last."""
    lines = failures_by_reason(report.state.images) + _empty(report.state.images)
    pending = [image.image_id for image in report.state.images if image.status == PENDING]
    for part in report.missing:
        ids = [name for name in pending if part.takes(name)]
        of_them = f" ({counted(len(ids), 'image')}: {named(ids)})" if ids else " (it has no images)"
        lines.append(
            f"part {part.number}/{part.of} is missing{of_them}: run measure with --part {part.number}/{part.of}"
        )
    left = [name for name in pending if name not in report.damaged and not any(p.takes(name) for p in report.missing)]
    lines += [f"not measured yet: {len(left)} ({named(left)}): run measure again"] if left else []
    lines += [f"{name}: its files are not as they were written: run measure again" for name in report.damaged]
    lines += _without_resistance(report.state.images, out)
    lines.append(f"Look at {out / 'index.html'}")
    lines.append(CAUTION)
    lines.append(_counts_line(report.state, 0))
    return lines


def failures_by_reason(images: Sequence[ImageState]) -> list[str]:
    """Return one line for each reason of failure, with the first images it met."""
    lines = []
    for error, failed in _by_reason(images).items():
        example = failed[0].failure
        names = named([image.image_id for image in failed])
        lines.append(f"failed, {error}: {len(failed)} ({names})" + (f": {example.message}" if example else ""))
    return [printable(line) for line in lines]


def _by_reason(images: Sequence[ImageState]) -> dict[str, list[ImageState]]:
    by_reason: dict[str, list[ImageState]] = {}
    for image in images:
        if image.failure is not None:
            by_reason.setdefault(image.failure.error, []).append(image)
    return dict(sorted(by_reason.items()))


def _failed_and_empty(images: Sequence[ImageState], table: str) -> list[str]:
    """Name failed and empty images; why each failed was said when it did, and stands in `table` where there is one."""
    reasons = [
        f"{error} {len(failed)} ({named([image.image_id for image in failed])})"
        for error, failed in _by_reason(images).items()
    ]
    failed = [f"failed: {', '.join(reasons)}{f'; why stands in {table}' if table else ''}"] if reasons else []
    return [printable(line) for line in failed] + _empty(images)


def _empty(images: Sequence[ImageState]) -> list[str]:
    ids = [image.image_id for image in images if image.status == EMPTY]
    return [f"empty, no vessel was found: {len(ids)} ({named(ids)})"] if ids else []


def _without_resistance(images: Sequence[ImageState], out: Path) -> list[str]:
    measured = sum(image.status in (MEASURED, EMPTY) for image in images)
    return lines_without_resistance(images_without_resistance(out), measured)


def counted(count: int, word: str) -> str:
    """Return a count with its word in the singular or plural."""
    return f"{count} {word}" if count == 1 else f"{count} {word}s"


def _counts_line(state: StudyState, current: int) -> str:
    counts = state.counts
    words = [f"{counts[MEASURED]} measured", f"{counts[EMPTY]} empty", f"{counts[FAILED]} failed"]
    if counts[PENDING]:
        words.append(f"{counts[PENDING]} not measured yet")
    skipped = f" ({current} were current)" if current else ""
    return f"{counted(sum(counts.values()), 'image')}: {', '.join(words)}{skipped}; exit status {state.exit_status}"


def _worth_a_line(event: Event) -> str:
    if event.kind in ("failed", "retry"):
        return printable(f"{event.image_id}: {event.kind}, {event.text}")
    if event.kind == "stop":
        return f"{event.text} {_STILL_RUNNING}"
    if event.kind == "warning" and not event.image_id:
        return printable(event.text)
    return ""


def _in_words(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    minutes = seconds / 60.0
    return f"{minutes:.0f} min" if minutes < 90 else f"{minutes / 60.0:.1f} h"
