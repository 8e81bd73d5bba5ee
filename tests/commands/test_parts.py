"""Parts of a study that run apart, as the tasks of job arrays do, and what is said of those that are wanting."""

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import pytest
from conftest import DrawnStudy, contents

from vasohm.errors import RequestError
from vasohm.study import gather
from vasohm.study.parts import Part, parse_part

MakeStudy = Callable[..., DrawnStudy]
CONFIGS = Path(__file__).parents[2] / "configs"
DEADLINE_S = 120.0  # for something to come about on a busy machine; not a measure of anything
LATE_S = 1.0  # that a record is shown late; below the 30 s that gather waits, above two of its looks


def slurm(number: int, first: int, last: int, step: int = 1) -> dict[str, str]:
    """The variables of sbatch(1), "Output environment variables"."""
    count = len(range(first, last + 1, step))
    names = ("SLURM_ARRAY_TASK_ID", "SLURM_ARRAY_TASK_MIN", "SLURM_ARRAY_TASK_MAX", "SLURM_ARRAY_TASK_COUNT")
    return dict(zip(names, map(str, (number, first, last, count)), strict=True))


def grid_engine(number: int, first: int, last: int, step: int = 1) -> dict[str, str]:
    """The variables of Grid Engine's qsub(1), option -t."""
    names = ("SGE_TASK_ID", "SGE_TASK_FIRST", "SGE_TASK_LAST", "SGE_TASK_STEPSIZE")
    return dict(zip(names, map(str, (number, first, last, step)), strict=True))


@pytest.mark.parametrize("system", [slurm, grid_engine])
def test_auto_takes_the_part_from_the_array(system: Callable[..., dict[str, str]]) -> None:
    """A retried task 2 of 8 alone would pass for part 2 of 2 if the array's last number were believed."""
    assert parse_part("auto", system(2, 1, 8)) == Part(2, 8)
    for wrong in (system(2, 2, 8), system(2, 2, 2), system(3, 1, 7, 2), system(9, 1, 8)):
        with pytest.raises(RequestError, match=r"give --part \d/N"):
            parse_part("auto", wrong)
    with pytest.raises(RequestError, match="no array task"):
        parse_part("auto", {"SGE_TASK_ID": "undefined"})  # a job of Grid Engine that is no array


@pytest.mark.parametrize("text", ["0/3", "4/3", "1", "1/3/3", "a/3", "-1/3", "1/0", "01/3", ""])
def test_what_is_no_part_is_refused(text: str) -> None:
    with pytest.raises(RequestError, match=r"Give K/N with 1 <= K <= N"):
        parse_part(text, {})


def test_every_image_is_in_one_part_and_no_other_image_moves_it() -> None:
    """Each part takes its share: a binomial count of 2000 images at 1/8, within five standard deviations."""
    n, of = 2000, 8
    share, sd = n / of, (n * (1 / of) * (1 - 1 / of)) ** 0.5
    parts = [Part(number, of) for number in range(1, of + 1)]
    takers = {f"image-{number}": [part for part in parts if part.takes(f"image-{number}")] for number in range(n)}
    assert {len(taking) for taking in takers.values()} == {1}
    counts = Counter(taking[0] for taking in takers.values())
    assert all(abs(count - share) < 5 * sd for count in counts.values())


def test_gather_names_the_images_of_missing_parts_and_of_parts_that_were_interrupted(
    make_study: MakeStudy, tmp_path: Path
) -> None:
    study, out = make_study(4), tmp_path / "out"
    of_part = {k: [name for name in study.ids if Part(k, 3).takes(name)] for k in (1, 2, 3)}
    assert [len(of_part[k]) for k in (1, 2, 3)] == [3, 0, 1], "the names of the drawn pictures fall so"
    assert study.measure(out, "--part", "1/3", "--only", of_part[1][0]).status == 0
    gathered = study.run("gather", out)
    assert gathered.status == 1
    assert "part 2/3 is missing (it has no images): run measure with --part 2/3" in gathered.told
    assert f"part 3/3 is missing (1 image: {of_part[3][0]}): run measure with --part 3/3" in gathered.told
    assert f"not measured yet: 2 ({', '.join(of_part[1][1:])}): run measure again" in gathered.told
    whole = json.loads((out / "study.json").read_text())
    assert whole["counts"] == {"measured": 1, "empty": 0, "failed": 0, "pending": 3}


