"""Sheets in a whole command: what is wrong with one ends with status 2 before anything is written.

The many ways of a broken sheet are in tests/unit/test_sheet.py; here is what only a whole command shows.
"""

import time
from collections.abc import Callable
from pathlib import Path

import pytest
from conftest import DrawnStudy, failures, states

from vasohm.config.sheet import read_sheet

MakeStudy = Callable[..., DrawnStudy]
HEAD = b"image_id,file\n"
BROKEN = {
    "UTF-16": ("image_id,file\na,image-0.png\n".encode("utf-16"), "UTF-16"),
    "semicolons": (b"image_id;file\na;image-0.png\n", "semicolons"),
    "trailing commas": (HEAD + b"a,image-0.png,\n", "has 3 cells, but the header has 2"),
    "an open quote": (HEAD + b'a,"image-0.png\n', "a quote"),
    "a case apart": (HEAD + b"a,image-0.png\nA,image-0.png\n", "differs only in case"),
    "a way up": (HEAD + b"../a,image-0.png\n", "is no image_id"),
    "no rows": (HEAD, "no images"),
    "a file elsewhere": (HEAD + b"a,../canary.png\n", "leads out of the sheet's folder"),
    "a file of the system": (HEAD + b"a,/etc/passwd\n", "is an absolute path"),
    "a web address": (HEAD + b"a,https://a.org/a.png\n", "is a URL"),
}


@pytest.mark.parametrize("name", BROKEN)
def test_a_broken_sheet_ends_with_status_2_and_writes_nothing(make_study: MakeStudy, tmp_path: Path, name: str) -> None:
    study, out = make_study(1), tmp_path / "out"
    data, words = BROKEN[name]
    (study.folder / "images.csv").write_bytes(data)
    for ended in (study.measure(out), study.run("check", study.file)):
        assert ended.status == 2
        assert words in ended.complained
        assert "Traceback" not in ended.complained
    assert not out.exists()


@pytest.mark.usefixtures("one_process")
def test_files_elsewhere_are_read_only_where_the_study_allows_it(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(2), tmp_path / "out"
    (study.folder / "image-0.png").rename(tmp_path / "elsewhere.png")
    (study.folder / "linked.png").symlink_to(tmp_path / "elsewhere.png")
    study.sheet({"up": "../elsewhere.png", "absolute": f"{tmp_path}/elsewhere.png", "link": "linked.png"})
    refused = study.measure(out)
    assert refused.status == 2
    assert refused.complained.count("set allow_outside = true in [study]") == 3
    study.file.write_text(study.file.read_text().replace("[study]", "[study]\nallow_outside = true"))
    assert study.measure(out).status == 0
    assert set(states(out).values()) == {"measured"}
    assert not [path for path in out.rglob("*.*") if str(tmp_path).encode() in path.read_bytes()]
    study.sheet({"web": "https://a.org/a.png"})
    assert "is a URL" in study.measure(out).complained


@pytest.mark.usefixtures("one_process")
def test_terminals_and_edits_that_meet_nothing_are_told_and_left_out(make_study: MakeStudy, tmp_path: Path) -> None:
    """A stray point costs itself only; a word that is none stops the request."""
    study, out = make_study(1), tmp_path / "out"
    study.file.write_text(study.file.read_text().replace('terminals = "none"', 'terminals = "file"'))
    (study.folder / "t.csv").write_text("x_px,y_px,role\n10,48,inlet\n-500,900,outlet\n")
    (study.folder / "e.csv").write_text("x_px,y_px,edit\n5,5,drop\n")
    study.sheet({"image-0": "image-0.png,t.csv,e.csv"}, "image_id,file,terminals_file,edits_file")
    assert study.measure(out).status == 0
    row = (out / "images" / "image-0" / "image.csv").read_text()
    assert "terminal_missed" in row
    assert "edit_missed" in row
    record = (out / "images" / "image-0" / "record.json").read_text()
    assert "-500" in record
    (study.folder / "t.csv").write_text("x_px,y_px,role\n10,48,entrance\n")
    ended = study.measure(out)
    assert ended.status == 2
    assert "'entrance'" in ended.complained
    assert failures(out) == {}  # what was there stays as it was


@pytest.mark.slow
def test_a_sheet_of_a_hundred_thousand_rows_is_read_in_seconds(tmp_path: Path) -> None:
    """A cohort of a national screening must be checked before lunch: 60 s, here with room for a busy machine."""
    (tmp_path / "a.png").write_bytes(b"")
    rows = "".join(f"image-{n},a.png,{n % 2}\n" for n in range(100_000))
    (tmp_path / "images.csv").write_text(f"image_id,file,group\n{rows}")
    begun = time.process_time()
    sheet = read_sheet(tmp_path / "images.csv")
    assert len(sheet.images) == 100_000
    assert time.process_time() - begun < 60
