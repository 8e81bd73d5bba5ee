"""Small studies of drawn tubes, and the command as a person runs it."""

import csv
import hashlib
import json
import os
import subprocess
import sys
import textwrap
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from functools import partial
from io import StringIO
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from vasohm.cli import run_command
from vasohm.study import run
from vasohm.study.outcome import Outcome, Task

SIZE_PX = 96
LINES_AND_RADII = {  # ends (y, x) and radius of the tubes, by the number of the picture
    0: (((48, 10), (48, 95), 4.0), ((48, 40), (95, 80), 2.5)),
    1: (((0, 30), (80, 30), 3.0), ((40, 30), (10, 80), 2.0)),
    2: (((10, 10), (95, 95), 3.5),),
}

# A method of segmentation that a test tells, by the environment, what to do with pictures of a certain width.
PLUGIN = """
import os, signal, sys, time
from pathlib import Path

def find(prepared, parameters):
    deeds = dict(pair.split(":") for pair in os.environ.get("DEEDS", "").split())
    deed = deeds.get(str(prepared.signal.shape[1]), "")
    if deed == "die":
        os.kill(os.getpid(), signal.SIGKILL)
    if deed == "die-once" and not Path(os.environ["MARK"]).exists():
        Path(os.environ["MARK"]).touch()
        os.kill(os.getpid(), signal.SIGKILL)
    if deed == "abort":
        os.abort()
    if deed == "exit":
        sys.exit("enough")
    if deed == "memory":
        raise MemoryError("9 GB")
    if deed == "hang":
        time.sleep(600)
    if deed == "hoard":
        held = [bytearray(b"x") * 100_000_000 for _ in range(30)]
    if deed == "shape":
        return prepared.signal[1:] > 0
    if deed == "rewrite":
        picture = Path(os.environ["MARK"])
        picture.write_bytes(picture.read_bytes() + b"more")
    if deed == "raise":
        raise RuntimeError(f"hidden {Path.cwd()}/place")
    if "SLOW_S" in os.environ:
        Path(os.environ["MARK"]).touch()
        time.sleep(float(os.environ["SLOW_S"]))
    return prepared.signal > 0.5 * prepared.signal.max()
"""


def draw(number: int, width_px: int = SIZE_PX) -> np.ndarray:
    """Dark tubes on a grey ground with a little noise, uint8 (96, width)."""
    y, x = np.mgrid[:SIZE_PX, :width_px].astype(float)
    light = np.full(y.shape, 180.0)
    for (y0, x0), (y1, x1), radius in LINES_AND_RADII[number % len(LINES_AND_RADII)]:
        along = np.clip(((y - y0) * (y1 - y0) + (x - x0) * (x1 - x0)) / ((y1 - y0) ** 2 + (x1 - x0) ** 2), 0.0, 1.0)
        away = np.hypot(y - y0 - along * (y1 - y0), x - x0 - along * (x1 - x0))
        chord = 2.0 * np.sqrt(np.maximum(radius**2 - away**2, 0.0))
        light = np.minimum(light, 180.0 * np.exp(-0.06 * chord))
    light += np.random.default_rng(number).normal(0.0, 1.0, light.shape)
    return np.clip(np.rint(light), 0, 255).astype(np.uint8)


@dataclass(frozen=True)
class Ended:
    """How a command ended."""

    status: int
    told: str
    complained: str


@dataclass(frozen=True)
class DrawnStudy:
    """A study file with its sheet and pictures, and the command run on it."""

    folder: Path
    file: Path
    ids: tuple[str, ...]
    plugin: Path
    patch: pytest.MonkeyPatch

    def run(self, *words: object, **environ: str) -> Ended:
        """Run the command in this process, which has loaded its libraries already; its workers are processes."""
        told, complained = StringIO(), StringIO()
        with self.patch.context() as patch, redirect_stdout(told), redirect_stderr(complained):
            patch.chdir(self.folder)
            for name, value in environ.items():
                patch.setenv(name, value)
            status = run_command([str(word) for word in words])
        return Ended(status, told.getvalue(), complained.getvalue())

    def measure(self, out: Path, *words: object, **environ: str) -> Ended:
        """Measure the study into `out`."""
        return self.run("measure", self.file, "--out", out, "--workers", 1, *words, **environ)

    def start(self, *words: object, **environ: str) -> "subprocess.Popen[str]":
        """Start the command as a person does, in a process group of its own."""
        path = os.pathsep.join([str(self.plugin), os.environ.get("PYTHONPATH", "")])
        return subprocess.Popen(
            [sys.executable, "-m", "vasohm", *map(str, words)],
            cwd=self.folder,
            env={**os.environ, "PYTHONPATH": path, **environ},
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            start_new_session=True,
        )

    def sheet(self, rows: Mapping[str, str], columns: str = "image_id,file") -> None:
        """Write the sheet anew."""
        lines = [columns, *(f"{image_id},{rest}" for image_id, rest in rows.items())]
        (self.folder / "images.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")


