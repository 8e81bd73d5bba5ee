"""How an eye's length or refraction sets the scale of its picture, and resistance with the third power of it."""

import math

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter

import vasohm
from vasohm.errors import ScaleError
from vasohm.flags import Flag
from vasohm.image.calibrate import ScaledImage, ScaleSettings, TypedScale, calibrate
from vasohm.image.eye import Eye, EyeScale, EyeSettings, eye_scale
from vasohm.image.read import RawImage

PRINTED = 5e-7  # half a unit in the sixth decimal of the tables below
# Length (mm): millimetres a degree, size against an eye of 24 mm, resistance against it, and the size by l - 1.6 mm.
# Evaluated from Bennett, Rudnicka & Edgar 1994, doi:10.1007/BF00175988, q = 0.01306 (l - 1.82), and from Bengtsson &
# Krakau 1992, doi:10.1007/BF00166758, M = 0.056 / (l - 0.0016 m), by a program that shares nothing with this package.
LENGTHS = {
    20.0: (0.237431, 0.819657, 1.815946, 0.821429),
    22.0: (0.263551, 0.909829, 1.327765, 0.910714),
    23.0: (0.276611, 0.954914, 1.148436, 0.955357),
    24.0: (0.289671, 1.0, 1.0, 1.0),
    25.0: (0.302731, 1.045086, 0.876081, 1.044643),
    26.0: (0.315791, 1.090171, 0.771819, 1.089286),
    28.0: (0.341911, 1.180343, 0.608101, 1.178571),
}
# Refraction (D): size against an eye without ametropia, from M = 2.5 / (1 - 0.017 G) of the same.
REFRACTIONS = {-6.0: 1.102, -3.0: 1.051, 0.0: 1.0, 3.0: 0.949}
SCATTER = {"bennett": 0.012, "refraction": 0.043}  # Garway-Heath et al. 1998, doi:10.1136/bjo.82.6.643: upper ends


def rule(name: str, camera: float | None = None, camera_se: float | None = None) -> EyeSettings:
    return EyeSettings(name, camera, camera_se, 24.0)  # type: ignore[arg-type]


def size(scale: EyeScale) -> float:
    return scale.mm_per_deg / scale.reference_mm_per_deg


@pytest.mark.parametrize("length_mm", LENGTHS)
def test_published_factors_by_length(length_mm: float) -> None:
    q, of_bennett, of_resistance, of_bengtsson = LENGTHS[length_mm]
    bennett = eye_scale(Eye(length_mm), rule("bennett"))
    assert bennett.mm_per_deg == pytest.approx(q, abs=PRINTED)
    assert size(bennett) == pytest.approx(of_bennett, abs=PRINTED)
    assert size(bennett) ** -3 == pytest.approx(of_resistance, abs=PRINTED)
    assert size(eye_scale(Eye(length_mm), rule("bengtsson"))) == pytest.approx(of_bengtsson, abs=PRINTED)
    if length_mm != 24.0:  # teeth: the two rules, and a length without its offset, differ by more than rounding
        assert abs(of_bennett - of_bengtsson) > 100 * PRINTED
        assert abs(length_mm / 24.0 - of_bennett) > 100 * PRINTED


@pytest.mark.parametrize("refraction_d", REFRACTIONS)
def test_published_factors_by_refraction(refraction_d: float) -> None:
    """Wrong if the sign of refraction were turned: a short-sighted eye is long, its picture of the retina large."""
    scale = eye_scale(Eye(refraction_d=refraction_d), rule("bengtsson"))
    assert size(scale) == pytest.approx(REFRACTIONS[refraction_d], rel=1e-12)
    assert scale.rule == "bengtsson-refraction"


def test_the_rules_follow_from_the_optics_of_a_reduced_eye() -> None:
    """A degree spans tan(1 degree) times the image distance over its index; 60 dioptres give 0.291 mm (Emsley's eye).

    Bennett's constant is 1 / 1.336 a radian, rounded to four figures; the rules agree on an eye without ametropia
    within the published scatter of refraction.
    """
    rounded = 0.5e-5 / 0.01306
    reach_mm = 24.0 - 1.82
    bennett = eye_scale(Eye(24.0), rule("bennett")).mm_per_deg
    assert bennett == pytest.approx(math.radians(1) * reach_mm / 1.336, rel=rounded)
    emsley_mm = math.radians(1) * 1000.0 / 60.0
    assert eye_scale(Eye(refraction_d=0.0), rule("bengtsson")).mm_per_deg == pytest.approx(emsley_mm, rel=1e-12)
    for scale in (bennett, eye_scale(Eye(24.0), rule("bengtsson")).mm_per_deg):
        assert scale == pytest.approx(emsley_mm, rel=SCATTER["refraction"])


