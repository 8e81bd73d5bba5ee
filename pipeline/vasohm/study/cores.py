"""How many processes this machine, or the share of it that was granted, can run at once."""

import os
from dataclasses import dataclass
from pathlib import Path

THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMEXPR_NUM_THREADS")


@dataclass(frozen=True, slots=True)
class Cores:
    """A number of processes and who granted it."""

    count: int
    source: str  # SLURM_CPUS_PER_TASK | affinity | cgroup | cpu_count


def usable_cores(environ: dict[str, str] | None = None, cgroup: Path = Path("/sys/fs/cgroup")) -> Cores:
    """Return what may be used: a batch system's word first, then the tighter of affinity and quota.

    The number of processors that the machine has says nothing about the share that a job was given, so it is
    asked last.

    Parameters
    ----------
    environ : dict of str to str, optional
        Environment variables; the process's own where None.
    cgroup : Path
        Where the control groups are mounted.

    Returns
    -------
    Cores
        At least one.
    """
    told = (os.environ if environ is None else environ).get("SLURM_CPUS_PER_TASK", "")
    if told.isdecimal() and int(told) > 0:
        return Cores(int(told), "SLURM_CPUS_PER_TASK")
    granted = []
    if hasattr(os, "sched_getaffinity"):
        granted.append(Cores(len(os.sched_getaffinity(0)), "affinity"))
    quota = _quota(cgroup)
    if quota is not None:
        granted.append(Cores(max(1, int(quota)), "cgroup"))
    if granted:
        return min(granted, key=lambda cores: cores.count)
    return Cores(os.cpu_count() or 1, "cpu_count")


def _quota(cgroup: Path) -> float | None:
    """Processors that the control group allows, as time over period; None where it sets no limit."""
    for names in (("cpu.max",), ("cpu/cpu.cfs_quota_us", "cpu/cpu.cfs_period_us")):
        try:
            words = " ".join((cgroup / name).read_text(encoding="ascii") for name in names).split()
            time_us, period_us = float(words[0]), float(words[1])
        except (OSError, ValueError, IndexError):  # no such file, "max", or a short line: no limit told here
            continue
        if time_us > 0 and period_us > 0:
            return time_us / period_us
    return None
