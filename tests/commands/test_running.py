"""Workers that die, are interrupted or orphaned; markers of runs; cores. No image is measured here."""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from vasohm.config.sheet import ImageSource
from vasohm.errors import RequestError
from vasohm.image.calibrate import TypedScale
from vasohm.study.cores import usable_cores
from vasohm.study.marker import STALE_S, hold_marker
from vasohm.study.outcome import Outcome, Task
from vasohm.study.pool import SupervisedPool

START_S = 30.0  # that two workers may take to start on a busy machine; not a measure of anything


def work(task: Task) -> Outcome:
    """What a task does stands in its name: ``NUMBER-die``, ``NUMBER-die-once``, ``NUMBER-sleep``, ``NUMBER-fine``."""
    task.trail.parent.mkdir(parents=True, exist_ok=True)
    task.trail.write_text(f"{os.getpid()}\nstart\nsegment\n")
    deed = task.image_id.partition("-")[2]
    once = task.folder / f"{task.image_id}.died"
    if deed == "die" or (deed == "die-once" and not once.exists()):
        once.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    if deed == "quit":
        os._exit(0)
    if deed == "sleep":
        (task.folder / f"{task.image_id}.begun").touch()
        time.sleep(600)
    if deed == "short":
        (task.folder / f"{task.image_id}.begun").touch()
        time.sleep(1.0)
    return Outcome(task.image_id, "measured", None, {}, None, (), os.environ["OMP_NUM_THREADS"])


def make_task(folder: Path, name: str) -> Task:
    source = ImageSource(
        image_id=name,
        file=folder / name,
        scale=TypedScale(None, None),
        mask_file=None,
        fov_file=None,
        class_file=None,
        terminals=(),
        edits=(),
        disc=None,
        hematocrit=None,
        design={},
    )
    return Task(name, source, None, {}, folder, folder / "trails" / name)  # type: ignore[arg-type]  no settings read


def run_pool(
    folder: Path, names: list[str], workers: int, stops: Callable[[], int] = lambda: 0
) -> tuple[dict[str, Outcome], list[str]]:
    retried: list[str] = []
    pool = SupervisedPool(work, workers, folder / "workers.txt")
    tasks = [make_task(folder, name) for name in names]
    outcomes = {one.image_id: one for one in pool.run(tasks, stops, lambda task, _: retried.append(task.image_id))}
    return outcomes, retried


@pytest.mark.parametrize("workers", [1, 2])
def test_a_killed_worker_costs_its_own_image_and_no_other(tmp_path: Path, workers: int) -> None:
    """Wrong if one death stopped the run. A neighbour dies too, so one that dies once must have none to be sure."""
    fate = {"1-fine": "measured", "2-die": "failed", "3-fine": "measured", "5-quit": "failed", "6-fine": "measured"}
    if workers == 1:
        fate["4-die-once"] = "measured"
    outcomes, retried = run_pool(tmp_path, sorted(fate), workers)
    assert {name: one.status for name, one in outcomes.items()} == fate
    failure = outcomes["2-die"].failure
    assert (failure.error, failure.stage) == ("crashed", "segment")
    if workers == 1:  # else both may have gone down with a neighbour, whose signal was the first to be seen
        assert "SIGKILL" in failure.message
        assert "exit status 0" in outcomes["5-quit"].failure.message
    assert set(fate) - {"1-fine", "3-fine", "6-fine"} <= set(retried)  # with 2 workers a neighbour is a suspect too


def test_workers_compute_on_one_thread(tmp_path: Path) -> None:
    outcomes, _ = run_pool(tmp_path, ["1-fine"], 1)
    assert outcomes["1-fine"].traceback == "1"


def test_the_first_request_lets_running_images_finish_and_starts_no_other(tmp_path: Path) -> None:
    def stops() -> int:
        return int((tmp_path / "1-short.begun").exists())

    outcomes, _ = run_pool(tmp_path, ["1-short", "2-fine", "3-fine"], 1, stops)
    assert set(outcomes) == {"1-short"}


def test_the_second_request_ends_all_workers_at_once(tmp_path: Path) -> None:
    def stops() -> int:
        return 2 * (tmp_path / "1-sleep.begun").exists()

    outcomes, _ = run_pool(tmp_path, ["1-sleep", "2-sleep"], 2, stops)
    assert outcomes == {}
    assert not living_workers(tmp_path)


def test_no_worker_outlives_a_killed_parent(tmp_path: Path) -> None:
    code = (
        "import sys; sys.path.insert(0, sys.argv[1])\n"
        "from pathlib import Path\n"
        "from test_running import run_pool\n"
        "if __name__ == '__main__': run_pool(Path(sys.argv[2]), ['1-sleep', '2-sleep'], 2)\n"
    )
    script = tmp_path / "parent.py"
    script.write_text(code)
    parent = subprocess.Popen([sys.executable, str(script), str(Path(__file__).parent), str(tmp_path)])
    wait_for(lambda: len(list(tmp_path.glob("*.begun"))) == 2)
    assert len(living_workers(tmp_path)) == 2
    parent.kill()
    parent.wait()
    wait_for(lambda: not living_workers(tmp_path))


