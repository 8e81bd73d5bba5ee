"""How much faster two workers are than one: eight phantoms measured in one run, alternately with one and with two.

    python benchmarks/workers.py [--rounds 3] [--dask]

Prints the images a minute of each and their ratio. Two processors must be free, else the ratio tells about the others.
Starting the processes and putting the tables together counts on both sides, so that few small images show less than a
night's work does. With --dask, two workers of a Dask cluster on this machine stand beside the two processes.
"""

import argparse
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from statistics import median

RECIPE = Path(__file__).parents[1] / "configs" / "phantom-tree.toml"
N_IMAGES = 8
STARTING_S = 60.0


def draw(folder: Path) -> Path:
    """Draw the phantoms of the ready recipe of trees and a sheet that names them until there are eight."""
    subprocess.run([sys.executable, "-m", "vasohm", "phantom", str(RECIPE), "--out", str(folder)], check=True)
    head, *rows = (folder / "images.csv").read_text(encoding="utf-8").splitlines()
    again = [f"{number}-{rows[number % len(rows)]}" for number in range(N_IMAGES)]
    (folder / "images.csv").write_text("\n".join([head, *again]) + "\n", encoding="utf-8")
    return folder / "study.toml"


def seconds(study: Path, *words: str) -> float:
    """Measure the study into a fresh folder."""
    with tempfile.TemporaryDirectory() as out:
        begun = time.monotonic()
        subprocess.run(
            [sys.executable, "-m", "vasohm", "measure", str(study), "--out", f"{out}/results", "--quiet", *words],
            check=True,
            stdout=subprocess.DEVNULL,
        )
        return time.monotonic() - begun


@contextmanager
def cluster(folder: Path) -> Iterator[str]:
    """Start a scheduler and two workers on this machine; yields the scheduler's file."""
    file = folder / "scheduler.json"
    own = ("--host", "127.0.0.1", "--no-dashboard", "--scheduler-file", str(file))
    one = ("--nthreads", "1", "--memory-limit", "0", "--local-directory", str(folder))
    commands = [("dask_scheduler", "--port", "0", *own), *(("dask_worker", *own, *one) for _ in range(2))]
    started = []
    try:
        for module, *words in commands:
            command = [sys.executable, "-m", f"distributed.cli.{module}", *words]
            started.append(subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL))
            deadline = time.monotonic() + STARTING_S
            while not file.exists() and time.monotonic() < deadline:
                time.sleep(0.05)
        yield str(file)
    finally:
        for process in started:
            process.terminate()
            process.wait()


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--dask", action="store_true")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        study = draw(folder / "phantoms")
        ways = {"1 worker": ("--workers", "1"), "2 workers": ("--workers", "2")}
        if asked.dask:
            with cluster(folder) as address:
                report(study, ways | {"2 Dask workers": ("--dask", address)}, asked.rounds)
        else:
            report(study, ways, asked.rounds)


def report(study: Path, ways: dict[str, tuple[str, ...]], rounds: int) -> None:
    """Measure each way in turn, and print medians."""
    load = os.getloadavg()[0]
    times = {way: [] for way in ways}
    for _ in range(rounds):
        for way, words in ways.items():
            times[way].append(seconds(study, *words))
    one = median(times["1 worker"])
    print(
        f"{N_IMAGES} images, median of {rounds}; load of the machine before: {load:.1f} of {os.cpu_count()} processors"
    )
    for way, all_s in times.items():
        a_minute = 60.0 * N_IMAGES / median(all_s)
        print(f"{way:15} {a_minute:6.1f} images a minute, {one / median(all_s):.2f} times one worker")


if __name__ == "__main__":
    main()
