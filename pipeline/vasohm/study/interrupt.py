"""Requests to stop: the first asks for an orderly end, the second for one at once."""

import signal
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any, Self

from vasohm.study.ending import EXIT_INTERRUPTED, EXIT_TERMINATED

ENDING_SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


class StopNowError(BaseException):
    """Raised in the main thread where waiting for an orderly end would keep the person waiting."""


class Interrupts:
    """Counts SIGINT, SIGTERM and SIGHUP while it is entered; the main thread asks `count`.

    A shell starts background commands with SIGINT ignored, so the handlers are set here and not inherited. A
    SIGHUP that is ignored already (``nohup``) stays ignored.
    """

    def __init__(self) -> None:
        self.count = 0
        self._first = 0
        self._raising = False
        self._before: dict[int, Any] = {}

    def __enter__(self) -> Self:
        for number in ENDING_SIGNALS:
            if number == signal.SIGHUP and signal.getsignal(number) is signal.SIG_IGN:
                continue
            self._before[number] = signal.signal(number, self._note)
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    @property
    def exit_status(self) -> int:
        """130 after SIGINT, 143 after the others."""
        return EXIT_INTERRUPTED if self._first == signal.SIGINT else EXIT_TERMINATED

    @contextmanager
    def raising(self) -> Iterator[None]:
        """Let a signal raise `StopNowError` inside this block, whose files are written whole or not at all."""
        if self.count:
            raise StopNowError
        self._raising = True
        try:
            yield
        finally:
            self._raising = False

    def _note(self, number: int, _frame: FrameType | None) -> None:
        self.count += 1
        self._first = self._first or number
        if self._raising:
            self._raising = False
            raise StopNowError


@contextmanager
def signals_held() -> Iterator[None]:
    """Hold signals back while a worker is started: it inherits the hold, and so outlives a Ctrl-C of the group.

    The parent decides when its workers end. A signal that arrives meanwhile is delivered at the end of the block.
    """
    held = signal.pthread_sigmask(signal.SIG_BLOCK, ENDING_SIGNALS)
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, held)