@pytest.mark.heavy
def test_the_same_part_again_changes_nothing(make_study: MakeStudy, tmp_path: Path) -> None:
    """Batch systems start tasks twice: after a requeue, or because somebody did."""
    study, out = make_study(2), tmp_path / "out"
    for part in ("1/3", "2/3", "3/3", "1/3"):
        assert study.measure(out, "--part", part).status == 0
    assert study.run("gather", out).status == 0
    once = contents(out)
    forced = study.measure(out, "--part", "1/3", "--force")
    assert forced.status == 0
    assert study.run("gather", out).status == 0
    assert contents(out) == once


@pytest.mark.slow
def test_a_part_that_was_killed_is_run_again_while_another_still_runs(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, out = make_study(), tmp_path / "out"
    assert Part(1, 3).takes("image-0")
    slow = {"SLOW_S": "600", "MARK": str(tmp_path / "slow")}
    run = study.start("measure", study.file, "--out", out, "--workers", 1, "--part", "1/3", **slow)
    deadline = time.monotonic() + DEADLINE_S
    while not (tmp_path / "slow").exists():
        assert time.monotonic() < deadline, "did not come about in time"
        time.sleep(0.05)
    twice = study.measure(out, "--part", "1/3")
    assert twice.status == 2
    assert "part 1-of-3 is in use" in twice.complained
    for other in ("2/3", "3/3"):
        assert study.measure(out, "--part", other).status == 0
    os.killpg(run.pid, signal.SIGKILL)
    run.communicate()
    assert study.measure(out, "--part", "1/3").status == 0
    assert study.run("gather", out).status == 0
    assert contents(out) == undisturbed


CALLS = {
    "slurm-array.sh": (slurm(2, 1, 3), ("study.toml", "results")),
    "sge-array.sh": (grid_engine(2, 1, 3) | {"NSLOTS": "1"}, ("study.toml", "results")),
    "pbs-array.sh": (
        {"PBS_ARRAY_INDEX": "2", "NCPUS": "1", "STUDY": "study.toml", "OUT": "results", "PARTS": "3"},
        (),
    ),
}


@pytest.mark.parametrize("script", CALLS)
def test_the_ready_scripts_run_one_part(make_study: MakeStudy, script: str) -> None:
    """Called with the variables that the batch system's manual names, not by that system."""
    study = make_study(1)
    environ, words = CALLS[script]
    path = os.pathsep.join([str(study.plugin), os.environ.get("PYTHONPATH", "")])
    given = {**os.environ, "PBS_O_WORKDIR": str(study.folder), **environ, "PYTHONPATH": path}
    given["PATH"] = os.pathsep.join([str(Path(sys.executable).parent), given["PATH"]])
    ended = subprocess.run(
        ["bash", CONFIGS / script, *words], cwd=study.folder, env=given, capture_output=True, text=True, check=False
    )
    assert ended.returncode == 0, ended.stderr
    part = json.loads((study.folder / "results" / "parts" / "2-of-3.json").read_text())
    assert part["sheet"] == list(study.ids)


@pytest.mark.heavy
def test_two_machines_that_run_one_part_at_once_leave_it_whole(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """A task that was given up for lost may still be at work elsewhere: the marker that would tell is taken away."""
    study, out = make_study(), tmp_path / "out"
    words = ("measure", study.file, "--out", out, "--workers", 1, "--part", "1/1")
    slow = {"SLOW_S": "0.3", "MARK": str(tmp_path / "slow")}
    runs = [study.start(*words, **slow)]
    marker = out / "run" / "running-1-of-1.json"
    deadline = time.monotonic() + DEADLINE_S
    while not (out / "images" / "image-0").exists():
        assert time.monotonic() < deadline, "did not come about in time"
        time.sleep(0.01)
    marker.unlink()
    runs.append(study.start(*words, **slow))
    for run in runs:
        _, complained = run.communicate(timeout=DEADLINE_S)
        assert run.returncode == 0, complained
    assert study.run("gather", out).status == 0
    assert contents(out) == undisturbed


def test_gather_waits_for_records_that_a_shared_disk_shows_late(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str], monkeypatch: pytest.MonkeyPatch
) -> None:
    study, out = make_study(), tmp_path / "out"
    assert study.measure(out, "--part", "1/1").status == 0
    hidden, shown = tmp_path / "hidden", out / "images" / "image-1"
    shown.rename(hidden)
    late = threading.Timer(LATE_S, hidden.rename, [shown])
    late.start()
    gathered = study.run("gather", out)
    late.join()
    assert gathered.status == 0, gathered.told
    assert contents(out) == undisturbed
    shown.rename(hidden)  # and for good
    monkeypatch.setattr(gather, "LATE_S", LATE_S)
    gathered = study.run("gather", out)
    assert gathered.status == 1
    assert "image-1: its files are not as they were written: run measure again" in gathered.told
