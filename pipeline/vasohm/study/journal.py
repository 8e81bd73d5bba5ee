"""The run/ folder: log, times and errors of a run, and the file of JSON lines; here two equal runs may differ."""

import csv
import json
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import Self, TextIO

from vasohm.study.events import Event

TIMES_HEADER = ("run_utc", "image_id", "stage", "seconds", "peak_rss_mb")


class Journal:
    """Appends what happens to log.txt and times.csv in `folder`, which stays from run to run."""

    def __init__(self, folder: Path) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.folder = folder
        self._run_utc = _now()
        self._log: TextIO = (folder / "log.txt").open("a", encoding="utf-8", buffering=1)
        times = folder / "times.csv"
        fresh = not times.exists()
        self._times: TextIO = times.open("a", encoding="utf-8", newline="", buffering=1)
        self._rows = csv.writer(self._times, lineterminator="\n")
        if fresh:
            self._rows.writerow(TIMES_HEADER)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self._log.close()
        self._times.close()

    def __call__(self, event: Event) -> None:
        """Note one event."""
        words = " ".join(part for part in (event.kind, event.image_id, event.stage, event.text) if part)
        self._log.write(f"{_now()} {printable(words)}\n")
        for stage, seconds in event.seconds.items():
            self._rows.writerow([self._run_utc, event.image_id, stage, f"{seconds:.3f}", _rounded(event.peak_rss_mb)])

    def error(self, image_id: str, traceback: str) -> None:
        """Keep the traceback of an image that met a fault of the program or of its surroundings."""
        errors = self.folder / "errors"
        errors.mkdir(exist_ok=True)
        (errors / f"{image_id}.txt").write_text(traceback, encoding="utf-8", errors="backslashreplace")


class JsonLines:
    """Writes each event as one line of JSON, and one line for each stage of an image."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._file: TextIO | None = None

    def __enter__(self) -> Self:
        self._file = self._path.open("a", encoding="utf-8", buffering=1)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._file is not None:
            self._file.close()

    def __call__(self, event: Event) -> None:
        """Write one event."""
        for stage, seconds in event.seconds.items():
            self._line(event="stage", image_id=event.image_id, stage=stage, seconds=round(seconds, 3))
        self._line(
            event=event.kind,
            image_id=event.image_id or None,
            stage=event.stage or None,
            seconds=round(sum(event.seconds.values()), 3) if event.seconds else None,
            rss=event.peak_rss_mb,
            text=event.text or None,
        )

    def _line(self, **facts: str | float | None) -> None:
        told = {"utc": _now()} | {name: fact for name, fact in facts.items() if fact is not None}
        if self._file is not None:
            self._file.write(json.dumps(told) + "\n")


def printable(text: str) -> str:
    """Show control characters (a line feed, a terminal's escape) in a text from outside as their codes."""
    return "".join(char if char.isprintable() else char.encode("unicode_escape").decode() for char in text)


def _now() -> str:
    return datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def _rounded(value: float | None) -> str:
    return "" if value is None else f"{value:.1f}"
