"""Whole runs of measure and gather: every fault costs one image at most, every way gives the same bytes.

The expectations are the promises of the interface (exit status, one state an image, equal bytes); none is a number
that the program made.
"""

import json
import os
import resource
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from conftest import SIZE_PX, DrawnStudy, contents, failures, states
from PIL import Image

MakeStudy = Callable[..., DrawnStudy]
DEADLINE_S = 60.0  # for something to come about on a busy machine; not a measure of anything
HEAVY = ("numpy", "pandas", "scipy", "matplotlib", "pydantic", "skimage", "rich")


def wait_for(met: Callable[[], bool]) -> None:
    deadline = time.monotonic() + DEADLINE_S
    while not met():
        assert time.monotonic() < deadline, "did not come about in time"
        time.sleep(0.05)


def workers_of(pid: int) -> list[int]:
    """Processes whose parent is `pid`, from /proc."""
    found = []
    for stat in Path("/proc").glob("[0-9]*/stat"):
        try:
            words = stat.read_text().rpartition(")")[2].split()
        except OSError:
            continue
        if int(words[1]) == pid:
            found.append(int(stat.parent.name))
    return found


def test_help_loads_nothing_heavy() -> None:
    """Loading a table or array library would make the simplest question wait for seconds."""
    asked = subprocess.run(
        [sys.executable, "-X", "importtime", "-m", "vasohm", "--help"], capture_output=True, text=True, check=True
    )
    loaded = {line.rpartition("|")[2].strip().partition(".")[0] for line in asked.stderr.splitlines()}
    assert not loaded.intersection(HEAVY)
    assert "no basis for the diagnosis" in " ".join(asked.stdout.split())


