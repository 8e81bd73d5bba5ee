"""The command `compare` as a person runs it: on results that were measured, and on large ones written by hand."""

import json
import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from conftest import DrawnStudy
from frictionless import Package

from vasohm.results.columns_cohorts import COHORTS

MakeStudy = Callable[..., DrawnStudy]
COMPARE = """
[compare]
outcomes = ["segments.radius_hydraulic_um", "image.length_density_per_mm", "zone.radius_um"]
by = "group"
reference = "control"
"""
NAMES = "image_id,file,subject,eye,group,age_years,pixel_size_um,pixel_size_se_um,disc_x_px,disc_y_px,disc_radius_px"


def measured(make_study: MakeStudy, n: int = 4, compare: str = COMPARE) -> tuple[DrawnStudy, Path]:
    """Measure pictures of two subjects a group; the second group's are wider by its pixel size."""
    study = make_study(n)
    group, pixel_um = ("control", "=treated"), (2.0, 2.4)
    rows = {
        image_id: f"{image_id}.png,s{k},L,{group[k % 2]},{60 + k * k},{pixel_um[k % 2]},0.02,48,48,8"
        for k, image_id in enumerate(study.ids)
    }
    study.sheet(rows, NAMES)
    study.file.write_text(study.file.read_text() + compare)
    out = study.folder / "out"
    ended = study.measure(out)
    assert ended.status == 0, ended.complained
    return study, out


def table(folder: Path, name: str) -> pd.DataFrame:
    return pd.read_csv(folder / f"{name}.csv", keep_default_na=False, na_values={"n_careful": [""], "n_needed": [""]})


@pytest.mark.usefixtures("one_process")
def test_cohorts_are_compared_from_results_to_page(make_study: MakeStudy) -> None:
    """Tables, plots and page would not be there, not agree with what was measured, or run what a sheet says."""
    study, out = measured(make_study, compare=COMPARE + "plan_ratio = 1.2\n")
    to = study.folder / "compared"
    ended = study.run("compare", study.file, "--results", out, "--out", to)
    assert ended.status == 0, ended.complained
    comparison = table(to, "comparison")
    assert list(comparison.columns) == [column.name for column in COHORTS["comparison"]]
    assert comparison["level"].tolist() == ["'=treated"] * 3  # no formula for a spreadsheet
    images = pd.read_csv(out / "images_all.csv")
    density = np.log(images["length_density_per_mm"].to_numpy())
    by_hand = np.exp(density[1::2].mean() - density[::2].mean())
    of_density = comparison[comparison["outcome"] == "image.length_density_per_mm"].iloc[0]
    assert of_density["ratio"] == pytest.approx(by_hand, rel=1e-9)
    assert of_density["method"] == "welch"
    assert "two_calibrations" in of_density["flags"]
    attrition = table(to, "attrition")
    assert attrition["n_with_value"].tolist() == [2] * 6
    assert table(to, "zone")["image_id"].tolist() == list(study.ids)
    package = Package(str(to / "datapackage.json"))
    assert package.validate().valid, package.validate().flatten(["message"])
    page = (to / "index.html").read_text()
    assert "For research. Results are no basis for the diagnosis" in page
    assert "Content-Security-Policy" in page
    pictures = set(re.findall(r'src="([^"]+)"', page))
    assert pictures == {"forest.svg", "levels-1.svg", "levels-2.svg", "levels-3.svg"}
    for name in pictures:
        assert "<text" in (to / name).read_text()  # text as text, for whoever sets it in print
        assert (to / name).with_suffix(".png").exists()
    before = {path.name: path.read_bytes() for path in to.iterdir()}
    assert study.run("compare", study.file, "--results", out, "--out", to).status == 0
    assert {path.name: path.read_bytes() for path in to.iterdir()} == before


@pytest.mark.usefixtures("one_process")
def test_what_cannot_be_compared_is_refused_with_what_is_there(make_study: MakeStudy) -> None:
    """A table would be written from another study's results, half of them, or a design that holds nothing."""
    study, out = measured(make_study)
    sheet, text = (study.folder / "images.csv").read_text(), study.file.read_text()
    rows = sheet.splitlines()

    def told(study_text: str = text, sheet_text: str = sheet, results: Path = out, to: str = "compared") -> str:
        study.file.write_text(study_text)
        (study.folder / "images.csv").write_text(sheet_text)
        ended = study.run("compare", study.file, "--results", results, "--out", study.folder / to)
        assert ended.status == 2, (ended.told, ended.complained)
        assert not (study.folder / "compared").exists()
        return ended.complained

    assert "compare: is missing. Say what is compared" in told(text.partition("[compare]")[0])
    assert "holds no study.json" in told(results=study.folder)
    assert "holds the results of study 'drawn', not of 'other'" in told(text.replace('"drawn"', '"other"'))
    assert "was measured with blood.hematocrit = 0.45; the study now says 0.4. Measure again" in told(
        text.replace("[network]", "[blood]\nhematocrit = 0.4\n[network]")
    )
    assert "lacks image-9 of 5 images" in told(
        sheet_text=f"{sheet}image-9,image-0.png,s9,L,control,70,2,0.02,48,48,8\n"
    )
    assert "column subject" in told(sheet_text=sheet.replace("subject", "animal"))
    assert "are of one subject" in told(sheet_text=re.sub(r",s\d,", ",s1,", sheet))
    assert "nothing to compare with" in told(sheet_text=sheet.replace("=treated", "control"))
    assert "'subject' is empty in 1 of 4 rows" in told(sheet_text=sheet.replace(",s2,", ",,"))
    assert "holds the results of measure" in told(to="out")
    same = [f"{row},{'arm' if k == 0 else row.split(',')[4]}" for k, row in enumerate(rows)]
    arm = text + 'covariates = ["arm"]\n'
    assert "covariate 'arm control' tells the same as the levels" in told(arm, "\n".join(same) + "\n")
    unsolved = text.replace("segments.radius_hydraulic_um", "networks.resistance_pa_s_m3")
    assert "'networks.resistance_pa_s_m3' has no value in any image that is compared" in told(unsolved)