def scaled(
    eye: Eye, how: EyeSettings, typed_um: float | None = 7.0, se_um: float | None = 0.07, file_um: float | None = None
) -> ScaledImage:
    raw = RawImage(np.zeros((2, 2), np.uint8), 255.0, "", file_um, "ome" if file_um else "", (), Flag.NONE)
    return calibrate(raw, TypedScale(typed_um, se_um, eye), ScaleSettings(None, None, "stop", how, None, None))


def test_a_camera_factor_gives_the_size_by_the_eye_alone() -> None:
    """T = p q s (Littmann 1982; Bennett et al. 1994): a pixel of 0.02 degrees is 0.02 q in this eye."""
    q_mm = LENGTHS[26.0][0]
    found = scaled(Eye(26.0), rule("bennett", 0.02, 0.0002), None, None)
    assert found.pixel_size_um == pytest.approx(20.0 * q_mm, rel=1e-5)
    assert (found.pixel_size_source, found.flags) == ("camera", Flag.NONE)
    assert found.magnification is not None
    assert math.isnan(found.magnification.before_um)
    assert found.pixel_size_se_um / found.pixel_size_um == pytest.approx(math.hypot(0.01, SCATTER["bennett"]))
    unsure = scaled(Eye(26.0), rule("bennett", 0.02), None, None)
    assert unsure.flags == Flag.PIXEL_SIZE_SE_UNKNOWN
    beside_typed = scaled(Eye(26.0), rule("bennett", 0.02), 6.0)
    assert beside_typed.pixel_size_um == found.pixel_size_um
    assert beside_typed.magnification is not None
    assert beside_typed.magnification.before_um == 6.0
    with pytest.raises(ScaleError, match=r"camera_factor = 0\.2 degrees a pixel makes pixels of 63\.16 um"):
        scaled(Eye(26.0), rule("bennett", 0.2), 6.0)


def test_doubts_of_size_length_and_method_add_in_squares() -> None:
    """JCGM 100:2008: independent causes; that of the length is divided by l - 1.82 mm, not by l."""
    length_se_mm, reach_mm = 0.3, 26.0 - 1.82
    found = scaled(Eye(26.0, length_se_mm), rule("bennett"))
    assert found.pixel_size_um == pytest.approx(7.0 * LENGTHS[26.0][1], rel=1e-6)
    expected = math.sqrt(0.01**2 + (length_se_mm / reach_mm) ** 2 + SCATTER["bennett"] ** 2)
    assert found.pixel_size_se_um / found.pixel_size_um == pytest.approx(expected, rel=1e-9)
    by_refraction = scaled(Eye(refraction_d=-3.0), rule("bengtsson"))
    assert by_refraction.pixel_size_se_um / by_refraction.pixel_size_um == pytest.approx(
        math.hypot(0.01, SCATTER["refraction"]), rel=1e-9
    )


def test_a_typed_size_is_final_unless_magnification_is_asked_for() -> None:
    found = scaled(Eye(28.0, None, -9.0), rule("none"))
    assert (found.pixel_size_um, found.pixel_size_se_um, found.magnification) == (7.0, 0.07, None)


def test_a_size_from_the_file_is_corrected_and_told() -> None:
    found = scaled(Eye(20.0), rule("bennett"), None, None, 7.0)
    assert found.pixel_size_um == pytest.approx(7.0 * LENGTHS[20.0][1], rel=1e-6)
    assert found.pixel_size_source == "ome"
    told = "7 um in a reference eye of 0.289671 mm a degree, 0.237431 mm a degree in this eye (bennett, 20 mm)."
    assert found.notes == (f"pixel size 5.7376 um: {told}",)


@pytest.mark.parametrize("length_mm", [0.0, 2.0, 14.9, 40.1, 200.0, -24.0, math.nan, math.inf])
@pytest.mark.parametrize("name", ["none", "bennett", "bengtsson"])
def test_a_length_that_no_eye_has_is_refused_by_name(length_mm: float, name: str) -> None:
    """Centimetres or a slip of a digit; a corrected size would look like any other."""
    with pytest.raises(ScaleError, match=r"axial_length_mm = .* is outside 15 to 40"):
        scaled(Eye(length_mm), rule(name))


