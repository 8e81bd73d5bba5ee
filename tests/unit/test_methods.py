"""What the methods paragraph says of choices that change what a number means."""

import re
from pathlib import Path

from vasohm.config.study_file import study_from_mapping
from vasohm.results.methods import DISC_CAUTION, ESTIMATE_CAUTION, Methods
from vasohm.study.gather import methods_used


def methods(**tables: object) -> Methods:
    return methods_used(study_from_mapping({"image": {"preset": "fundus"}, **tables}, Path()), "0")


def test_estimated_ends_are_told_with_their_targets_source_and_caution() -> None:
    """Whoever reads a resistance that rests on an estimate must read that it does."""
    targets = {"target_wall_shear_pa": 2.0, "target_pressure_mmhg": {"arteriole": 45, "venule": 18}}
    told = methods(network={"terminals": "estimate", **targets})
    assert "nearest to 2 Pa (scatter 1 Pa)" in told.paragraph
    assert "45 mmHg (arteriole), 18 mmHg (venule), 31.5 mmHg (capillary), 31.5 mmHg elsewhere" in told.paragraph
    assert any("10.1111/j.1549-8719.2012.00184.x" in source for source in told.references)
    assert ESTIMATE_CAUTION in told.cautions
    plain = methods()
    assert "estimated" not in plain.paragraph
    assert ESTIMATE_CAUTION not in plain.cautions


def test_draws_are_told_with_their_number_and_seed() -> None:
    """Without the seed nobody could make the same interval again."""
    assert (
        "those of all networks come from 400 random draws (seed 7)"
        in methods(network={"intervals": "monte-carlo", "draws": 400, "seed": 7}).paragraph
    )
    assert "known to worse than 5 % come from 1000 random draws (seed 0)" in methods().paragraph
    assert "draws" not in methods(network={"intervals": "delta"}).paragraph


def test_doubt_of_plasma_viscosity_is_told() -> None:
    """An interval that holds it looks like one that does not."""
    told = methods(blood={"plasma_viscosity_se_mpa_s": 0.08}).paragraph
    assert "plasma viscosity of 1.2 mPa·s (standard uncertainty 0.08 mPa·s)" in told


def test_scales_that_rest_on_eyes_or_discs_are_told_with_their_sources() -> None:
    """Cohorts of eyes of unequal length differ in resistance by a quarter if nobody corrected them."""
    by_length = methods(scale={"magnification": "bennett"})
    assert "by its axial length" in by_length.paragraph
    assert "as those of an eye of 24 mm" in by_length.paragraph
    assert any("10.1007/BF00175988" in source for source in by_length.references)
    by_refraction = methods(scale={"magnification": "bengtsson", "camera_factor": 0.02})
    assert "a pixel of the camera spans 0.02 degrees" in by_refraction.paragraph
    assert any("10.1007/BF00166758" in source for source in by_refraction.references)
    by_disc = methods(scale={"disc_diameter_um": 1800})
    assert "the optic disc was taken to be 1800 µm wide (standard uncertainty 162 µm" in by_disc.paragraph
    assert any("10.1001/archopht.1990.01070030057028" in source for source in by_disc.references)
    assert DISC_CAUTION in by_disc.cautions
    plain = methods()
    assert "the optic disc was taken to be" not in plain.paragraph
    assert "eye" not in plain.paragraph
    assert DISC_CAUTION not in plain.cautions


def test_sources_of_shape_are_those_that_the_study_used() -> None:
    """A reader must find the formula of each number, and no source of one that is not there."""
    told = methods(shape={"disc": "find"})
    assert "the 6 widest arterioles and venules that cross the zone from 0.5 to 1 disc diameters" in told.paragraph
    assert any("10.1076/ceyr.27.3.143.16049" in source for source in told.references)  # Knudtson et al. 2003
    assert "their trees were parted" in told.paragraph
    older = methods(shape={"disc": "find", "calibre_formula": "parr-hubbard"})
    assert "all, at least 2, arterioles and venules" in older.paragraph
    assert not any("Knudtson" in source for source in older.references)
    assert sum(name in source for source in older.references for name in ("Parr JC", "Hubbard LD")) == 2
    without = methods(shape={"disc": "none"}, network={"trees_by_class": False})
    assert "Calibre equivalents" not in without.paragraph
    assert "were parted" not in without.paragraph
    marks = [int(mark) for mark in re.findall(r"\[(\d+)\]", without.paragraph)]
    assert sorted(set(marks)) == list(range(1, len(without.references) + 1))
