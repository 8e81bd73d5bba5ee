"""The ready script for Slurm under Slurm itself: one node on this machine, with all daemons started by the test.

What is expected is the promise of the interface: the bytes of an undivided run, whatever happens to a task.
"""

import os
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import textwrap
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest
from conftest import DrawnStudy, contents

DEADLINE_S = 240.0  # for something to come about on a busy machine; not a measure of anything
NEEDED = ("munged", "slurmctld", "slurmd", "sbatch")
SCRIPT = Path(__file__).parents[2] / "configs" / "slurm-array.sh"
ABSENT = [name for name in NEEDED if shutil.which(name, path=f"{os.environ['PATH']}:/usr/sbin") is None]

pytestmark = [
    pytest.mark.heavy,
    pytest.mark.skipif(
        bool(ABSENT),
        reason=f"{', '.join(ABSENT)} not installed (Debian: apt-get install slurmctld slurmd slurm-client munge)",
    ),
    pytest.mark.skipif(os.geteuid() != 0, reason="slurmd runs as the superuser only"),
]

# slurm.conf(5). Processes are followed by their parents, so that no control groups are needed.
SLURM_CONF = """
    ClusterName=here
    SlurmctldHost={host}(127.0.0.1)
    SlurmctldPort={ports[0]}
    SlurmdPort={ports[1]}
    SlurmUser=root
    SlurmdUser=root
    AuthType=auth/munge
    AuthInfo=socket={folder}/munge/socket
    CredType=cred/munge
    SlurmctldPidFile={folder}/slurmctld.pid
    SlurmdPidFile={folder}/slurmd.pid
    StateSaveLocation={folder}/state
    SlurmdSpoolDir={folder}/spool
    ProctrackType=proctrack/linuxproc
    TaskPlugin=task/none
    JobAcctGatherType=jobacct_gather/none
    SelectType=select/cons_tres
    SelectTypeParameters=CR_CPU
    SlurmdParameters=config_overrides
    SwitchType=switch/none
    MpiDefault=none
    ReturnToService=2
    NodeName={host} NodeAddr=127.0.0.1 CPUs=8 RealMemory=64000
    PartitionName=all Nodes={host} Default=YES MaxTime=INFINITE State=UP
"""


@dataclass(frozen=True)
class Slurm:
    """A batch system of one node; `environ` makes its commands find it."""

    environ: dict[str, str]

    def call(self, *words: object, cwd: Path | None = None, **environ: str) -> str:
        """Run one of its commands and return what it says."""
        done = subprocess.run(
            list(map(str, words)), env={**self.environ, **environ}, cwd=cwd, capture_output=True, text=True, check=False
        )
        assert done.returncode == 0, done.stderr
        return done.stdout.strip()

    def wait(self) -> None:
        """Wait until no job is left."""
        wait_for(lambda: not self.call("squeue", "--noheader"))


def wait_for(met: Callable[[], bool]) -> None:
    deadline = time.monotonic() + DEADLINE_S
    while not met():
        assert time.monotonic() < deadline, "did not come about in time"
        time.sleep(0.1)


def free_ports(n: int) -> list[int]:
    sockets = [socket.socket() for _ in range(n)]
    for one in sockets:
        one.bind(("127.0.0.1", 0))
    ports = [one.getsockname()[1] for one in sockets]
    for one in sockets:
        one.close()
    return ports