def test_other_numbers_that_no_eye_has_are_refused_by_name() -> None:
    with pytest.raises(ScaleError, match=r"axial_length_se_mm = -0.1 is outside 0 to 2"):
        scaled(Eye(24.0, -0.1), rule("bennett"))
    for refraction_d in (-60.0, 60.0, math.nan):
        with pytest.raises(ScaleError, match=r"refraction_d = .* is outside -35 to 25"):
            scaled(Eye(refraction_d=refraction_d), rule("bengtsson"))


def test_a_missing_number_is_named() -> None:
    """An eye left uncorrected among corrected ones would pass for one of average length."""
    with pytest.raises(ScaleError, match='magnification = "bennett" needs axial_length_mm, of which this eye has none'):
        scaled(Eye(refraction_d=-3.0), rule("bennett"))
    with pytest.raises(ScaleError, match="needs refraction_d or axial_length_mm"):
        scaled(Eye(), rule("bengtsson", 0.02))


def crossed_by_a_vessel() -> np.ndarray:
    """An absorbing tube across a field, by Beer's law, 12 px wide."""
    y, x = np.mgrid[:100, :140].astype(float)
    depth = 2 * np.sqrt(np.maximum(36.0 - (y - 50 - 8 * np.sin(x / 30)) ** 2, 0))
    light = gaussian_filter(200 * np.exp(-0.05 * depth), 1.2)
    return np.round(light + np.random.default_rng(3).normal(0, 1, light.shape)).astype(np.uint8)


def test_resistance_goes_with_the_third_power_from_the_picture_to_the_table() -> None:
    """R ~ length / radius^4 at one viscosity: the published factor on R, and a threefold shared uncertainty in ln R.

    The fit stops short of its limit, and the background is smoothed over micrometres: together below 1e-3 in ln R,
    which an exponent of 2.98 would miss.
    """
    picture, settled = crossed_by_a_vessel(), 1e-3

    def segments(length_mm: float, **doubt: float):
        told = vasohm.measure_image(
            picture,
            pixel_size_um=7.0,
            pixel_size_se_um=0.0,
            axial_length_mm=length_mm,
            scale={"magnification": "bennett"},
            segment={"radius_um": [20.0, 100.0]},
            blood={"law": "constant"},
            **doubt,
        )
        assert len(told.segments) == 1
        return told.segments.iloc[0], told.image.iloc[0]

    (middle, image), (long, _) = segments(24.0), segments(26.0)
    ratio = long["resistance_pa_s_m3"] / middle["resistance_pa_s_m3"]
    assert math.log(ratio) == pytest.approx(math.log(LENGTHS[26.0][2]), abs=settled)
    assert abs(2.98 * math.log(LENGTHS[26.0][1]) + math.log(LENGTHS[26.0][2])) > settled
    of_size = image["pixel_size_se_um"] / image["pixel_size_um"]
    assert of_size == pytest.approx(SCATTER["bennett"], rel=1e-9)
    unsure, unsure_image = segments(24.0, axial_length_se_mm=0.5)
    more = (unsure_image["pixel_size_se_um"] / unsure_image["pixel_size_um"]) ** 2 - of_size**2
    shared = unsure["ln_resistance_shared_se"] ** 2 - middle["ln_resistance_shared_se"] ** 2
    assert math.sqrt(shared / more) == pytest.approx(3.0, rel=1e-6)
    assert unsure["ln_resistance_random_se"] == middle["ln_resistance_random_se"]


def test_a_declared_disc_carries_its_doubt_to_the_resistance() -> None:
    """9 % between people's discs (Girkin et al., Ophthalmology 2011;118:2403-2408) are 27 % in R."""
    told = vasohm.measure_image(
        crossed_by_a_vessel(),
        disc_x_px=70.0,
        disc_y_px=50.0,
        disc_radius_px=90.0,
        scale={"disc_diameter_um": 1800.0},
        segment={"radius_um": [30.0, 150.0]},
        blood={"law": "constant"},
    )
    image, vessel = told.image.iloc[0], told.segments.iloc[0]
    assert (image["pixel_size_um"], image["pixel_size_source"], image["magnification"]) == (10.0, "disc", "")
    assert "scale_from_disc" in image["flags"].split(";")
    assert any("was taken for 1800 um" in note for note in told.notes)
    assert vessel["ln_resistance_shared_se"] > 3 * 0.09
