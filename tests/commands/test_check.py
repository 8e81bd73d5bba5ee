"""`vasohm check` and the commands that only tell: every problem at once, with its place, and nothing measured."""

from collections.abc import Callable
from pathlib import Path

import numpy as np
from conftest import SIZE_PX, DrawnStudy
from PIL import Image

MakeStudy = Callable[..., DrawnStudy]


def test_a_sound_study_is_told_in_one_line(make_study: MakeStudy) -> None:
    study = make_study(2)
    checked = study.run("check", study.file)
    assert checked.status == 0, checked.complained
    assert checked.told == f"{study.file}: 2 images, no problem found\n"
    assert {path.name for path in study.folder.iterdir()} == {"study.toml", "images.csv", "image-0.png", "image-1.png"}


def test_what_this_version_does_not_use_is_told_and_is_no_problem(make_study: MakeStudy) -> None:
    """Nobody should wait for a correction by eye length that never comes."""
    study = make_study(2)
    rows = {"image-0": "image-0.png,a,23.5", "image-1": "image-1.png,b,"}
    study.sheet(rows, "image_id,file,group,axial_length_mm")
    checked = study.run("check", study.file)
    assert checked.status == 0, checked.complained
    lines = checked.complained.splitlines()
    assert len(lines) == 1
    assert "axial_length_mm and refraction_d of the sheet are not used" in lines[0]
    assert checked.told.endswith("2 images, no problem found\n")


def test_every_problem_of_the_files_is_told_at_once_with_its_place(make_study: MakeStudy) -> None:
    """A person who mends one problem at a time would need as many runs as there are problems."""
    study = make_study(4)
    cut = study.folder / "image-0.png"
    cut.write_bytes(cut.read_bytes()[:3000])  # its header still promises the whole picture
    Image.fromarray(np.zeros((SIZE_PX, SIZE_PX + 4), np.uint8)).save(study.folder / "wide.png")
    (study.folder / "image-3.png").write_text("<html>log in</html>")
    rows = {
        "image-0": "image-0.png,",
        "image-1": "image-1.png,wide.png",
        "image-2": "gone.png,",
        "image-3": "image-3.png,",
    }
    study.sheet(rows, "image_id,file,mask_file")
    checked = study.run("check", study.file)
    assert checked.status == 2
    lines = checked.complained.splitlines()
    assert len(lines) == 4, checked.complained
    for line, place in zip(
        lines, ("images.csv:2 file", "images.csv:3 mask_file", "images.csv:4 file", "images.csv:5 file"), strict=True
    ):
        assert place in line
    assert "gone.png" in lines[2]
    assert f"{SIZE_PX + 4} x {SIZE_PX}" in lines[1]


def test_missing_and_impossible_lengths_are_told_for_all_images_at_once(make_study: MakeStudy) -> None:
    study = make_study(3)
    study.file.write_text(
        study.file.read_text().replace("pixel_size_um = 2.0", 'pixel_size_um = 2.0\nmagnification = "bennett"')
    )
    study.sheet(
        {"image-0": "image-0.png,", "image-1": "image-1.png,24", "image-2": "image-2.png,"},
        "image_id,file,axial_length_mm",
    )
    checked = study.run("check", study.file)
    assert checked.status == 2
    lines = checked.complained.splitlines()
    assert len(lines) == 2, checked.complained
    for line, place in zip(lines, ("images.csv:2 axial_length_mm", "images.csv:4 axial_length_mm"), strict=True):
        assert place in line
        assert 'magnification = "bennett" needs axial_length_mm' in line
    study.sheet(
        {"image-0": "image-0.png,2", "image-1": "image-1.png,200", "image-2": "image-2.png,long"},
        "image_id,file,axial_length_mm",
    )
    checked = study.run("check", study.file)
    assert checked.status == 2
    for row, words in enumerate(
        ("'2' must be at least 15 and at most 40", "'200' must be at least 15", "'long' is not a number"), start=2
    ):
        assert f"images.csv:{row} axial_length_mm: {words}" in checked.complained


def test_a_missing_pixel_size_is_told_for_each_image(make_study: MakeStudy) -> None:
    study = make_study(2)
    study.file.write_text(study.file.read_text().replace("pixel_size_um = 2.0", ""))
    checked = study.run("check", study.file)
    assert checked.status == 2
    assert checked.complained.count("pixel_size_um") >= 2


def test_a_study_file_that_is_not_there_is_no_traceback(make_study: MakeStudy, tmp_path: Path) -> None:
    study = make_study(1)
    checked = study.run("check", tmp_path / "nowhere.toml")
    assert checked.status == 2
    assert "nowhere.toml" in checked.complained


def test_what_is_registered_and_what_columns_mean_is_told(make_study: MakeStudy) -> None:
    study = make_study(1)
    laws = study.run("laws")
    assert laws.status == 0
    assert "pries-in-vivo" in laws.told
    assert "doi" in laws.told.lower()
    # Pries et al. 1994 at diameters of 20 and 100 um: 3.2311 and 2.5315 times a plasma of 1.2 mPa.s
    assert "3.877 mPa.s at a radius of 10 um, 3.038 mPa.s at 50 um" in laws.told
    columns = study.run("columns")
    assert "  radius_hydraulic_um (number, um): " in columns.told
    about = study.run("about", SLURM_CPUS_PER_TASK="5")
    assert "workers: 5 (from SLURM_CPUS_PER_TASK)" in about.told
    assert str(study.folder) not in about.told


def test_what_is_wrong_with_the_words_of_the_command_is_told_before_anything_is_done(make_study: MakeStudy) -> None:
    """Results among the pictures, or a failed run for a slip of the keyboard, would cost the person their time."""
    study = make_study(1)
    before = {path.name for path in study.folder.iterdir()}
    for words, told in (
        (("measure", study.file, "--out", study.folder), "holds the study's own images.csv. Give --out a folder of"),
        (("measure", "image-0.png", "--out", ".", "--pixel-size", "2"), "holds the study's own image-0.png."),
        (("measure", "sub/gone.png", "--out", "out"), "vasohm: sub/gone.png: no such file."),
        (("measure", "image-0.png", "--out", "out", "--pixel-size", "1,25"), "decimal comma? Write 1.25."),
        (("check", "image-0.png"), "image-0.png: is an image, where a study file (.toml) is wanted."),
    ):
        ended = study.run(*words)
        assert ended.status == 2, ended
        assert told in ended.complained
        assert {path.name for path in study.folder.iterdir()} == before
