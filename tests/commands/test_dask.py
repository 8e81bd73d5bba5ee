"""Runs on a Dask cluster: a real scheduler and real workers, each a process of its own, on this machine's own address.

The expectations are the promises of the interface: bytes equal to a run without a cluster, and what is lost with a
worker or a scheduler; none is a number that the program made.
"""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import pytest
from conftest import SIZE_PX, DrawnStudy, contents

from vasohm.errors import RequestError
from vasohm.study.dask_meeting import safe_address

distributed = pytest.importorskip("distributed")

MakeStudy = Callable[..., DrawnStudy]
HANG_S = 12
DEADLINE_S = 120.0  # for something to come about on a busy machine; not a measure of anything


@dataclass
class Cluster:
    """A scheduler and its workers; `environ` is for the workers, as a cluster's own settings would be."""

    folder: Path
    environ: dict[str, str]
    started: list["subprocess.Popen[bytes]"] = field(default_factory=list)

    def start(
        self, module: str, *words: object, before: Sequence[str] = (), **environ: str
    ) -> "subprocess.Popen[bytes]":
        """Start a process of the cluster; its words go to a log."""
        with (self.folder / f"{len(self.started)}.log").open("wb") as log:
            process = subprocess.Popen(
                [*before, sys.executable, "-m", f"distributed.cli.{module}", *map(str, words), "--no-dashboard"],
                env={**os.environ, **self.environ, **environ},
                cwd=self.folder,
                stdin=subprocess.DEVNULL,
                stdout=log,
                stderr=log,
                start_new_session=True,
            )
        self.started.append(process)
        return process

    @property
    def file(self) -> Path:
        return self.folder / "scheduler.json"

    @property
    def address(self) -> str:
        return str(json.loads(self.file.read_text())["address"])

    def scheduler(self) -> "subprocess.Popen[bytes]":
        """Start the scheduler and wait until it can be reached."""
        process = self.start("dask_scheduler", "--host", "127.0.0.1", "--port", 0, "--scheduler-file", self.file)
        wait_for(self.file.exists)
        return process

    def worker(
        self, *words: object, threads: int = 1, before: Sequence[str] = (), **environ: str
    ) -> "subprocess.Popen[bytes]":
        """Start one worker."""
        own = ("--host", "127.0.0.1", "--nthreads", threads, "--memory-limit", 0, "--local-directory", self.folder)
        return self.start("dask_worker", "--scheduler-file", self.file, *own, *words, before=before, **environ)

    def stop(self) -> None:
        for process in self.started:
            try:
                os.killpg(process.pid, signal.SIGKILL)
            except ProcessLookupError:
                continue
            process.wait()


@pytest.fixture
def make_cluster(tmp_path: Path) -> Iterator[Callable[..., Cluster]]:
    """Return a function that starts a scheduler for a study; the test starts the workers."""
    made = []

    def make(study: DrawnStudy, **environ: str) -> Cluster:
        folder = tmp_path / "cluster"
        folder.mkdir()
        path = os.pathsep.join([str(study.plugin), os.environ.get("PYTHONPATH", "")])
        cluster = Cluster(folder, {"PYTHONPATH": path, **environ})
        made.append(cluster)
        cluster.scheduler()
        return cluster

    yield make
    for cluster in made:
        cluster.stop()


MakeCluster = Callable[..., Cluster]


def wait_for(met: Callable[[], bool]) -> None:
    deadline = time.monotonic() + DEADLINE_S
    while not met():
        assert time.monotonic() < deadline, "did not come about in time"
        time.sleep(0.02)


def start_run(study: DrawnStudy, cluster: Cluster, out: Path) -> "subprocess.Popen[str]":
    return study.start("measure", study.file, "--out", out, "--dask", cluster.address)


def ended(run: "subprocess.Popen[str]") -> tuple[int, str, str]:
    told, complained = run.communicate(timeout=DEADLINE_S)
    assert "Traceback" not in told + complained, complained
    return run.returncode, told, complained


def at_work(out: Path) -> dict[str, int]:
    """Images that have reached the segmenter on some worker, and the worker's process."""
    found = {}
    for trail in (out / "run" / "trails").glob("*"):
        words = trail.read_text().split()
        if words and words[-1] == "segment":
            found[trail.name] = int(words[0])
    return found


