"""Faults of the run itself: images that hang or hoard, writes that fail, folders that are shut, links, lost folders.

The expectations are the promises of the interface: one state an image, finished images whole, the same command
carries on, and the bytes of an undisturbed run.
"""

import errno
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from conftest import SIZE_PX, DrawnStudy, contents, failures, states
from PIL import Image
from test_faults_files import as_nobody

from vasohm.results import write
from vasohm.study import pool

MakeStudy = Callable[..., DrawnStudy]
DEADLINE_S = 60.0  # for something to come about on a busy machine; not a measure of anything
HANG_S = 20  # far more than one of these images takes on a busy machine
IS_ROOT = os.geteuid() == 0


def limit(study: DrawnStudy, **limits: float) -> None:
    """Set keys of [run] in the study file."""
    lines = "".join(f"{name} = {value}\n" for name, value in limits.items())
    study.file.write_text(f"{study.file.read_text().partition('[run]')[0]}[run]\n{lines}")


def of_images(held: dict[str, str], *ids: str) -> dict[str, str]:
    return {name: digest for name, digest in held.items() if name.startswith(tuple(f"images/{one}/" for one in ids))}


# ---- one image takes too much


def test_an_image_that_hangs_or_hoards_costs_itself(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """Wrong if a run over night stood still at one picture, or the neighbour of one that was ended were lost."""
    study, out = make_study(5), tmp_path / "out"
    Image.fromarray(np.zeros((1500, 1500), np.uint8)).save(study.folder / "image-4.png")
    limit(study, image_timeout_s=HANG_S, memory_limit_mb=400)
    deeds = f"{SIZE_PX + 1}:hang {SIZE_PX + 3}:hoard"
    ended = study.measure(out, "--workers", 2, DEEDS=deeds)
    assert ended.status == 1, ended.complained
    assert list(states(out).values()) == ["measured", "failed", "measured", "failed", "failed"], ended.told
    rows = failures(out)
    assert (rows["image-1"]["stage"], rows["image-1"]["error"]) == ("segment", "timeout")
    assert rows["image-1"]["message"].startswith("took longer than image_timeout_s = 20 and was ended")
    assert (rows["image-3"]["stage"], rows["image-3"]["error"]) == ("segment", "memory")
    assert "MB were predicted, memory_limit_mb is 400" in rows["image-3"]["message"]
    assert (rows["image-4"]["stage"], rows["image-4"]["error"]) == ("start", "memory")  # before it was decoded
    assert "will take about 630 MB, more than memory_limit_mb = 400" in rows["image-4"]["message"]
    assert "timeout" in ended.told  # the last lines tell every reason
    good = ("image-0", "image-2")
    assert of_images(contents(out), *good) == of_images(undisturbed, *good)
    assert not list((out / "images").glob(".*"))  # what killed workers had begun
    limit(study, image_timeout_s=600)
    asked = study.measure(out, "--dry-run").told.splitlines()
    assert asked[0] == "image-0 skip: current"  # no result depends on what an image may take
    assert asked[1] == "image-1 run: failed before (timeout)"


@pytest.mark.slow
def test_who_works_beside_an_image_that_hangs_is_not_to_blame(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A neighbour that is ended twice with others' hangs must not count as one whose worker died twice."""
    from test_running import make_task, work

    from vasohm.config.settings import RunSettings

    monkeypatch.setattr(pool, "_POLL_S", 0.02)
    names = {"1-sleep": 1.0, "2-sleep": 4.0, "3-short": 60.0, "4-fine": 60.0}
    tasks = []
    for name, limit_s in names.items():
        task = make_task(tmp_path, name)
        object.__setattr__(task, "limits", RunSettings(limit_s, None))
        tasks.append(task)
    told: list[str] = []
    workers = pool.SupervisedPool(work, 2, tmp_path / "workers.txt")
    outcomes = {one.image_id: one for one in workers.run(tasks, lambda: 0, lambda _, how: told.append(how))}
    assert {name: one.status for name, one in outcomes.items()} == {
        "1-sleep": "failed",
        "2-sleep": "failed",
        "3-short": "measured",
        "4-fine": "measured",
    }
    assert [outcomes[name].failure.error for name in ("1-sleep", "2-sleep")] == ["timeout", "timeout"]
    assert told
    assert all("which took too long" in how for how in told)


@pytest.mark.slow
def test_workers_that_die_together_are_each_run_again(tmp_path: Path) -> None:
    from test_running import run_pool

    outcomes, retried = run_pool(tmp_path, ["1-die-once", "2-die-once", "3-fine"], 2)
    fates = {name: one.status for name, one in outcomes.items()}
    assert fates["3-fine"] == "measured"
    assert set(fates.values()) <= {"measured", "failed"}  # one that falls with its neighbour, then alone, is given up
    assert {"1-die-once", "2-die-once"} & set(retried)


@pytest.mark.slow
@pytest.mark.skipif(not IS_ROOT, reason="a memory group of the kernel needs root")
def test_an_image_that_the_kernel_ends_for_want_of_memory_is_told(make_study: MakeStudy, tmp_path: Path) -> None:
    groups = Path("/sys/fs/cgroup/memory")
    group = groups / f"drawn-{os.getpid()}"
    try:
        group.mkdir()
        (group / "memory.limit_in_bytes").write_text(str(700 * 1024 * 1024))
    except OSError as fault:
        pytest.skip(f"no memory group can be made here: {fault}")
    study, out = make_study(2), tmp_path / "out"
    words = (
        f"echo $$ > {group}/cgroup.procs; exec {sys.executable} -m vasohm measure {study.file} --out {out} --workers 1"
    )
    path = os.pathsep.join([str(study.plugin), os.environ.get("PYTHONPATH", "")])
    environ = {**os.environ, "PYTHONPATH": path, "DEEDS": f"{SIZE_PX + 1}:hoard"}
    run = subprocess.run(["sh", "-c", words], env=environ, capture_output=True, text=True, check=False)
    group.rmdir()
    assert run.returncode == 1, run.stderr
    assert list(states(out).values()) == ["measured", "failed"]
    assert "SIGKILL, likely out of memory" in failures(out)["image-1"]["message"]


# ---- writes that fail


@pytest.mark.usefixtures("one_process")
@pytest.mark.parametrize("number", [errno.EIO, errno.ENOSPC], ids=errno.errorcode.get)
def test_a_write_that_fails_costs_the_image_and_leaves_no_rest(
    make_study: MakeStudy, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, undisturbed: dict[str, str], number: int
) -> None:
    """The second image's points cannot be written once: nothing half done may stand there, the next one is tried."""
    study, out = make_study(), tmp_path / "out"
    whole = write._write_pieces

    def failing(path: Path, file: write.EncodedFile) -> dict[str, Any]:
        if path.name == "points.csv" and "image-1" in path.parent.name:
            path.write_bytes(next(iter(file.pieces))[:100])
            raise OSError(number, os.strerror(number), str(path))
        return whole(path, file)

    with monkeypatch.context() as patch:
        patch.setattr(write, "_write_pieces", failing)
        ended = study.measure(out)
    assert ended.status == 1
    assert states(out) == {"image-0": "measured", "image-1": "failed", "image-2": "measured"}
    row = failures(out)["image-1"]
    assert (row["stage"], row["error"]) == ("write", "io")
    assert row["message"].startswith(f"points.csv: {os.strerror(number)}. ")
    assert "MB are free" in row["message"]
    assert {path.name for path in (out / "images").iterdir()} == {"image-0", "image-2"}
    if number == errno.EIO:
        assert study.measure(out).status == 0
        assert contents(out) == undisturbed


@pytest.mark.usefixtures("one_process")
def test_three_failed_writes_in_a_row_end_the_run(
    make_study: MakeStudy, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    study, out = make_study(5), tmp_path / "out"

    def full(path: Path, content: bytes) -> None:
        del content
        if "image-" in path.parent.name:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(path))

    with monkeypatch.context() as patch:
        patch.setattr(write, "_write_durably", full)
        patch.setattr(write, "replace_durably", lambda *_: None)
        ended = study.measure(out)
    assert ended.status == 1
    assert "Stopped: 3 images in a row could not be written." in ended.told
    assert ended.told.splitlines()[-1].endswith("3 failed, 2 not measured yet; exit status 1")


@pytest.mark.slow
def test_a_disk_that_is_really_full_is_carried_on(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, disk = make_study(), tmp_path / "disk"
    disk.mkdir()
    rest = tmp_path / "rest"
    words = (
        f"mount -t tmpfs -o size=600k tmpfs {disk} || exit 77; "
        f"{sys.executable} -m vasohm measure {study.file} --out {disk}/out --workers 1; status=$?; "
        f"cp -r {disk}/out {rest}; exit $status"
    )
    path = os.pathsep.join([str(study.plugin), os.environ.get("PYTHONPATH", "")])
    run = subprocess.run(
        ["unshare", "-m", "sh", "-c", words],
        env={**os.environ, "PYTHONPATH": path},
        capture_output=True,
        text=True,
        check=False,
        cwd=study.folder,
    )
    if run.returncode == 77 or "unshare" in run.stderr:
        pytest.skip(f"no disk of a chosen size can be mounted here: {run.stderr.strip()}")
    assert run.returncode == 1, run.stderr
    assert "No space left" in run.stdout + run.stderr
    assert "Traceback" not in run.stderr
    assert study.measure(rest).status == 0  # with room, the same command completes
    assert contents(rest) == undisturbed


@pytest.mark.slow
@pytest.mark.usefixtures("one_process")
def test_killed_at_any_write_the_same_command_gives_the_same_bytes(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """The whole group is killed at its N-th opening for writing, renaming or removing, by a hook in every process."""
    study, hook = make_study(), tmp_path / "hook"
    hook.mkdir()
    (hook / "sitecustomize.py").write_text(KILL_AT)
    counted = hook / "count"
    path = os.pathsep.join([str(hook), os.environ.get("PYTHONPATH", "")])
    n_killed = 0
    for at in (3, 12, 25, 60, 100):
        out = tmp_path / "out"
        counted.unlink(missing_ok=True)
        words = ("measure", study.file, "--out", out, "--workers", 1)
        run = study.start(*words, PYTHONPATH=path, KILL_AT=str(at), COUNTED=str(counted), PLUGIN=str(study.plugin))
        _, complained = run.communicate(timeout=DEADLINE_S)
        assert run.returncode in (0, -signal.SIGKILL), complained
        n_killed += run.returncode != 0
        for record in out.glob("images/*/record.json"):
            assert of_images(contents(out), record.parent.name) == of_images(undisturbed, record.parent.name)
        assert study.measure(out).status == 0
        assert contents(out) == undisturbed
        shutil.rmtree(out)
    assert n_killed >= 4  # else the test did not do what it says


KILL_AT = """
import os, signal, sys
sys.path.insert(0, os.environ["PLUGIN"])
out = ("record.json", "images", "run", ".partial", ".csv", "study.json")
def hook(event, arguments):
    writes = event == "open" and isinstance(arguments[1], str) and set(arguments[1]) & set("wxa")
    if writes or event in ("os.rename", "os.remove", "os.mkdir", "os.rmdir"):
        name = str(arguments[0])
        if "/out/" in name:
            count = os.open(os.environ["COUNTED"], os.O_CREAT | os.O_APPEND | os.O_WRONLY)
            os.write(count, b".")
            n = os.fstat(count).st_size
            os.close(count)
            if n >= int(os.environ["KILL_AT"]):
                os.killpg(0, signal.SIGKILL)
if "KILL_AT" in os.environ:
    sys.addaudithook(hook)
"""


# ---- folders that are shut, foreign, linked or lost


@pytest.mark.skipif(not IS_ROOT, reason="only root can become somebody who may not write")
@pytest.mark.usefixtures("one_process")
def test_a_folder_that_cannot_be_written_is_told_before_any_work(make_study: MakeStudy, tmp_path: Path) -> None:
    study = make_study(1)
    closed = tmp_path / "closed"
    closed.mkdir(mode=0o755)
    with as_nobody(tmp_path):
        ended = study.measure(closed / "out")
    assert ended.status == 2
    assert "no results can be written here: Permission denied" in ended.complained
    assert not list(closed.iterdir())


@pytest.mark.usefixtures("one_process")
@pytest.mark.parametrize("place", ["images", "run", "run/log.txt", "run/errors"])
def test_links_that_lead_out_of_the_results_are_refused(make_study: MakeStudy, tmp_path: Path, place: str) -> None:
    """A log that is appended through a link would write into somebody's file."""
    study, out, canary = make_study(1), tmp_path / "out", tmp_path / "canary"
    (out / place).parent.mkdir(parents=True)
    canary.mkdir()
    (canary / "file").write_text("mine")
    (out / place).symlink_to(canary if "." not in place else canary / "file")
    ended = study.measure(out)
    assert ended.status == 2
    assert f"{place}: is a symbolic link" in ended.complained
    assert [path.name for path in canary.iterdir()] == ["file"]
    assert (canary / "file").read_text() == "mine"


@pytest.mark.usefixtures("one_process")
def test_links_in_the_place_of_results_are_replaced(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, out, canary = make_study(), tmp_path / "out", tmp_path / "canary"
    canary.mkdir()
    for name in ("segments.csv", "record.json", "study.json"):
        (canary / name).write_text("{}")
    (out / "images").mkdir(parents=True)
    (out / "images" / "image-0").symlink_to(canary)
    (out / "images" / "image-1").mkdir()
    (out / "images" / "image-1" / "segments.csv").symlink_to(canary / "segments.csv")
    (out / "segments_all.csv").symlink_to(canary / "segments.csv")
    before = contents(canary)
    assert study.measure(out).status == 0
    assert contents(canary) == before
    assert contents(out) == undisturbed
    assert not [path for path in out.rglob("*") if path.is_symlink()]


@pytest.mark.usefixtures("one_process")
def test_nothing_is_written_outside_the_results_and_what_is_keeps_the_umask(
    make_study: MakeStudy, tmp_path: Path
) -> None:
    """Private data must not become readable to all; a canary beside the results must not change."""
    study, out = make_study(1), tmp_path / "results" / "out"
    others = {path: path.stat().st_mtime_ns for path in tmp_path.rglob("*") if path.is_file()}
    before = os.umask(0o077)
    try:
        assert study.measure(out).status == 0
    finally:
        os.umask(before)
    assert {path: path.stat().st_mtime_ns for path in others} == others
    known = {*others, *out.rglob("*"), out, out.parent}
    fresh = {path for path in tmp_path.rglob("*") if path not in known and path.is_file()}
    assert not {path for path in fresh if "__pycache__" not in path.parts}
    assert not [path for path in out.rglob("*") if path.stat().st_mode & 0o077]


def test_results_that_are_moved_away_during_a_run_end_it_in_words(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(), tmp_path / "out"
    run = study.start("measure", study.file, "--out", out, "--workers", 1, SLOW_S="1", MARK=str(tmp_path / "slow"))
    deadline = time.monotonic() + DEADLINE_S
    while not (tmp_path / "slow").exists():
        assert time.monotonic() < deadline
        time.sleep(0.02)
    out.rename(tmp_path / "moved")
    told, complained = run.communicate(timeout=DEADLINE_S)
    assert run.returncode == 1, told + complained
    assert "moved or removed" in complained
    assert "Traceback" not in told + complained
    assert not out.exists()
    (tmp_path / "moved").rename(out)
    assert study.measure(out).status == 0


def test_the_folder_of_the_command_may_vanish(make_study: MakeStudy, tmp_path: Path) -> None:
    study, gone = make_study(1), tmp_path / "gone"
    gone.mkdir()
    with study.patch.context() as patch:
        patch.chdir(gone)
        gone.rmdir()
        run = study.start("measure", study.file, "--out", tmp_path / "out", "--workers", 1)
    assert run.communicate(timeout=DEADLINE_S)
    assert run.returncode == 0


@pytest.mark.usefixtures("one_process")
def test_only_what_depends_on_a_change_is_measured_again(make_study: MakeStudy, tmp_path: Path) -> None:
    """Changes of one kind each, and the images that must run for them."""
    study, out = make_study(), tmp_path / "out"
    rows = {name: f"{name}.png,a," for name in study.ids}
    columns = "image_id,file,group,hematocrit"
    study.sheet(rows, columns)
    assert study.measure(out).status == 0
    sheet, text = study.folder / "images.csv", study.file.read_text()

    def runs() -> dict[str, str]:
        lines = [line.partition(" run: ") for line in study.measure(out, "--dry-run").told.splitlines()]
        return {name: reason for name, _, reason in lines if reason}

    swapped = "\n".join([text.partition("[scale]")[0], "[network]", 'terminals = "none"', "[scale]"])
    swapped += text.partition("[scale]")[2].replace('[network]\nterminals = "none"\n', "")
    everywhere = dict.fromkeys(study.ids, "settings changed")
    changes: dict[str, tuple[str, dict[str, str]]] = {
        "a remark": ("# a remark\n" + text, {}),
        "tables in another order": (swapped, {}),
        "a default spelt out": (text.replace("[scale]", "[blood]\nhematocrit = 0.45\n[scale]"), {}),
        "a number written otherwise": (text.replace("pixel_size_um = 2.0", "pixel_size_um = 2"), {}),
        "what an image may take": (text + "\n[run]\nimage_timeout_s = 5\n", {}),
        "comparing": (text + '\n[compare]\noutcomes = ["image.length_um"]\nby = "group"\nreference = "a"\n', {}),
        "the pixel size": (text.replace("pixel_size_um = 2.0", "pixel_size_um = 2.1"), everywhere),
        "the law": (text.replace("[scale]", '[blood]\nlaw = "constant"\n[scale]'), everywhere),
    }
    for name, (changed, expected) in changes.items():
        study.file.write_text(changed)
        assert runs() == expected, name
    study.file.write_text(text)
    for name, cell, expected in (
        ("a group", f"{study.ids[1]}.png,b,", {"image-1": "sheet row, terminals or edits changed"}),
        ("a hematocrit", f"{study.ids[1]}.png,a,0.3", {"image-1": "sheet row, terminals or edits changed"}),
        ("another file", f"{study.ids[0]}.png,a,", {"image-1": "image changed"}),
    ):
        study.sheet({**rows, "image-1": cell}, columns)
        assert runs() == expected, name
    study.sheet(dict(reversed(rows.items())), columns)
    assert runs() == {}
    study.sheet(rows, columns)
    sheet.write_bytes(b"\xef\xbb\xbf" + sheet.read_bytes().replace(b"\n", b"\r\n"))
    os.utime(sheet, (2e9, 2e9))
    assert runs() == {}