class OneProcess:
    """Measures in this process, in the place of the pool: for faults that need no worker of their own."""

    def __init__(self, work: Callable[[Task], Outcome], workers: int, output: Path) -> None:
        del workers, output
        self._work = work

    def run(
        self, tasks: Iterable[Task], stops: Callable[[], int], on_retry: Callable[[Task, str], None]
    ) -> Iterator[Outcome]:
        """Yield each task's outcome."""
        del on_retry
        for task in tasks:
            if stops():
                return
            yield self._work(task)


@pytest.fixture
def one_process(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let runs of this test measure without starting workers, which costs seconds each."""
    monkeypatch.setattr(run, "SupervisedPool", OneProcess)


@pytest.fixture
def make_study(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[..., DrawnStudy]:
    """Return a function that draws a study of `n` pictures, each one pixel wider than the one before."""
    monkeypatch.setenv("SLURM_CPUS_PER_TASK", "")
    return partial(draw_study, tmp_path, monkeypatch)


@pytest.fixture(scope="session")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> dict[str, str]:
    """Return the contents of what an undisturbed run over the usual study gives."""
    folder = tmp_path_factory.mktemp("undisturbed")
    with pytest.MonkeyPatch.context() as patch:
        ended = draw_study(folder, patch).measure(folder / "out")
    assert ended.status == 0, ended.complained
    return contents(folder / "out")


def draw_study(place: Path, patch: pytest.MonkeyPatch, n: int = 3, *, method: str = "told") -> DrawnStudy:
    """Draw a study into a folder of `place`."""
    folder, plugin = place / "study", place / "plugin"
    folder.mkdir()
    ids = tuple(f"image-{number}" for number in range(n))
    for number, image_id in enumerate(ids):
        Image.fromarray(draw(number, SIZE_PX + number)).save(folder / f"{image_id}.png")
    text = f"""
        [study]
        name = "drawn"
        sheet = "images.csv"
        [image]
        preset = "fundus"
        channel = "green"
        [scale]
        pixel_size_um = 2.0
        [segment]
        method = "{method}"
        radius_um = [3.0, 12.0]
        [network]
        terminals = "none"
    """
    (folder / "study.toml").write_text(textwrap.dedent(text), encoding="utf-8")
    info = plugin / "told_segmenter-1.0.dist-info"
    info.mkdir(parents=True)
    (plugin / "told_segmenter.py").write_text(PLUGIN, encoding="utf-8")
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: told-segmenter\nVersion: 1.0\n", encoding="utf-8")
    (info / "entry_points.txt").write_text("[vasohm.segmenters]\ntold = told_segmenter:find\n", encoding="utf-8")
    patch.syspath_prepend(plugin)
    study = DrawnStudy(folder, folder / "study.toml", ids, plugin, patch)
    study.sheet({image_id: f"{image_id}.png" for image_id in ids})
    return study


def states(out: Path) -> dict[str, str]:
    """Status of each image, from study.json."""
    return {one["image_id"]: one["status"] for one in json.loads((out / "study.json").read_text())["images"]}


def failures(out: Path) -> dict[str, dict[str, str]]:
    """Rows of failures.csv by image."""
    with (out / "failures.csv").open(encoding="utf-8", newline="") as stream:
        return {row["image_id"]: row for row in csv.DictReader(stream)}


def contents(out: Path) -> dict[str, str]:
    """Digest of every file outside run/ and parts/, the folders where equal runs may differ."""
    return {
        str(path.relative_to(out)): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(out.rglob("*"))
        if path.is_file() and path.relative_to(out).parts[0] not in ("run", "parts")
    }
