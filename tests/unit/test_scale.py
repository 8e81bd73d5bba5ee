"""Whose pixel size counts, and what happens when two do not agree. R goes with pixel size to the power -3."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from vasohm.errors import ScaleError
from vasohm.flags import Flag
from vasohm.image.calibrate import ScaledImage, ScaleSettings, TypedScale, calibrate
from vasohm.image.disc import OpticDisc
from vasohm.image.eye import Eye, EyeSettings
from vasohm.image.read import RawImage

NOTHING = TypedScale(None, None)
NO_EYE = EyeSettings("none", None, None, 24.0)
DISC = OpticDisc(40.0, 50.0, 90.0, "sheet", 1.0)  # 180 px wide
sizes_um = st.floats(0.001, 1000)
BY_TWO_PER_CENT = 0.02  # the contract's limit for a file that contradicts a person


def raw(file_um: float | None = None, source: str = "ome", notes: tuple[str, ...] = ()) -> RawImage:
    said = source if file_um is not None else ""
    return RawImage(np.zeros((2, 2), np.uint8), 255.0, "", file_um, said, notes, Flag.ORIENTATION_TAG)


def study(size_um: float | None = None, se_um: float | None = None, conflict: str = "stop") -> ScaleSettings:
    return ScaleSettings(size_um, se_um, conflict, NO_EYE, None, None)  # type: ignore[arg-type]


def by_disc(size_um: float | None = None, disc_se_um: float | None = None) -> ScaleSettings:
    return ScaleSettings(size_um, None, "stop", NO_EYE, 1800.0, disc_se_um)


def told(scaled: ScaledImage) -> tuple[float, str]:
    return scaled.pixel_size_um, scaled.pixel_size_source


def test_the_sheet_wins_over_the_study_and_both_over_the_file() -> None:
    """A person who typed a size for this very image knows best."""
    assert told(calibrate(raw(7.0), TypedScale(7.01, None), study(7.02))) == (7.01, "sheet")
    assert told(calibrate(raw(7.0), NOTHING, study(7.02))) == (7.02, "study")
    assert told(calibrate(raw(7.0), NOTHING, study())) == (7.0, "ome")
    assert told(calibrate(raw(7.0, "imagej"), NOTHING, study())) == (7.0, "imagej")


def test_no_size_anywhere_says_where_it_was_looked_for() -> None:
    """A guessed size would be wrong without a word; ignored dots per inch are told, since people expect them."""
    with pytest.raises(ScaleError, match=r"no pixel size found \(looked in the image sheet.*72 dpi: ignored"):
        calibrate(raw(notes=("file says 72 dpi: ignored",)), NOTHING, study())


@given(typed=sizes_um, ratio=st.floats(0.5, 2.0))
def test_a_file_that_contradicts_a_person_stops_the_image(typed: float, ratio: float) -> None:
    """A slip of units or binning shows exactly here; two per cent are rounding and calibration."""
    file = raw(typed * ratio)
    apart = abs(file.file_pixel_size_um / typed - 1)
    for sheet, settings in ((TypedScale(typed, None), study()), (NOTHING, study(typed))):
        if apart <= BY_TWO_PER_CENT:
            assert calibrate(file, sheet, settings).pixel_size_um == typed
        else:
            with pytest.raises(ScaleError, match=r"pixel_size_um = .* the file itself says .* \(ome\)"):
                calibrate(file, sheet, settings)


def test_a_study_may_let_the_typed_size_win_and_the_image_is_flagged() -> None:
    scaled = calibrate(raw(14.0), TypedScale(7.0, 0.1), study(conflict="sheet"))
    assert told(scaled) == (7.0, "sheet")
    assert scaled.flags == Flag.SCALE_CONFLICT


UNCERTAINTIES = {
    "of the sheet": (TypedScale(7.0, 0.2), study(7.5, 0.3), 0.2),
    "of the sheet, for the study's size": (TypedScale(None, 0.2), study(7.5, 0.3), 0.2),
    "of the study's own size": (NOTHING, study(7.5, 0.3), 0.3),
    "of the study, for whatever size an image has": (TypedScale(7.0, None), study(None, 0.3), 0.3),
    "of another size than the sheet's": (TypedScale(7.0, None), study(7.5, 0.3), None),
    "of nobody": (TypedScale(7.0, None), study(), None),
    "zero, which means exactly known": (TypedScale(7.0, 0.0), study(), 0.0),
}


@pytest.mark.parametrize("name", UNCERTAINTIES)
def test_uncertainty(name: str) -> None:
    """An uncertainty told for another size is none of this one; unknown is NaN with a flag, never zero."""
    typed, settings, expected_um = UNCERTAINTIES[name]
    scaled = calibrate(raw(), typed, settings)
    if expected_um is None:
        assert math.isnan(scaled.pixel_size_se_um)
        assert scaled.flags == Flag.PIXEL_SIZE_SE_UNKNOWN
    else:
        assert scaled.pixel_size_se_um == expected_um
        assert scaled.flags == Flag.NONE


@pytest.mark.parametrize("size_um", [0.0, -7.0, 1e-9, 9.9e-4, 1001.0, 1e9, math.inf, math.nan])
def test_sizes_out_of_range_name_the_usual_causes(size_um: float) -> None:
    """Millimetres for micrometres is a factor of a thousand in size and of 10^9 in resistance."""
    for file, sheet, settings in (
        (raw(), TypedScale(size_um, None), study()),
        (raw(), NOTHING, study(size_um)),
        (raw(size_um), NOTHING, study()),
    ):
        with pytest.raises(ScaleError, match=r"outside 0\.001 to 1000 um\. Usual causes: millimetres"):
            calibrate(file, sheet, settings)


@pytest.mark.parametrize("se_um", [-0.1, 7.0, 8.0, math.inf])
def test_uncertainties_that_cannot_be_are_refused(se_um: float) -> None:
    with pytest.raises(ScaleError, match="not between 0 and the pixel size"):
        calibrate(raw(), TypedScale(7.0, se_um), study())


def test_a_declared_disc_gives_a_size_where_nothing_else_does() -> None:
    """A disc differs between people by about 9 % in diameter (Girkin et al. 2011: 15 to 21 % in area), 27 % in R."""
    found = calibrate(raw(), NOTHING, by_disc(), disc=DISC)
    assert told(found) == (10.0, "disc")
    assert found.pixel_size_se_um == pytest.approx(0.9)
    assert found.flags == Flag.SCALE_FROM_DISC
    assert found.notes == ("pixel size 10 um: an optic disc of 180 px across (sheet) was taken for 1800 um.",)
    assert calibrate(raw(), NOTHING, by_disc(disc_se_um=90.0), disc=DISC).pixel_size_se_um == pytest.approx(0.5)


def test_a_disc_never_stands_above_a_told_size_nor_counts_undeclared() -> None:
    assert told(calibrate(raw(7.0), NOTHING, by_disc(), disc=DISC)) == (7.0, "ome")
    assert told(calibrate(raw(), TypedScale(7.0, None), by_disc(), disc=DISC)) == (7.0, "sheet")
    assert told(calibrate(raw(), NOTHING, by_disc(6.0), disc=DISC)) == (6.0, "study")
    with pytest.raises(ScaleError, match="no pixel size found"):
        calibrate(raw(), NOTHING, study(), disc=DISC)
    with pytest.raises(ScaleError, match=r"no pixel size found .*; no optic disc is known either\)"):
        calibrate(raw(), NOTHING, by_disc())


def test_a_size_from_a_disc_is_not_corrected_for_the_eye_again() -> None:
    """The disc is seen through the same eye as the vessels: its magnification is in the size already."""
    settings = ScaleSettings(None, None, "stop", EyeSettings("bennett", None, None, 24.0), 1800.0, None)
    found = calibrate(raw(), TypedScale(None, None, Eye(28.0)), settings, disc=DISC)
    assert told(found) == (10.0, "disc")
    assert found.magnification is None
