"""Study files and plug-ins in a whole command: what is wrong ends with status 2, or costs the image that meets it."""

import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from conftest import SIZE_PX, DrawnStudy, failures, states

MakeStudy = Callable[..., DrawnStudy]
BROKEN = {
    "an unknown key": ("[scale]", "[scale]\npixel_sice_um = 2.0", "the nearest known one is 'pixel_size_um'"),
    "an unknown table": ("[scale]", "[scales]\nx = 1\n[scale]", "scales"),
    "truth for a number": ("pixel_size_um = 2.0", "pixel_size_um = true", "must be a number"),
    "no number": ("pixel_size_um = 2.0", "pixel_size_um = nan", "must be a finite number"),
    "an overflow": ("pixel_size_um = 2.0", "pixel_size_um = 1e400", "must be a finite number"),
    "a range upside down": ("[3.0, 12.0]", "[12.0, 3.0]", "the smaller first"),
    "a key twice": ("[scale]", "[scale]\npixel_size_um = 2.0", "is no valid TOML"),
    "deep brackets": ("[scale]", "x = " + "[" * 20_000, "nested too deeply"),
    "a method that nobody has": ('method = "told"', 'method = "tolt"', "Did you mean 'told'?"),
    "no time at all": ("[scale]", "[run]\nimage_timeout_s = 0\n[scale]", "must be greater than 0"),
    "memory for nothing": ("[scale]", "[run]\nmemory_limit_mb = 10\n[scale]", "must be at least 300"),
}


@pytest.mark.timeout(10)
@pytest.mark.parametrize("name", BROKEN)
def test_a_broken_study_ends_with_status_2_and_writes_nothing(make_study: MakeStudy, tmp_path: Path, name: str) -> None:
    study, out = make_study(1), tmp_path / "out"
    said, instead, words = BROKEN[name]
    text = study.file.read_text()
    assert said in text
    study.file.write_text(text.replace(said, instead, 1))
    ended = study.measure(out)
    assert ended.status == 2
    assert words in ended.complained, ended.complained
    assert "Traceback" not in ended.complained
    assert not out.exists()


@pytest.mark.usefixtures("one_process")
def test_a_faulty_plug_in_costs_the_image_that_meets_it(make_study: MakeStudy, tmp_path: Path) -> None:
    """Wrong if a mask of another shape were measured, or the fault were told without the plug-in's name."""
    study, out = make_study(3), tmp_path / "out"
    ended = study.measure(out, DEEDS=f"{SIZE_PX}:shape {SIZE_PX + 1}:raise")
    assert ended.status == 1
    assert list(states(out).values()) == ["failed", "failed", "measured"]
    rows = failures(out)
    assert (rows["image-0"]["stage"], rows["image-0"]["error"]) == ("segment", "plugin")
    assert "'told'" in rows["image-0"]["message"]
    assert rows["image-1"]["stage"] == "segment"
    assert "hidden place" in rows["image-1"]["message"]


def test_a_plug_in_that_is_not_named_is_not_loaded(make_study: MakeStudy, tmp_path: Path) -> None:
    """Installed is not asked for: code of a package that the study does not name must not run."""
    study, canary = make_study(1, method="ridge"), tmp_path / "canary"
    (study.plugin / "told_segmenter.py").write_text(f"open({str(canary)!r}, 'w').close()\nraise RuntimeError('mine')\n")
    sys.modules.pop("told_segmenter", None)
    assert study.run("check", study.file).status == 0
    assert not canary.exists()
    study.file.write_text(study.file.read_text().replace('method = "ridge"', 'method = "told"'))
    ended = study.run("check", study.file)
    assert ended.status == 2
    assert canary.exists()
    assert "fails to load: RuntimeError: mine" in ended.complained
    assert "from told-segmenter" in ended.complained


@pytest.mark.usefixtures("one_process")
def test_a_plug_in_that_cannot_be_loaded_is_told_for_each_image(make_study: MakeStudy, tmp_path: Path) -> None:
    study, out = make_study(2), tmp_path / "out"
    (study.plugin / "told_segmenter.py").write_text("raise RuntimeError('mine')\n")
    sys.modules.pop("told_segmenter", None)
    ended = study.measure(out)
    assert ended.status in (1, 2)
    assert "fails to load: RuntimeError: mine" in ended.complained
    assert "Traceback" not in ended.complained
