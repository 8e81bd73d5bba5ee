"""Laws and segmenters of other packages, installed as a package manager would leave them on the path."""

import sys
from pathlib import Path

import numpy as np
import pytest

import vasohm
from vasohm.errors import PluginError, RequestError
from vasohm.flow.rheology import apparent_viscosity, get_law, law_names
from vasohm.image.segment import get_segmenter, segmenter_names

CODE = """
import numpy as np
from vasohm.flow.rheology import ViscosityLaw
from vasohm.image.segment import Segmenter

def doubled(radius_um, hematocrit, *, plasma_viscosity_mpa_s, parameters):
    return 2.0 * plasma_viscosity_mpa_s + 0.0 * radius_um * hematocrit

def flat(radius_um, hematocrit, *, plasma_viscosity_mpa_s, parameters):
    return np.array([1.0, 2.0])

def negative(radius_um, hematocrit, *, plasma_viscosity_mpa_s, parameters):
    return -radius_um * hematocrit

def brightest(prepared, parameters):
    return prepared.signal > parameters.get("height", 0.5) * prepared.signal.max()

def numbers(prepared, parameters):
    return 1.0 * prepared.signal

whole_law = ViscosityLaw(doubled, (1.0, 2.0), (0.1, 0.2), "Someone, 2020")
whole_segmenter = Segmenter(brightest, "Someone, 2021")
neither = 3
"""
LAWS = {
    "doubled": "doubled",
    "flat": "flat",
    "negative": "negative",
    "whole": "whole_law",
    "number": "neither",
    "absent": "nowhere_to_be_found",
    "twice": "doubled",
    "constant": "doubled",
}
SEGMENTERS = {
    "brightest": "brightest",
    "numbers": "numbers",
    "whole": "whole_segmenter",
    "number": "neither",
    "absent": "nowhere_to_be_found",
    "twice": "brightest",
    "ridge": "brightest",
    "mask": "brightest",
}


def install(folder: Path, package: str, groups: dict[str, dict[str, str]]) -> None:
    """Leave a package's module and its metadata in a folder."""
    module = package.replace("-", "_")
    (folder / f"{module}.py").write_text(CODE, encoding="utf-8")
    info = folder / f"{module}-1.0.dist-info"
    info.mkdir()
    (info / "METADATA").write_text(f"Metadata-Version: 2.1\nName: {package}\nVersion: 1.0\n", encoding="utf-8")
    lines = []
    for group, entries in groups.items():
        lines += [f"[{group}]", *(f"{name} = {module}:{value}" for name, value in entries.items())]
    (info / "entry_points.txt").write_text("\n".join(lines) + "\n", encoding="utf-8")


@pytest.fixture(autouse=True)
def installed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Two packages, the second of which takes a name that the first has."""
    install(tmp_path, "first-lab", {"vasohm.viscosity_laws": LAWS, "vasohm.segmenters": SEGMENTERS})
    second = {"vasohm.viscosity_laws": {"twice": "flat"}, "vasohm.segmenters": {"twice": "numbers"}}
    install(tmp_path, "second-lab", second)
    monkeypatch.syspath_prepend(tmp_path)
    for module in ("first_lab", "second_lab"):
        monkeypatch.delitem(sys.modules, module, raising=False)


def picture() -> np.ndarray:
    """A dark tube on a noisy ground."""
    light = np.random.default_rng(0).normal(180.0, 1.0, (64, 80))
    light[28:36] -= 60.0
    return np.clip(light, 0, 255).astype(np.uint8)


def test_names_are_known_without_an_import_and_stand_once() -> None:
    for names in (law_names(), segmenter_names()):
        assert {"absent", "twice", "whole"} <= set(names)
        assert len(names) == len(set(names))
    assert "first_lab" not in sys.modules


def test_a_law_of_another_package_is_used_by_name() -> None:
    assert apparent_viscosity("doubled", 5.0, 0.45) == 2.4
    bare = get_law("doubled")
    assert (bare.citation, bare.valid_radius_um) == ("no source given", (0.0, np.inf))
    assert get_law("whole").citation == "Someone, 2020"


def test_a_segmenter_of_another_package_is_used_by_name_with_its_parameters() -> None:
    assert get_segmenter("whole").citation == "Someone, 2021"
    assert get_segmenter("brightest").citation == "no source given"
    found = {
        height: vasohm.measure_image(
            picture(), pixel_size_um=2.0, segment={"method": "brightest", "parameters": {"height": height}}
        )
        for height in (0.5, 10.0)
    }
    assert found[0.5].mask[32, 40]
    assert not found[0.5].mask[10, 40]
    assert not found[10.0].mask.any()


@pytest.mark.parametrize(
    ("law", "words"),
    [
        ("flat", r"law 'flat' returned shape \(2,\) where \(\) was asked"),
        ("negative", r"law 'negative' returned a viscosity of -2.25 mPa·s"),
        ("number", r"viscosity law 'number' \(first_lab:neither, from first-lab\) is a int; it must be a function"),
        ("absent", r"viscosity law 'absent' \(first_lab:nowhere_to_be_found, from first-lab\) fails to load: Attrib"),
        (
            "twice",
            r"'twice' \(first_lab:doubled, from first-lab\) and 'twice' \(second_lab:flat, from second-lab\) has",
        ),
        ("constant", r"viscosity law 'constant' \(first_lab:doubled, from first-lab\) has a name that is taken"),
    ],
)
def test_a_faulty_law_of_another_package_is_named(law: str, words: str) -> None:
    with pytest.raises(PluginError, match=words):
        apparent_viscosity(law, 5.0, 0.45, parameters={"viscosity_mpa_s": 3.0})


@pytest.mark.parametrize(
    ("method", "words"),
    [
        ("numbers", r"segmenter 'numbers' must return a bool array of shape \(64, 80\)"),
        ("number", r"segmenter 'number' \(first_lab:neither, from first-lab\) is a int; it must be a function"),
        ("absent", r"segmenter 'absent' \(first_lab:nowhere_to_be_found, from first-lab\) fails to load: Attribute"),
        ("twice", r"'twice' \(first_lab:brightest, from first-lab\) and 'twice' \(second_lab:numbers, from second-"),
        ("ridge", r"segmenter 'ridge' \(first_lab:brightest, from first-lab\) has a name that is taken"),
    ],
)
def test_a_faulty_segmenter_of_another_package_is_named(method: str, words: str) -> None:
    """One that takes the place of our own would measure otherwise without a word."""
    with pytest.raises(PluginError, match=words):
        vasohm.measure_image(picture(), pixel_size_um=2.0, segment={"method": method})


def test_a_name_that_nobody_has_is_refused_with_those_there_are(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    with pytest.raises(PluginError, match=r"no segmenter 'none' is registered; there are ridge, hessian, mask, absent"):
        get_segmenter("none")
    with pytest.raises(RequestError, match=r"'brightes' must be one of .*Did you mean 'brightest'"):
        vasohm.measure_image(picture(), pixel_size_um=2.0, segment={"method": "brightes"})
    monkeypatch.setattr(sys, "path", [entry for entry in sys.path if entry != str(tmp_path)])
    with pytest.raises(PluginError, match="'mask' is the sheet's mask_file and no segmenter"):
        get_segmenter("mask")