def test_a_study_is_measured_once_and_then_current(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(method="ridge"), tmp_path / "out"
    first = study.measure(out)
    assert first.status == 0, first.complained
    assert first.told.splitlines()[-1] == "3 images: 3 measured, 0 empty, 0 failed; exit status 0"
    assert states(out) == dict.fromkeys(study.ids, "measured")
    assert json.loads((out / "study.json").read_text())["exit_status"] == 0
    assert failures(out) == {}
    for name in ("images_all.csv", "segments_all.csv", "datapackage.json", "index.html", "references.bib"):
        assert (out / name).is_file(), name
    whole = contents(out)
    again = study.measure(out)
    assert again.told.splitlines()[-1] == ("3 images: 3 measured, 0 empty, 0 failed (3 were current); exit status 0")
    assert contents(out) == whole


def test_a_bad_file_costs_its_own_image_only(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """A fault that leaked into a neighbour would change its bytes against a study without the bad files."""
    study = make_study(4)
    (study.folder / "image-1.png").write_bytes((study.folder / "image-1.png").read_bytes()[:2000])
    (study.folder / "image-2.png").unlink()
    ended = study.measure(tmp_path / "out")
    assert ended.status == 1, ended.complained
    assert list(states(tmp_path / "out").values()) == ["measured", "failed", "failed", "measured"]
    rows = failures(tmp_path / "out")
    assert (rows["image-1"]["stage"], rows["image-1"]["error"]) == ("read", "truncated")
    assert (rows["image-2"]["stage"], rows["image-2"]["error"]) == ("read", "input_missing")
    assert ended.told.splitlines()[-1] == "4 images: 2 measured, 0 empty, 2 failed; exit status 1"
    assert not (tmp_path / "out" / "images" / "image-1").exists()
    good = contents(tmp_path / "out" / "images" / "image-0")
    assert good == {
        name.removeprefix("images/image-0/"): digest
        for name, digest in undisturbed.items()
        if name.startswith("images/image-0/")
    }


@pytest.mark.parametrize(
    ("rows", "columns", "words"),
    [
        ({"a": "image-0.png", "A": "image-1.png"}, "image_id,file", "A"),
        ({"..": "image-0.png", "b": "image-1.png"}, "image_id,file", ".."),
        ({"a": "image-0.png,7"}, "image_id,file,pixel_size_mm", "pixel_size_mm"),
        ({}, "image_id,file", "images.csv"),
    ],
)
def test_a_wrong_sheet_does_nothing_and_says_why(
    make_study: MakeStudy, tmp_path: Path, rows: dict[str, str], columns: str, words: str
) -> None:
    study = make_study(2)
    study.sheet(rows, columns)
    ended = study.measure(tmp_path / "out")
    assert ended.status == 2
    assert words in ended.complained
    assert not (tmp_path / "out").exists()


def test_every_wrong_option_is_told(make_study: MakeStudy, tmp_path: Path) -> None:
    study = make_study(1)
    ended = study.measure(tmp_path / "out", "--only", "nobody", "noone")
    assert ended.status == 2
    assert "'nobody'" in ended.complained
    assert "'noone'" in ended.complained
    assert study.measure(tmp_path / "out", "--part", "3/2").status == 2
    (tmp_path / "file").write_text("mine")
    ended = study.measure(tmp_path / "file")
    assert ended.status == 2
    assert "is a file" in ended.complained
    assert (tmp_path / "file").read_text() == "mine"
    assert not (tmp_path / "out").exists()


def test_only_what_changed_is_measured_again(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(), tmp_path / "out"
    mask = np.zeros((SIZE_PX, SIZE_PX + 1), np.uint8)
    mask[40:56] = 255
    Image.fromarray(mask).save(study.folder / "mask.png")
    rows = {"image-0": "image-0.png,", "image-1": "image-1.png,mask.png", "image-2": "image-2.png,"}
    study.sheet(rows, "image_id,file,mask_file")
    asked = study.measure(out, "--dry-run")
    assert asked.told.splitlines() == [f"{name} run: not measured yet" for name in study.ids]
    assert not out.exists()
    assert study.measure(out).status == 0
    mask[60:64] = 255
    Image.fromarray(mask).save(study.folder / "mask.png")
    text = study.file.read_text()
    study.file.write_text("# a remark\n" + text)
    os.utime(study.folder / "image-0.png", (2e9, 2e9))  # a file's time says nothing about what it holds
    asked = study.measure(out, "--dry-run")
    assert asked.told.splitlines() == [
        "image-0 skip: current",
        "image-1 run: mask changed",
        "image-2 skip: current",
    ]
    ended = study.measure(out)
    assert "(2 were current)" in ended.told.splitlines()[-1]
    study.file.write_text(text.replace("radius_um = [3.0, 12.0]", "radius_um = [3.0, 13.0]"))
    asked = study.measure(out, "--dry-run")
    assert asked.told.splitlines() == [f"{name} run: settings changed" for name in study.ids]


def test_damaged_results_are_made_again(make_study: MakeStudy, tmp_path: Path) -> None:
    """A power cut or a spreadsheet can change files behind the record's back."""
    study, out = make_study(2), tmp_path / "out"
    study.measure(out)
    whole = contents(out)
    segments = out / "images" / "image-0" / "segments.csv"
    segments.write_bytes(segments.read_bytes()[:-20])
    (out / "images" / "image-1" / "nodes.csv").unlink()
    (out / "images" / "image-1" / "mine.txt").write_text("a person's own")
    asked = study.measure(out, "--dry-run")
    assert asked.told.count("run: its files are not as they were written") == 2
    assert study.run("gather", out).status == 1
    study.measure(out)
    now = contents(out)
    assert now.pop("images/image-1/mine.txt")
    assert now == whole


def test_an_image_that_fails_now_leaves_no_tables(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(2), tmp_path / "out"
    study.measure(out)
    (study.folder / "image-0.png").write_text("no image any more")
    assert study.measure(out).status == 1
    assert not (out / "images" / "image-0").exists()
    assert "image-0" not in (out / "images_all.csv").read_text()
    asked = study.measure(out, "--dry-run")
    assert asked.told.splitlines()[0] == "image-0 run: failed before (not_an_image)"
    only = study.measure(out, "--only", "image-1")
    assert only.status == 1  # one value tells all of the folder: failures.csv has a row
    assert only.told.splitlines()[-1].endswith("1 failed (1 were current); exit status 1")
    assert json.loads((out / "study.json").read_text())["exit_status"] == 1
    assert failures(out)["image-0"]["error"] == "not_an_image"  # still told, though not tried


def test_whatever_happens_in_a_worker_is_one_row(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, out = make_study(7), tmp_path / "out"
    deeds = ("die", "abort", "exit", "memory", "raise")  # of image-2 to image-6
    told = " ".join(f"{SIZE_PX + number}:{deed}" for number, deed in enumerate(deeds, start=2))
    ended = study.measure(out, "--workers", 2, DEEDS=told)
    assert ended.status == 1, ended.complained
    assert ended.told.splitlines()[-1] == "7 images: 2 measured, 0 empty, 5 failed; exit status 1"
    rows = failures(out)
    expected = (
        ("crashed", "SIGKILL"),
        ("crashed", "SIGABRT"),
        ("unexpected", "SystemExit: enough"),
        ("memory", "not enough memory (9 GB)"),
        ("unexpected", "RuntimeError: hidden place"),  # the folder is taken out of the message
    )
    for number, (error, words) in enumerate(expected, start=2):
        row = rows[f"image-{number}"]
        assert (row["stage"], row["error"]) == ("segment", error)
        assert words in row["message"]
        assert (out / "run" / "errors" / f"image-{number}.txt").exists() == (error in ("unexpected", "memory"))
    now = contents(out)
    for name in ("segments.csv", "points.csv", "mask.tif", "overlay.png", "record.json"):
        assert now[f"images/image-1/{name}"] == undisturbed[f"images/image-1/{name}"]


def test_a_worker_that_dies_once_leaves_no_trace_in_the_results(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, mark = make_study(), tmp_path / "died"
    ended = study.measure(tmp_path / "out", "--workers", 2, DEEDS=f"{SIZE_PX + 1}:die-once", MARK=str(mark))
    assert mark.exists()
    assert ended.status == 0
    assert "run again alone" in ended.complained
    assert contents(tmp_path / "out") == undisturbed


@pytest.mark.parametrize(
    ("number", "status", "whole_group"), [(signal.SIGINT, 130, True), (signal.SIGTERM, 143, False)]
)
def test_an_interrupted_run_is_carried_on_by_the_same_command(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str], *, number: int, status: int, whole_group: bool
) -> None:
    """A terminal's Ctrl-C reaches the workers too, a scheduler's signal perhaps the parent alone."""
    study, out = make_study(), tmp_path / "out"
    slow = {"SLOW_S": "0.7", "MARK": str(tmp_path / "slow")}
    run = study.start("measure", study.file, "--out", out, "--workers", 1, **slow)
    wait_for((out / "images" / "image-0" / "record.json").exists)
    if whole_group:
        os.killpg(run.pid, number)
    else:
        os.kill(run.pid, number)
    told, complained = run.communicate(timeout=DEADLINE_S)
    assert run.returncode == status, complained
    assert "Traceback" not in told + complained
    assert "the same command carries on" in told
    assert told.splitlines()[-1].endswith(f"exit status {status}")
    kept = json.loads((out / "study.json").read_text())
    assert kept["exit_status"] == status
    assert kept["counts"]["measured"] >= 1
    assert kept["counts"]["pending"] >= 1
    ended = study.measure(out)
    assert ended.status == 0
    assert f"({kept['counts']['measured']} were current)" in ended.told
    assert contents(out) == undisturbed


def test_an_interrupt_while_workers_start_is_no_traceback(make_study: MakeStudy, tmp_path: Path) -> None:
    """Workers that took a Ctrl-C of the terminal for their own would die in their imports and be told as crashes."""
    study, out = make_study(2), tmp_path / "out"
    run = study.start("measure", study.file, "--out", out, "--workers", 2)
    wait_for(lambda: len(workers_of(run.pid)) >= 2)
    os.killpg(run.pid, signal.SIGINT)
    told, complained = run.communicate(timeout=DEADLINE_S)
    assert run.returncode == 130, complained
    assert "Traceback" not in told + complained
    assert "retry" not in complained
    assert "the same command carries on" in told


def test_a_second_interrupt_ends_at_once_and_leaves_no_worker(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(2), tmp_path / "out"
    slow = {"SLOW_S": "300", "MARK": str(tmp_path / "slow")}
    run = study.start("measure", study.file, "--out", out, "--workers", 2, **slow)
    wait_for((tmp_path / "slow").exists)
    workers = workers_of(run.pid)
    os.killpg(run.pid, signal.SIGINT)
    time.sleep(0.5)
    os.killpg(run.pid, signal.SIGINT)
    told, complained = run.communicate(timeout=DEADLINE_S)
    assert run.returncode == 130, complained
    assert "Traceback" not in told + complained
    assert states(out) == {"image-0": "pending", "image-1": "pending"}
    wait_for(lambda: not any(Path(f"/proc/{pid}").exists() for pid in workers))


def test_a_killed_run_leaves_no_worker_and_is_carried_on(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    study, out = make_study(), tmp_path / "out"
    slow = {"SLOW_S": "0.7", "MARK": str(tmp_path / "slow")}
    run = study.start("measure", study.file, "--out", out, "--workers", 1, **slow)
    wait_for((out / "images" / "image-0").exists)
    workers = workers_of(run.pid)
    run.kill()
    run.communicate()
    wait_for(lambda: not any(Path(f"/proc/{pid}").exists() for pid in workers))
    assert study.measure(out).status == 0  # the dead run's marker is taken over
    assert contents(out) == undisturbed


def test_workers_and_parts_give_the_same_bytes(make_study: MakeStudy, tmp_path: Path) -> None:
    study = make_study(5, method="ridge")
    (study.folder / "image-4.png").write_bytes(b"")
    assert study.measure(tmp_path / "one").status == 1
    assert study.measure(tmp_path / "two", "--workers", 2).status == 1
    parts = tmp_path / "parts"
    ended = study.measure(parts, "--part", "1/3")
    assert ended.status == 0
    assert f"vasohm gather {parts}" in ended.told
    assert {path.name for path in parts.iterdir()} <= {"images", "parts", "run"}
    study.measure(parts, "--part", "2/3")
    gathered = study.run("gather", parts)
    assert gathered.status == 1
    assert "part 3/3 is missing" in gathered.told
    study.measure(parts, "--part", "3/3")
    gathered = study.run("gather", parts)
    assert gathered.told.splitlines()[-1] == "5 images: 4 measured, 0 empty, 1 failed; exit status 1"
    whole = contents(tmp_path / "one")
    assert contents(tmp_path / "two") == whole
    assert contents(parts) == whole
    study.measure(parts, "--part", "1/2")
    mixed = study.run("gather", parts)
    assert mixed.status == 2
    assert "parts of 2 and of 3 are mixed" in mixed.complained


def test_the_order_of_the_sheet_changes_no_image(make_study: MakeStudy, tmp_path: Path) -> None:
    """Wrong if a result hung on which image was measured before it; the joined tables follow the sheet."""
    study = make_study(3, method="ridge")
    assert study.measure(tmp_path / "one").status == 0
    study.sheet({name: f"{name}.png" for name in reversed(study.ids)})
    assert study.measure(tmp_path / "other").status == 0

    def of_images(out: Path) -> dict[str, str]:
        return {name: held for name, held in contents(out).items() if name.startswith("images/")}

    assert of_images(tmp_path / "other") == of_images(tmp_path / "one")
    first = [(tmp_path / out / "images_all.csv").read_text().splitlines()[1:] for out in ("one", "other")]
    assert first[0] == first[1][::-1]


def test_parts_of_an_edited_study_can_all_be_run_again(make_study: MakeStudy, tmp_path: Path) -> None:
    """A part that refused because the other is older would lock the folder for both."""
    study, out = make_study(1), tmp_path / "out"
    for part in ("1/2", "2/2"):
        assert study.measure(out, "--part", part).status == 0
    study.file.write_text(study.file.read_text().replace("[3.0, 12.0]", "[3.0, 13.0]"))
    assert study.measure(out, "--part", "1/2").status == 0
    mixed = study.run("gather", out)
    assert mixed.status == 2
    assert "differs from 1-of-2.json in configuration" in mixed.complained
    assert study.measure(out, "--part", "2/2").status == 0
    assert study.run("gather", out).status == 0


def test_two_runs_never_share_a_folder(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(1), tmp_path / "out"
    slow = {"SLOW_S": "300", "MARK": str(tmp_path / "slow")}
    run = study.start("measure", study.file, "--out", out, "--workers", 1, **slow)
    wait_for((tmp_path / "slow").exists)
    second = study.measure(out)
    assert second.status == 2
    assert f"in use by process {run.pid}, since 2" in second.complained
    assert study.run("gather", out).status == 2
    run.kill()
    run.communicate()


def test_a_folder_of_another_study_is_not_mixed(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(2), tmp_path / "out"
    study.measure(out)
    study.file.write_text(study.file.read_text().replace('"drawn"', '"other"'))
    study.sheet({"another": "image-1.png", "image-0": "image-0.png"})
    refused = study.measure(out)
    assert refused.status == 2
    assert "'drawn'" in refused.complained
    assert study.measure(out, "--dry-run").status == 2
    assert study.measure(out, "--force").status == 0
    assert {path.name for path in (out / "images").iterdir()} == {"another", "image-0"}
    study.measure(tmp_path / "fresh")
    assert contents(out) == contents(tmp_path / "fresh")


def test_a_full_disk_fails_images_and_is_carried_on(
    make_study: MakeStudy, tmp_path: Path, undisturbed: dict[str, str]
) -> None:
    """The limit on a file's size stands for a full disk: the write fails, the process does not."""
    study, out = make_study(), tmp_path / "out"
    limit = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (3000, limit[1]))
    try:
        run = study.start("measure", study.file, "--out", out, "--workers", 1)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, limit)
    told, complained = run.communicate(timeout=DEADLINE_S)
    assert run.returncode == 1, told + complained
    assert "Traceback" not in complained
    assert "free in the results folder" in complained
    assert not [path for path in (out / "images").rglob("*") if path.is_file()]
    assert study.measure(out).status == 0
    assert contents(out) == undisturbed


def test_named_images_need_no_study_file(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(2), tmp_path / "out"
    log = tmp_path / "log.jsonl"
    ended = study.run(
        "measure", "image-0.png", "image-1.png", "--pixel-size", 2.0, "--out", out, "--quiet", "--log-json", log
    )
    assert ended.status == 0, ended.complained
    assert ended.told == "2 images: 2 measured, 0 empty, 0 failed; exit status 0\n"
    assert ended.complained == ""
    events = [json.loads(line) for line in log.read_text().splitlines()]
    assert {event["image_id"] for event in events if event["event"] == "measured"} == {"image-0", "image-1"}
    assert all(event["rss"] > 0 for event in events if event["event"] == "measured")
    stages = [event["stage"] for event in events if event["event"] == "stage" and event["image_id"] == "image-0"]
    assert stages[:2] == ["start", "read"]
    assert stages[-1] == "write"


def test_results_name_no_machine_person_or_place(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(2), tmp_path / "out"
    (study.folder / "image-1.png").write_bytes(b"GIF?")
    study.measure(out, USER="canary-user", HOME="/home/canary-user")
    wanted = [str(tmp_path), "canary-user", sys.prefix]
    if len(socket.gethostname()) > 3:  # a shorter one would be found by chance
        wanted.append(socket.gethostname())
    for path in out.rglob("*"):
        if path.is_file() and path.relative_to(out).parts[0] != "run":
            found = [word for word in wanted if word.encode() in path.read_bytes()]
            assert not found, f"{path.name} holds {found}"


def test_a_study_is_measured_in_a_bare_surrounding(make_study: MakeStudy, tmp_path: Path) -> None:
    """Cluster nodes come without a home, a locale or a terminal, and with few open files."""
    study, out = make_study(2, method="ridge"), tmp_path / "out"
    run = subprocess.run(
        [
            "env",
            "-i",
            f"PYTHONPATH={os.environ.get('PYTHONPATH', '')}",
            "sh",
            "-c",
            f"ulimit -n 64; exec {sys.executable} -m vasohm measure {study.file} --out {out} >&-",
        ],
        capture_output=True,
        text=True,
        check=False,
        cwd=study.folder,
    )
    assert run.returncode == 0, run.stderr
    assert states(out) == dict.fromkeys(study.ids, "measured")
    with Path("/dev/full").open("w") as full:
        words = [sys.executable, "-m", "vasohm", "measure", study.file, "--out", tmp_path / "other"]
        assert subprocess.run(words, stdout=full, stderr=full, check=False).returncode == 0
    assert contents(tmp_path / "other") == contents(out)