@pytest.fixture
def slurm() -> Iterator[Slurm]:
    """Start munge, controller and node, and stop them."""
    folder = Path(tempfile.mkdtemp(prefix="slurm-"))
    folder.chmod(0o755)  # the daemons want to reach it
    for name in ("munge", "state", "spool"):
        (folder / name).mkdir(mode=0o700)
    key = folder / "munge" / "key"
    key.write_bytes(os.urandom(1024))
    key.chmod(0o400)
    host = socket.gethostname().partition(".")[0]
    conf = folder / "slurm.conf"
    conf.write_text(textwrap.dedent(SLURM_CONF.format(folder=folder, host=host, ports=free_ports(2))))
    path = os.pathsep.join([str(Path(sys.executable).parent), os.environ["PATH"], "/usr/sbin"])
    batch = Slurm({**os.environ, "SLURM_CONF": str(conf), "PATH": path})
    munge = [f"--{name}={folder}/munge/{name.partition('-')[0]}" for name in ("socket", "pid-file", "log-file")]
    commands = (
        ["munged", "--foreground", "--force", f"--key-file={key}", f"--seed-file={folder}/munge/seed", *munge],
        ["slurmctld", "-D", "-f", str(conf)],
        ["slurmd", "-D", "-f", str(conf), "-N", host],
    )
    daemons = []
    try:
        for command in commands:
            with (folder / f"{command[0]}.log").open("wb") as log:
                daemons.append(subprocess.Popen(command, env=batch.environ, stdout=log, stderr=log))
            if command[0] == "munged":
                wait_for((folder / "munge" / "socket").exists)
        wait_for(lambda: "idle" in sinfo(batch))
        yield batch
    finally:
        for daemon in reversed(daemons):
            daemon.send_signal(signal.SIGTERM)
            daemon.wait(timeout=DEADLINE_S)
        shutil.rmtree(folder, ignore_errors=True)


def sinfo(batch: Slurm) -> str:
    return subprocess.run(
        ["sinfo", "--noheader"], env=batch.environ, capture_output=True, text=True, check=False
    ).stdout


def submit(batch: Slurm, study: DrawnStudy, array: str, **environ: str) -> tuple[str, str]:
    """Submit the array and the gathering that depends on it, as the script's head says; return both numbers."""
    path = os.pathsep.join([str(study.plugin), os.environ.get("PYTHONPATH", "")])
    words = ("--parsable", f"--array={array}", "--cpus-per-task=1", SCRIPT, "study.toml", "results")
    job = batch.call("sbatch", *words, cwd=study.folder, PYTHONPATH=path, **environ)
    gather = ("--parsable", f"--dependency=afterany:{job}", "--output=gather-%j.log", "--wrap", "vasohm gather results")
    return job, batch.call("sbatch", *gather, cwd=study.folder, PYTHONPATH=path)


def exit_codes(batch: Slurm, array: str, gather: str) -> dict[str, str]:
    """Exit code of each task and of the gathering, which scontrol(1) tells for some minutes."""
    found = {}
    for job in (array, gather):
        for line in batch.call("scontrol", "--oneliner", "show", "job", job).splitlines():
            told = dict(word.split("=", 1) for word in line.split() if "=" in word)
            name = f"part {told['ArrayTaskId']}" if "ArrayTaskId" in told else "gather"
            found[name] = told["ExitCode"].partition(":")[0]
    return found


def test_an_array_of_three_and_its_gathering_give_the_bytes_of_one_run(
    make_study: Callable[..., DrawnStudy], slurm: Slurm, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """A task is ended by Slurm's signal in the middle; that part is submitted again, which does the rest."""
    study = make_study(3)  # of three parts the first has two images, the second none, the third one
    out = study.folder / "results"
    job, gather = submit(slurm, study, "1-3", SLOW_S="3", MARK=str(tmp_path / "slow"))
    trail = out / "run" / "1-of-3" / "trails" / "image-0"
    wait_for(lambda: trail.exists() and trail.read_text().endswith("segment\n"))
    slurm.call("scancel", "--batch", "--signal=TERM", f"{job}_1")
    slurm.wait()
    ended = {"part 1": "143", "part 2": "0", "part 3": "0", "gather": "1"}
    assert exit_codes(slurm, job, gather) == ended
    told = (study.folder / f"vasohm-{job}_1.log").read_text()
    assert "Stopped: interrupted. What was finished is kept; the same command carries on from there." in told
    assert "not measured yet: 1 (image-2): run measure again" in (study.folder / f"gather-{gather}.log").read_text()

    job, gather = submit(slurm, study, "1", PARTS="3")
    slurm.wait()
    assert exit_codes(slurm, job, gather) == {"part 1": "0", "gather": "0"}
    assert "(1 were current)" in (study.folder / f"vasohm-{job}_1.log").read_text()
    assert contents(out) == undisturbed