@pytest.mark.slow
def test_two_workers_give_the_bytes_of_one_machine_and_losing_one_costs_nothing(
    make_study: MakeStudy, make_cluster: MakeCluster, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, out = make_study(), tmp_path / "out"
    cluster = make_cluster(study, SLOW_S="1.5", MARK=str(tmp_path / "mark"))
    for _ in range(2):
        cluster.worker("--no-nanny")
    run = start_run(study, cluster, out)
    wait_for(lambda: len(at_work(out)) == 2)
    os.kill(at_work(out)["image-0"], signal.SIGKILL)
    status, told, complained = ended(run)
    assert status == 0, complained
    assert "image-0: retry, worker tcp://127.0.0.1:" in complained
    assert "was lost in stage segment" in complained
    assert told.splitlines()[-1] == "3 images: 3 measured, 0 empty, 0 failed; exit status 0"
    assert contents(out) == undisturbed


@pytest.mark.heavy
def test_an_image_that_ends_its_workers_is_given_up_and_the_others_are_measured(
    make_study: MakeStudy, make_cluster: MakeCluster, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """Wrong if the run hung on the bad image, or if the one that ran beside it were blamed for the lost worker."""
    study, out = make_study(), tmp_path / "out"
    cluster = make_cluster(study, DEEDS=f"{SIZE_PX + 1}:die")
    for _ in range(2):
        cluster.worker()  # with a nanny, which starts a lost worker anew
    status, told, complained = ended(start_run(study, cluster, out))
    assert status == 1, complained
    assert told.splitlines()[-1] == "3 images: 2 measured, 0 empty, 1 failed; exit status 1"
    row = (out / "failures.csv").read_text().splitlines()[1]
    assert row.startswith("image-1,segment,crashed,")
    assert "its Dask worker was lost 3 times" in row  # in company, then twice alone
    now = contents(out)
    for name in ("segments.csv", "overlay.png", "record.json"):
        for image_id in ("image-0", "image-2"):
            assert now[f"images/{image_id}/{name}"] == undisturbed[f"images/{image_id}/{name}"]


@pytest.mark.heavy
def test_an_image_that_takes_too_long_is_ended_and_its_worker_goes_on(
    make_study: MakeStudy, make_cluster: MakeCluster, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """Wrong if one picture held a worker for ever; the limit is above what the others take on a busy machine."""
    study, out = make_study(), tmp_path / "out"
    text = study.file.read_text()
    study.file.write_text(f"{text}\n[run]\nimage_timeout_s = {HANG_S}\n")
    cluster = make_cluster(study, DEEDS=f"{SIZE_PX}:hang")
    cluster.worker()
    status, told, complained = ended(start_run(study, cluster, out))
    assert status == 1, complained
    assert told.splitlines()[-1] == "3 images: 2 measured, 0 empty, 1 failed; exit status 1"
    row = (out / "failures.csv").read_text().splitlines()[1]
    assert row.startswith("image-0,segment,timeout,")
    assert f"took longer than image_timeout_s = {HANG_S} and was ended" in row
    now = contents(out)
    for image_id in ("image-1", "image-2"):
        assert now[f"images/{image_id}/segments.csv"] == undisturbed[f"images/{image_id}/segments.csv"]


@pytest.mark.heavy
def test_workers_that_all_end_at_once_are_no_images_fault(
    make_study: MakeStudy, make_cluster: MakeCluster, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """An allotted time takes all workers in the middle of their images, and again in the next allotment."""
    study, out = make_study(), tmp_path / "out"
    cluster = make_cluster(study, SLOW_S="0.8", MARK=str(tmp_path / "mark"))
    for _ in range(2):
        cluster.worker()
    run = start_run(study, cluster, out)
    client = distributed.Client(cluster.address, set_as_default=False)
    try:
        for _ in range(3):
            wait_for(lambda: len(client.nthreads()) == 2 and len(at_work(out)) > 0)
            for pid in client.run(os.getpid).values():
                os.kill(pid, signal.SIGKILL)
            for trail in (out / "run" / "trails").glob("*"):
                trail.unlink(missing_ok=True)
    finally:
        client.close()
    status, told, complained = ended(run)
    assert status == 0, told + complained
    assert complained.count("retry") >= 3
    assert contents(out) == undisturbed


@pytest.mark.slow
def test_a_lost_scheduler_is_a_clear_end_and_the_same_command_goes_on(
    make_study: MakeStudy, make_cluster: MakeCluster, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, out = make_study(), tmp_path / "out"
    cluster = make_cluster(study, SLOW_S="1", MARK=str(tmp_path / "mark"))
    cluster.worker()
    run = start_run(study, cluster, out)
    wait_for((out / "images" / "image-0" / "record.json").exists)
    cluster.started[0].kill()
    status, told, complained = ended(run)
    assert status == 1
    assert "Stopped" in told, complained
    assert "Stopped: the Dask scheduler was lost. What was finished is kept; the same command carries on" in told
    assert told.splitlines()[-1].endswith("2 not measured yet; exit status 1")
    kept = json.loads((out / "study.json").read_text())
    assert (kept["exit_status"], kept["counts"]["measured"], kept["counts"]["pending"]) == (1, 1, 2)
    gone = study.run("measure", study.file, "--out", out, "--dask", cluster.address)
    assert gone.status == 2
    assert "no Dask scheduler answers at tcp://127.0.0.1:" in gone.complained
    cluster.stop()
    again = study.measure(out)
    assert again.status == 0
    assert "were current)" in again.told
    assert contents(out) == undisturbed


@pytest.mark.heavy
def test_an_interrupt_lets_images_on_workers_finish(
    make_study: MakeStudy, make_cluster: MakeCluster, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, out = make_study(), tmp_path / "out"
    cluster = make_cluster(study, SLOW_S="1", MARK=str(tmp_path / "mark"))
    cluster.worker()
    run = start_run(study, cluster, out)
    wait_for(lambda: "image-0" in at_work(out))
    os.killpg(run.pid, signal.SIGINT)
    status, told, _ = ended(run)
    assert status == 130
    assert told.splitlines()[-1] == "3 images: 1 measured, 0 empty, 0 failed, 2 not measured yet; exit status 130"
    assert study.run("measure", study.file, "--out", out, "--dask", cluster.file).status == 0
    assert contents(out) == undisturbed


@pytest.mark.heavy
@pytest.mark.filterwarnings("ignore::distributed.versions.VersionMismatchWarning")
def test_workers_that_would_measure_otherwise_are_refused_by_name(
    make_study: MakeStudy, make_cluster: MakeCluster, tmp_path: Path
) -> None:
    """Wrong if another version, a second thread or another file system changed results or failed images one by one."""
    study = make_study(1)
    for package in ("vasohm", "numpy"):
        info = tmp_path / "other" / f"{package}-9.9.9.dist-info"
        info.mkdir(parents=True)
        (info / "METADATA").write_text(f"Metadata-Version: 2.1\nName: {package}\nVersion: 9.9.9\n")
    cluster = make_cluster(study)
    path = os.pathsep.join([str(tmp_path / "other"), cluster.environ["PYTHONPATH"]])
    cluster.worker("--no-nanny", PYTHONPATH=path)
    cluster.worker("--no-nanny", threads=2)
    words = ["vasohm 9.9.9 there", "numpy 9.9.9 there", "Start it with --nthreads 1"]
    n_workers = 2
    if can_hide_folders():
        hide = ("unshare", "-m", "sh", "-c", 'mount -t tmpfs none "$0" && exec "$@"', str(study.folder))
        cluster.worker("--no-nanny", before=hide)
        words.append(f"it cannot read {study.folder / 'image-0.png'} (No such file or directory)")
        n_workers += 1
    with distributed.Client(cluster.address, set_as_default=False) as client:
        wait_for(lambda: len(client.nthreads()) == n_workers)
    refused = study.run("measure", study.file, "--out", tmp_path / "out", "--dask", cluster.address)
    assert refused.status == 2
    lines = refused.complained.splitlines()
    assert len(lines) == n_workers
    assert all(line.startswith("vasohm: worker tcp://127.0.0.1:") for line in lines)
    assert all(word in refused.complained for word in words), refused.complained
    assert not (tmp_path / "out" / "images").exists()


def can_hide_folders() -> bool:
    """Whether a process can be given another view of the disk here: the superuser's right, not in every container."""
    probe = ["unshare", "-m", "mount", "-t", "tmpfs", "none", "/mnt"]
    return (
        shutil.which("unshare") is not None and subprocess.run(probe, capture_output=True, check=False).returncode == 0
    )


def test_only_safe_addresses_are_taken(make_study: MakeStudy, tmp_path: Path) -> None:
    """Whoever reaches a scheduler without certificates can run programs in the name of who started it."""
    for safe in ("tcp://127.0.0.1:8786", "tcp://localhost:8786", "tcp://[::1]:8786", "tls://10.1.2.3:8786"):
        assert safe_address(safe, insecure=False) == safe
    assert safe_address("127.0.0.1:8786", insecure=False) == "tcp://127.0.0.1:8786"
    for other in ("tcp://10.1.2.3:8786", "node7:8786", "tcp://127.0.0.1.example.org:8786", "tcp://0.0.0.0:8786"):
        with pytest.raises(RequestError, match="another machine's and without TLS"):
            safe_address(other, insecure=False)
    assert safe_address("tcp://10.1.2.3:8786", insecure=True) == "tcp://10.1.2.3:8786"
    file = tmp_path / "scheduler.json"
    file.write_text('{"address": "tcp://10.1.2.3:8786"}')
    with pytest.raises(RequestError, match="without TLS"):
        safe_address(str(file), insecure=False)
    for wrong in (
        "",
        "8786",
        "tcp://127.0.0.1",
        "http://127.0.0.1:8786",
        "tcp://127.0.0.1:x",
        "tcp://[:8786",
        "no.json",
    ):
        with pytest.raises(RequestError, match=r"is no (address|scheduler file)"):
            safe_address(wrong, insecure=True)
    study = make_study(1)
    both = study.measure(tmp_path / "out", "--dask", "tcp://127.0.0.1:1")  # --workers 1 is beside it
    assert both.status == 2
    assert "--workers: is for processes of this machine" in both.complained
    assert not (tmp_path / "out").exists()


def test_without_dask_the_option_says_what_to_install(
    make_study: MakeStudy, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)  # as where it is not installed
    study = make_study(1)
    refused = study.run("measure", study.file, "--out", tmp_path / "out", "--dask", "tcp://127.0.0.1:1")
    assert refused.status == 2
    assert "pip install 'vasohm[dask]'" in refused.complained