def living_workers(folder: Path) -> list[int]:
    pids = [int(trail.read_text().split()[0]) for trail in (folder / "trails").glob("*")]
    return [pid for pid in pids if Path(f"/proc/{pid}").exists()]


def wait_for(met: Callable[[], bool]) -> None:
    deadline = time.monotonic() + START_S
    while not met():
        assert time.monotonic() < deadline, "did not come about in time"
        time.sleep(0.05)


def test_a_second_run_of_the_same_part_is_refused_and_says_by_whom(tmp_path: Path) -> None:
    with hold_marker(tmp_path, "demo", "1-of-2"):
        with hold_marker(tmp_path, "demo", "2-of-2"):
            pass  # another part may run beside it
        with pytest.raises(RequestError, match=rf"part 1-of-2 is in use by process {os.getpid()}, since 2"):
            hold_marker(tmp_path, "demo", "1-of-2").__enter__()
        with pytest.raises(RequestError, match="in use"):
            hold_marker(tmp_path, "demo", "").__enter__()  # the whole run takes part 1's images too
    with hold_marker(tmp_path, "demo", ""):
        assert len(list(tmp_path.iterdir())) == 1
    assert not list(tmp_path.iterdir())


def test_the_marker_of_a_dead_process_is_taken_over(tmp_path: Path) -> None:
    dead = subprocess.run(
        [
            sys.executable,
            "-c",
            """import os, sys; from pathlib import Path; from vasohm.study.marker import hold_marker
held = hold_marker(Path(sys.argv[1]), 'demo', ''); held.__enter__(); os._exit(1)""",
            str(tmp_path),
        ],
        check=False,
    )
    assert dead.returncode == 1
    assert (tmp_path / "running.json").exists()
    with hold_marker(tmp_path, "demo", ""):
        assert json.loads((tmp_path / "running.json").read_text())["pid"] == os.getpid()


@pytest.mark.parametrize(("silent_s", "taken"), [(STALE_S / 2, False), (2 * STALE_S, True)])
def test_the_marker_of_another_machine_is_taken_over_when_its_heartbeat_stops(
    tmp_path: Path, silent_s: float, taken: bool
) -> None:
    with hold_marker(tmp_path, "demo", ""):
        holder = json.loads((tmp_path / "running.json").read_text())
    marker = tmp_path / "running.json"
    marker.write_text(json.dumps(holder | {"machine": "elsewhere"}))
    last = time.time() - silent_s
    os.utime(marker, (last, last))
    if taken:
        with hold_marker(tmp_path, "demo", ""):
            pass
    else:
        with pytest.raises(RequestError, match="in use"):
            hold_marker(tmp_path, "demo", "").__enter__()


def test_of_many_runs_that_find_a_dead_marker_one_wins(tmp_path: Path) -> None:
    (tmp_path / "running.json").write_text("{")
    os.utime(tmp_path / "running.json", (1.0, 1.0))
    code = (
        "import sys, time; from pathlib import Path; from vasohm.errors import RequestError\n"
        "from vasohm.study.marker import hold_marker\n"
        "sys.stdin.read()\n"
        "try:\n"
        "    with hold_marker(Path(sys.argv[1]), 'demo', ''): print('won'); time.sleep(2)\n"
        "except RequestError: print('refused')\n"
    )
    runs = [
        subprocess.Popen(
            [sys.executable, "-c", code, str(tmp_path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
        )
        for _ in range(6)
    ]
    for run in runs:
        run.stdin.close()
    told = sorted(run.stdout.read().strip() for run in runs)
    for run in runs:
        run.wait()
        run.stdout.close()
    assert told == ["refused"] * 5 + ["won"]


def test_a_batch_systems_word_counts_before_the_machines_own(tmp_path: Path) -> None:
    assert (usable_cores({"SLURM_CPUS_PER_TASK": "3"}).count, usable_cores({"SLURM_CPUS_PER_TASK": "3"}).source) == (
        3,
        "SLURM_CPUS_PER_TASK",
    )
    own = usable_cores({}, tmp_path)
    assert (own.count, own.source) == (len(os.sched_getaffinity(0)), "affinity")
    (tmp_path / "cpu.max").write_text("50000 100000\n")
    limited = usable_cores({}, tmp_path)
    assert (limited.count, limited.source) == (1, "cgroup")  # half a processor still runs one process
    (tmp_path / "cpu.max").write_text("max 100000\n")
    assert usable_cores({}, tmp_path).source == "affinity"