@pytest.fixture
def written(tmp_path: Path) -> Path:
    """Results of forty subjects, both eyes, written as `measure` writes them; six pictures of one group failed."""
    rng = np.random.default_rng(3)
    rows, segments, states = [], [], []
    for k in range(40):
        own, level = rng.normal(0, 0.2), "treated" if k < 20 else "control"
        for eye in "LR":
            image_id = f"i{k}{eye}"
            is_failed = k < 6 and eye == "L"
            failure = {"failure": {"stage": "read", "error": "truncated", "message": "x"}} if is_failed else {}
            states.append({"image_id": image_id, "status": "failed" if is_failed else "measured", **failure})
            rows.append(f"{image_id},{image_id}.png,p{k:02d},{eye},{level},{'12'[eye == 'R']}")
            for kind, size in () if is_failed else (("arteriole", 8.0), ("venule", 15.0)):
                narrowed = -0.25 if (level, kind) == ("treated", "arteriole") else 0.0
                radius = size * np.exp(own + narrowed + rng.normal(0, 0.1, 12))
                segments += [(image_id, kind, rng.uniform(50, 200), r, r, 0.02 * r, 0.05) for r in radius]
    (tmp_path / "images.csv").write_text("image_id,file,subject,eye,group,visit\n" + "\n".join(rows) + "\n")
    text = '[study]\nname = "large"\nsheet = "images.csv"\n[image]\npreset = "fundus"\n'
    (tmp_path / "study.toml").write_text(text + '[compare]\nby = "group"\nreference = "control"\nplan_ratio = 1.1\n')
    write_results(tmp_path, states, segments)
    return tmp_path


def write_results(folder: Path, states: list[dict[str, object]], segments: list[tuple[object, ...]]) -> None:
    """Write what `compare` reads of a results folder."""
    from vasohm.config.study_file import read_study

    out = folder / "out"
    out.mkdir()
    state = {
        "study": "large",
        "exit_status": 1,
        "images": states,
        "warnings": [],
        "methods": {"paragraph": "", "references": [], "cautions": []},
        "configuration": dict(read_study(folder / "study.toml").resolved),
        "versions": {},
    }
    (out / "study.json").write_text(json.dumps(state))
    finished = [one["image_id"] for one in states if one["status"] == "measured"]
    images = pd.DataFrame({"image_id": finished, "pixel_size_um": 5.0, "pixel_size_se_um": 0.1, "flags": ""})
    images["pixel_size_source"], images["length_density_per_mm"] = (
        "sheet",
        np.random.default_rng(5).normal(8, 0.5, len(finished)),
    )
    images.to_csv(out / "images_all.csv", index=False)
    names = ["image_id", "vessel_class", "length_um", "radius_mean_um", "radius_hydraulic_um"]
    names += ["radius_hydraulic_se_um", "ln_resistance_random_se"]
    pd.DataFrame(segments, columns=names).to_csv(out / "segments_all.csv", index=False)
    per_network = pd.DataFrame(
        {
            "image_id": np.repeat(finished, 2),
            "vessel_class": ["arteriole", "venule"] * len(finished),
            "length_um": 1000.0,
            "resistance_pa_s_m3": 1e13 * np.exp(np.random.default_rng(4).normal(0, 0.3, 2 * len(finished))),
            "ln_resistance_random_se": 0.05,
            "ln_resistance_shared_se": 0.08,
        }
    )
    per_network.to_csv(out / "networks_all.csv", index=False)


def test_usual_outcomes_by_class_and_calibre_find_what_is_there(written: Path) -> None:
    """A narrowing of arterioles by exp(-0.25) would be lost among classes, or a failed picture would go unsaid."""
    from vasohm.cli import run_command

    to = written / "compared"
    assert (
        run_command(["compare", f"{written / 'study.toml'}", "--results", f"{written / 'out'}", "--out", f"{to}"]) == 0
    )
    comparison = table(to, "comparison")
    radius = comparison[comparison["outcome"] == "segments.radius_hydraulic_um"]
    assert set(radius["calibre_class"]) == {"0-10", "10-25", "25-50"}
    assert set(comparison["outcome"]) == {
        "networks.resistance_pa_s_m3",
        "segments.radius_hydraulic_um",
        "image.length_density_per_mm",
    }
    resistance = comparison[comparison["outcome"] == "networks.resistance_pa_s_m3"]
    assert set(resistance["vessel_class"]) == {"arteriole", "venule"}
    assert not comparison["flags"].str.contains("two_calibrations").any()
    assert resistance["flags"].str.contains("unequal_loss").all()  # 6 of 40 against 0 of 40: Fisher's p is 0.026
    lost = table(to, "attrition")
    treated = lost[(lost["outcome"] == "networks.resistance_pa_s_m3") & (lost["level"] == "treated")].iloc[0]
    counts = ["n_images_sheet", "n_measured", "n_failed", "n_with_value", "n_subjects_sheet", "n_subjects"]
    assert [treated[name] for name in counts] == [40, 34, 6, 34, 20, 20]
    assert "i0L (failed: truncated)" in treated["left_out"]
    planning = table(to, "planning")
    assert set(planning["design"]) == {"groups"}
    planned = planning.dropna(subset="n_needed")
    assert len(planned) >= 6
    assert (planned["n_careful"] >= planned["n_needed"]).all()
    variance = table(to, "variance")
    assert (variance["measurement_sd"].astype(float) >= 0).all()
