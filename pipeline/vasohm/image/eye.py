"""How large an eye images its retina: from its length or refraction to millimetres of retina a degree."""

import math
from dataclasses import dataclass, replace
from typing import Literal

from vasohm.errors import ImageError, ScaleError
from vasohm.units import MM_PER_M

SHORTEST_MM, LONGEST_MM = 15.0, 40.0  # eyes from birth to extreme myopia, with room (common practice, no source)
LEAST_D, MOST_D = -35.0, 25.0  # extreme myopia to an eye without a lens, with room (common practice, no source)
MOST_LENGTH_SE_MM = 2.0  # a length known no better tells less than not knowing it
BENNETT_MM_PER_DEG, BENNETT_MM = 0.01306, 1.82  # Bennett, Rudnicka & Edgar 1994
VITREOUS_INDEX, BENGTSSON_MM = 1.336, 1.6  # Bengtsson & Krakau 1992, formula 1
NORMAL_POWER_D, BENGTSSON_PER_D = 60.0, 0.017  # the same, formula 2
LENGTH_SCATTER, REFRACTION_SCATTER = 0.012, 0.043  # Garway-Heath et al. 1998: the wider end of each range

SIDES = {"l": "left", "left": "left", "os": "left", "r": "right", "right": "right", "od": "right"}

Rule = Literal["none", "bennett", "bengtsson"]


@dataclass(frozen=True, slots=True)
class Eye:
    """What a person says about an eye; None where nothing was said."""

    axial_length_mm: float | None = None
    axial_length_se_mm: float | None = None
    refraction_d: float | None = None  # spherical equivalent in front of the eye, negative in myopia


UNKNOWN_EYE = Eye()


@dataclass(frozen=True, slots=True)
class EyeSettings:
    """How pixel sizes follow from eyes.

    `camera_factor` is what a pixel spans in degrees of visual angle. Without it a pixel size that was told is taken as
    that of a reference eye, of this length or, where refraction is used, without ametropia.
    """

    magnification: Rule
    camera_factor: float | None
    camera_factor_se: float | None
    reference_axial_length_mm: float


@dataclass(frozen=True, slots=True)
class Magnification:
    """How a pixel size was fitted to one eye: by which rule, and what it was before (NaN where nobody told it)."""

    rule: str  # bennett | bengtsson-length | bengtsson-refraction
    before_um: float


@dataclass(frozen=True, slots=True)
class EyeScale:
    """Millimetres of retina a degree in this eye and in the reference eye, with this eye's relative uncertainty."""

    rule: str
    mm_per_deg: float
    reference_mm_per_deg: float
    rel_se: float
    words: str


def lacking(eye: Eye, magnification: Rule) -> str:
    """Return the columns of the sheet of which the rule needs one and has none; "" where it has what it needs."""
    if magnification == "bennett" and eye.axial_length_mm is None:
        return "axial_length_mm"
    if magnification == "bengtsson" and eye.axial_length_mm is None and eye.refraction_d is None:
        return "refraction_d or axial_length_mm"
    return ""


def with_file_length(eye: Eye, length_mm: float | None) -> Eye:
    """Take the length that a file tells where a person told none; NaN and lengths that no eye has are passed over."""
    if eye.axial_length_mm is not None or length_mm is None or not SHORTEST_MM <= length_mm <= LONGEST_MM:
        return eye
    return replace(eye, axial_length_mm=length_mm)


def check_side(said: str, side: str) -> None:
    """Refuse a picture of the other eye than the sheet says.

    Parameters
    ----------
    said : the sheet's word for the eye; words that are none for a side are not judged.
    side : what the file says: left, right, or nothing.

    Raises
    ------
    ImageError : they contradict each other.
    """
    meant = SIDES.get(said.strip().casefold(), side)
    if side and meant != side:
        msg = (
            f"the sheet says eye = {said!r}, the file itself says that it shows the {side} one. Correct the sheet, or "
            "see whether the file belongs to this row."
        )
        raise ImageError(msg)


def check_eye(eye: Eye) -> None:
    """Refuse what no eye has.

    Raises
    ------
    ScaleError : a length outside 15 to 40 mm, its uncertainty outside 0 to 2 mm, a refraction outside -35 to 25 D.
    """
    for name, value, low, high, hint in (
        ("axial_length_mm", eye.axial_length_mm, SHORTEST_MM, LONGEST_MM, "A grown eye is some 24 mm long."),
        ("axial_length_se_mm", eye.axial_length_se_mm, 0.0, MOST_LENGTH_SE_MM, "It is a standard uncertainty."),
        ("refraction_d", eye.refraction_d, LEAST_D, MOST_D, "It is the spherical equivalent in dioptres."),
    ):
        if value is not None and not low <= value <= high:
            msg = f"{name} = {value:g} is outside {low:g} to {high:g}. {hint}"
            raise ScaleError(msg)


def eye_scale(eye: Eye, settings: EyeSettings) -> EyeScale:
    """Tell what a degree of visual angle spans on this retina.

    Parameters
    ----------
    eye : its length or refraction.
    settings : the rule, which must not be "none", and the reference eye. Under "bengtsson" a refraction wins over a
        length.

    Raises
    ------
    ScaleError : the number that the rule needs is missing.

    Notes
    -----
    True size t = p q s: camera factor (degrees an image unit), eye factor q (mm a degree), size in the image.
    Bennett: q = 0.01306 (l - 1.82), where 0.01306 = pi / (180 * 1.336). Bengtsson and Krakau give the magnification
    M = 1.336 k / (l - 1.6) or k D / (1 - G / D) with a camera constant k (a length a radian), D of about 60 dioptres
    and 1 / D = 0.017; q = pi k / (180 M). A method's scatter against the fullest one is its relative uncertainty; its
    mean error (to 2.6 % by length, to 4.4 % by refraction) is common to all eyes and not held.

    References
    ----------
    Bennett AG, Rudnicka AR, Edgar DF. Graefes Arch Clin Exp Ophthalmol 1994;232:361-367, doi:10.1007/BF00175988.
    Bengtsson B, Krakau CET. Graefes Arch Clin Exp Ophthalmol 1992;230:24-28, doi:10.1007/BF00166758.
    Garway-Heath DF et al. Br J Ophthalmol 1998;82:643-649, doi:10.1136/bjo.82.6.643 (scatter).
    """
    missing = lacking(eye, settings.magnification)
    if missing:
        msg = f'magnification = "{settings.magnification}" needs {missing}, of which this eye has none. Give it.'
        raise ScaleError(msg)
    if settings.magnification == "bengtsson" and eye.refraction_d is not None:
        emmetropic = math.radians(1) * MM_PER_M / NORMAL_POWER_D
        mm_per_deg = emmetropic * (1 - BENGTSSON_PER_D * eye.refraction_d)
        words = f"{eye.refraction_d:g} D"
        return EyeScale("bengtsson-refraction", mm_per_deg, emmetropic, REFRACTION_SCATTER, words)
    factor, offset_mm, rule = BENNETT_MM_PER_DEG, BENNETT_MM, "bennett"
    if settings.magnification == "bengtsson":
        factor, offset_mm, rule = math.radians(1) / VITREOUS_INDEX, BENGTSSON_MM, "bengtsson-length"
    length_mm = eye.axial_length_mm or math.nan
    reach_mm = length_mm - offset_mm
    of_length = (eye.axial_length_se_mm or 0.0) / reach_mm
    return EyeScale(
        rule,
        factor * reach_mm,
        factor * (settings.reference_axial_length_mm - offset_mm),
        math.hypot(of_length, LENGTH_SCATTER),
        f"{length_mm:g} mm",
    )
