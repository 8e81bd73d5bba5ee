"""Start of the command. Signals are met before anything heavy is loaded: no moment of it ends in a traceback."""

import os
import signal
import sys
from types import FrameType


def main() -> None:
    """Run the command line and leave with its exit status."""
    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, _leave)
    _fill_standard_streams()
    from vasohm.cli import run_command  # noqa: PLC0415  after the signals are met

    sys.exit(run_command())


def _leave(number: int, _frame: FrameType | None) -> None:
    """End at once: a run with images at work has handlers of its own, and every file is written whole or not at all."""
    os.write(2, b"vasohm: interrupted. What was finished is kept; the same command carries on from there.\n")
    os._exit(128 + number)


def _fill_standard_streams() -> None:
    """Open what the caller closed (``>&-``), for workers too, or a pipe would get its number and be written over."""
    while (descriptor := os.open(os.devnull, os.O_RDWR)) <= 2:
        os.set_inheritable(descriptor, True)
    os.close(descriptor)


if __name__ == "__main__":
    main()
