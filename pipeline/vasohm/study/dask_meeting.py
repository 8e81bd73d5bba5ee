"""Before work on a Dask cluster: which addresses are safe, and whether each worker would measure the same bytes."""

import ipaddress
import logging
import os
import secrets
import warnings
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import urlsplit

from vasohm.errors import Problem, RequestError
from vasohm.study.state import environment, read_json

if TYPE_CHECKING:
    from distributed import Client

CONNECT_S = 20.0  # for the scheduler to answer
ANSWER_S = 30.0  # of a scheduler that is there and busy
_SAMPLES = 20  # folders that are looked for on each worker


@dataclass(frozen=True, slots=True)
class Question:
    """What a worker is asked, in texts alone: one of another version must be able to read it."""

    packages: tuple[str, ...]
    results: str  # the results folder's run/
    token: str  # name and content of a file in it
    inputs: tuple[str, ...]  # files that must be there


@dataclass(frozen=True, slots=True)
class Meeting:
    """The question to the workers and what they must answer."""

    question: Question
    versions: Mapping[str, str]
    environment: Mapping[str, str]


def safe_address(text: str, *, insecure: bool) -> str:
    """Return the address of a scheduler, which may be told by the file that a scheduler writes.

    Whoever can reach a scheduler without certificates can run anything as the person who started it, so that without
    TLS only this machine's own addresses are taken.

    Parameters
    ----------
    text : str
        ``tcp://HOST:PORT``, ``tls://HOST:PORT``, ``HOST:PORT`` or the path of a scheduler file, ``*.json``.
    insecure : bool
        Whether an address of another machine is taken without TLS.

    Raises
    ------
    RequestError
        When the address cannot be read or is not safe.
    """
    address = text
    if text.endswith(".json"):
        held = read_json(Path(text))
        address = str((held or {}).get("address", ""))
        if not address:
            raise _refused(text, "is no scheduler file. Give the one that dask scheduler --scheduler-file wrote.")
    if "://" not in address:
        address = f"tcp://{address}"
    try:
        parts = urlsplit(address)
        known = parts.scheme in ("tcp", "tls") and parts.hostname and parts.port
    except ValueError:
        known = False
    if not known:
        raise _refused(text, f"{text!r} is no address. Give tcp://HOST:PORT, tls://HOST:PORT or a scheduler file.")
    if parts.scheme == "tcp" and not insecure and not _is_loopback(parts.hostname or ""):
        message = (
            f"{address} is another machine's and without TLS: whoever reaches that port can run programs in your name. "
            "Use tls:// with certificates, or --dask-insecure where the network is closed to others."
        )
        raise _refused(text, message)
    return address


@contextmanager
def connected(address: str) -> Iterator["Client"]:
    """Connect to a scheduler while the block runs; certificates are those of Dask's own configuration.

    Raises
    ------
    RequestError
        When Dask is not installed, or no scheduler answers at the address.
    """
    try:
        from distributed import Client  # noqa: PLC0415  an optional dependency
    except ImportError:
        message = "needs Dask, which is not installed. Install the extra: pip install 'vasohm[dask]'."
        raise RequestError([Problem(file="--dask", value=address, message=message)]) from None
    for name in list(logging.root.manager.loggerDict):
        if name.partition(".")[0] == "distributed":  # what matters of it is told in our own words
            logging.getLogger(name).setLevel(logging.CRITICAL)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # of versions: what matters of them is compared in the meeting
            client = Client(address, timeout=CONNECT_S, set_as_default=False, name="vasohm")
    except (OSError, ValueError, TypeError) as fault:
        why = " ".join(str(fault).split())
        message = f"no Dask scheduler answers at {address} ({why}). Start one, or mend the address."
        raise RequestError([Problem(file="--dask", value=address, message=message)]) from None
    try:
        yield client
    finally:
        with suppress(OSError):
            client.close(timeout=ANSWER_S)


@contextmanager
def meeting(run_folder: Path, versions: Mapping[str, str], inputs: Iterable[Path]) -> Iterator[Meeting]:
    """Prepare what workers are asked; a file lies in `run_folder` while the block runs, for them to find.

    Parameters
    ----------
    run_folder : Path
        The results folder's ``run/``.
    versions : Mapping of str to str
        From `versions_used`.
    inputs : iterable of Path
        The images; one of each folder, of those that can be seen here, must be seen by each worker.
    """
    token = f".meeting-{secrets.token_hex(8)}"
    path = run_folder / token
    one_each = {path.parent: path for path in inputs}
    seen = [str(path) for path in one_each.values() if path.is_file()]
    question = Question(tuple(versions), str(run_folder), token, tuple(seen[:_SAMPLES]))
    path.write_text(token, encoding="utf-8")
    try:
        yield Meeting(question, dict(versions), environment())
    finally:
        path.unlink(missing_ok=True)


def introduce(question: Question) -> dict[str, Any]:
    """Answer on a worker: versions and environment, and in ``cannot`` what it cannot reach."""
    cannot = []
    place = Path(question.results)
    own = place / f"{question.token}-{os.getpid()}-{secrets.token_hex(4)}"
    try:
        if (place / question.token).read_text(encoding="utf-8") != question.token:
            cannot.append(f"sees another folder at {place}")
        own.touch()
        own.unlink()
    except OSError as fault:
        cannot.append(f"cannot write in {place} ({fault.strerror})")
    for name in question.inputs:
        try:
            with Path(name).open("rb") as stream:
                stream.read(1)
        except OSError as fault:
            cannot.append(f"cannot read {name} ({fault.strerror})")
    return {
        "versions": {name: _version(name) for name in question.packages},
        "environment": environment(),
        "cannot": cannot,
    }


def objections(meeting_: Meeting, answer: Mapping[str, Any], fault: BaseException | None, threads: int) -> str:
    """Say why a worker cannot take part, "" where it can.

    Parameters
    ----------
    meeting_ : Meeting
        What it was asked.
    answer : Mapping
        From `introduce`.
    fault : BaseException or None
        What was raised in place of an answer.
    threads : int
        Its number of threads.
    """
    if fault is not None:
        return f"it cannot load vasohm as it is here ({type(fault).__name__}: {fault}). Install the same version there."
    if not answer:
        return "it gave no answer. Look at its log."
    if threads != 1:
        return f"it would measure {threads} images in one process. Start it with --nthreads 1."
    differ = [
        f"{name} {theirs} there, {ours} here"
        for here, there in ((meeting_.versions, answer["versions"]), (meeting_.environment, answer["environment"]))
        for name, ours in here.items()
        if (theirs := there.get(name, "unknown")) != ours
    ]
    if differ:
        return f"it would not give the same bytes: {'; '.join(differ)}. Install the same versions there."
    if answer["cannot"]:
        return f"it {'; it '.join(answer['cannot'])}. Images and results must lie in a folder that all machines share."
    return ""


def _is_loopback(host: str) -> bool:
    if host == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def _refused(value: str, message: str) -> RequestError:
    return RequestError([Problem(file="--dask", value=value, message=message)])


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "unknown"
