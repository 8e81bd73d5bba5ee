"""One marker file a run and part: who is at work in a results folder, so that two runs never share it.

No file locks: network file systems keep them badly. The marker is created exclusively, its heartbeat is its
modification time (compared with that of a file made at the same moment in the same folder, so that no two clocks
are compared), and a marker whose process is gone is taken over.
"""

import hashlib
import json
import os
import secrets
import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path

from vasohm.errors import Problem, RequestError

HEARTBEAT_S = 10.0
STALE_S = 60.0  # six missed heartbeats
_ATTEMPTS = 5  # of taking over a stale marker before somebody else is believed to be faster


@dataclass(frozen=True, slots=True)
class Holder:
    """Who holds a marker; `machine` is a digest, so that no host name is written."""

    study: str
    part: str
    pid: int
    born: str  # the process's start as the kernel counts it; "" where it does not tell
    machine: str
    since: str  # UTC
    token: str  # tells two runs of one process apart, where `_read` is compared with a holder


@contextmanager
def hold_marker(run_folder: Path, study: str, part: str) -> Iterator[None]:
    """Hold the marker of `part` ("" for a whole run) in `run_folder` while the block runs.

    Raises
    ------
    RequestError
        When this part, or with a whole run any part, is at work already.
    """
    run_folder.mkdir(parents=True, exist_ok=True)
    path = run_folder / (f"running-{part}.json" if part else "running.json")
    holder = Holder(
        study=study,
        part=part,
        pid=os.getpid(),
        born=_born(os.getpid()),
        machine=_machine(),
        since=datetime.now(UTC).strftime("%Y-%m-%d %H:%M:%S UTC"),
        token=secrets.token_hex(8),
    )
    _create(path, holder)
    stop = threading.Event()
    beat = threading.Thread(target=_beat, args=(path, stop), daemon=True)
    try:
        _refuse_overlap(path, part)
        beat.start()
        yield
    finally:
        stop.set()
        if _read(path) == holder:
            path.unlink(missing_ok=True)


def _create(path: Path, holder: Holder) -> None:
    for _ in range(_ATTEMPTS):
        try:
            descriptor = os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666)
        except FileExistsError:
            other = _read(path)
            if other is None and not path.exists():
                continue
            if _at_work(path, other):
                raise _in_use(path, other) from None
            _put_aside(path, other)
            continue
        with os.fdopen(descriptor, "w", encoding="utf-8") as stream:
            json.dump(asdict(holder), stream)
            stream.flush()
            os.fsync(stream.fileno())
        return
    raise _in_use(path, _read(path))


def _refuse_overlap(path: Path, part: str) -> None:
    """Refuse whichever came second of a whole run and a part: they take the same images."""
    for other_path in sorted(path.parent.glob("running*.json")):
        if other_path == path or (part and other_path.name != "running.json"):
            continue
        other = _read(other_path)
        if _at_work(other_path, other):
            raise _in_use(other_path, other)


def _put_aside(path: Path, seen: Holder | None) -> None:
    """Remove a dead run's marker; if a faster run has put its own there meanwhile, give that one back."""
    aside = path.with_name(f".{path.stem}-{secrets.token_hex(4)}")
    try:
        path.rename(aside)
    except FileNotFoundError:
        return
    if _read(aside) != seen:
        with suppress(OSError):  # a third run has it: it decides
            os.link(aside, path)
    aside.unlink(missing_ok=True)


def _at_work(path: Path, holder: Holder | None) -> bool:
    if holder is not None and holder.machine == _machine() and holder.born:
        return _born(holder.pid) == holder.born
    return _age_s(path) < STALE_S


def _age_s(path: Path) -> float:
    """Seconds since the last heartbeat by the file server's own clock."""
    probe = path.with_name(f".now-{secrets.token_hex(4)}")
    try:
        probe.touch()
        return probe.stat().st_mtime - path.stat().st_mtime
    except FileNotFoundError:
        return float("inf")
    finally:
        probe.unlink(missing_ok=True)


def _beat(path: Path, stop: threading.Event) -> None:
    while not stop.wait(HEARTBEAT_S):
        try:
            os.utime(path)
        except OSError:  # a folder that is away for a moment: the next beat tries again
            continue


def _read(path: Path) -> Holder | None:
    try:
        return Holder(**json.loads(path.read_text(encoding="utf-8")))
    except (OSError, ValueError, TypeError):  # gone, half written or foreign
        return None


def _born(pid: int) -> str:
    """Start of a process in clock ticks since boot, "" for one that is dead or on a system that does not tell."""
    try:
        words = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8", errors="replace").rpartition(")")[2].split()
    except OSError:
        return ""
    return "" if words[0] in "ZX" else words[19]  # fields 3 and 22 of proc(5)


def _machine() -> str:
    """Digest of what makes a process number unique: host, boot and process namespace."""
    facts = [socket.gethostname()]
    with suppress(OSError):  # a system without them has its host name alone
        facts.append(Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii"))
        facts.append(str(Path("/proc/self/ns/pid").readlink()))
    return hashlib.sha256("\n".join(facts).encode()).hexdigest()[:16]


def _in_use(path: Path, holder: Holder | None) -> RequestError:
    who = f"process {holder.pid}, since {holder.since}" if holder else "another run"
    what = f"part {holder.part}" if holder and holder.part else "this folder"
    message = (
        f"{what} is in use by {who}. Wait for it, or stop it; a run that died is taken over within {STALE_S:.0f} s."
    )
    return RequestError([Problem(file=f"run/{path.name}", message=message)])
