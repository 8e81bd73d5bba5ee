"""From a read file to a picture with a scale: pixel size, its uncertainty, and where it came from."""

import math
from dataclasses import dataclass
from typing import Literal

from vasohm.errors import ScaleError
from vasohm.flags import Flag
from vasohm.image.disc import OpticDisc
from vasohm.image.eye import (
    UNKNOWN_EYE,
    Eye,
    EyeScale,
    EyeSettings,
    Magnification,
    check_eye,
    eye_scale,
    with_file_length,
)
from vasohm.image.read import RawImage
from vasohm.units import UM_PER_MM

LEAST_UM, MOST_UM = 1e-3, 1e3  # edges of pixels of vessel images, with room: 10 nm to 0.1 mm occur
CONTRADICTION = 0.02  # relative difference above which file and person do not mean the same pixel
MOST_OF_EYES = 2.0  # fold by which a pixel may differ between an eye and the reference eye: 15 to 40 mm are within it
# Relative spread of disc diameters between people of one descent, half that of areas: Girkin et al., Ophthalmology
# 2011;118:2403-2408 (five groups, 15 to 21 % in area); Marsh et al., J Glaucoma 2010;19:310-318 (18 %).
DISC_SPREAD = 0.09
DISC_SHARE = 0.14  # of a field of 45 degrees: 1.8 mm of 45 * 0.29 mm
SOURCES = "the image sheet, [scale] of the study, OME-XML, ImageJ description and DICOM pixel spacing of the file"


@dataclass(frozen=True, slots=True)
class ScaleSettings:
    """What the study file says about scale, in micrometres; None where it says nothing.

    `disc_diameter_um` declares how wide an optic disc is; it counts only where no pixel size is known otherwise.
    """

    pixel_size_um: float | None
    pixel_size_se_um: float | None
    scale_conflict: Literal["stop", "sheet"]
    eye: EyeSettings
    disc_diameter_um: float | None
    disc_diameter_se_um: float | None  # None: the spread between people


@dataclass(frozen=True, slots=True)
class TypedScale:
    """What the image sheet says about this image, in micrometres; None where the cell is empty."""

    pixel_size_um: float | None
    pixel_size_se_um: float | None
    eye: Eye = UNKNOWN_EYE


@dataclass(frozen=True, slots=True)
class ScaledImage:
    """A picture whose pixel edge is known: `pixel_size_se_um` is NaN where nobody told it.

    `flags` and `notes` are those of the scale; those of the file stay with `raw`.
    """

    raw: RawImage
    pixel_size_um: float
    pixel_size_se_um: float
    pixel_size_source: str  # sheet | study | ome | imagej | dicom | camera | disc
    flags: Flag
    magnification: Magnification | None = None  # None: not corrected for the eye
    notes: tuple[str, ...] = ()


def calibrate(
    raw: RawImage, typed: TypedScale, settings: ScaleSettings, *, disc: OpticDisc | None = None
) -> ScaledImage:
    """Settle the pixel size: what a person typed wins, the sheet over the study, both over the file.

    It is final unless the study asks for the magnification of eyes. Then a camera factor and the eye give it, or,
    without a camera factor, it is taken as that of the reference eye. Where nothing else tells it, an optic disc does
    if the study declares how wide one is; that needs no correction, since the disc is seen through the same eye.

    Parameters
    ----------
    raw : the read file, with the pixel size that it carries, if any.
    typed : what the image sheet says.
    settings : what the study says.
    disc : the optic disc, where it is known.

    Raises
    ------
    ScaleError : no pixel size anywhere; one outside 0.001 to 1000 um; a file that contradicts the typed one by more
        than 2 %, unless `scale_conflict` is "sheet"; an uncertainty that is negative or not below the pixel size; a
        number that no eye has, or that the rule of magnification needs and that is missing; a camera factor that
        contradicts a told pixel size more than eyes can.
    """
    check_eye(typed.eye)
    eye = with_file_length(typed.eye, raw.subject.axial_length_mm)
    told = _told(raw, typed, settings)
    if settings.eye.magnification != "none" and (told is not None or settings.eye.camera_factor is not None):
        return _of_eye(raw, told, eye_scale(eye, settings.eye), settings.eye)
    if told is not None:
        return told
    if settings.disc_diameter_um is not None and disc is not None:
        return _of_disc(raw, disc, settings.disc_diameter_um, settings.disc_diameter_se_um)
    ignored = "".join(f"; {note}" for note in raw.notes if "ignored" in note)
    no_disc, or_disc = "", ""
    if settings.disc_diameter_um is not None:
        no_disc, or_disc = "; no optic disc is known either", ", or tell disc_x_px, disc_y_px and disc_radius_px"
    msg = (
        f"no pixel size found (looked in {SOURCES}{ignored}{no_disc}). Give pixel_size_um in the image sheet or in "
        f"[scale], or --pixel-size where images are named on the command line{or_disc}."
    )
    raise ScaleError(msg)


def rests_on_disc(raw: RawImage, typed: TypedScale, settings: ScaleSettings) -> bool:
    """Tell whether nothing but the optic disc can give the pixel size."""
    told = (typed.pixel_size_um, settings.pixel_size_um, raw.file_pixel_size_um)
    by_camera = settings.eye.magnification != "none" and settings.eye.camera_factor is not None
    return settings.disc_diameter_um is not None and not by_camera and all(one is None for one in told)


def guess_for_disc(raw: RawImage, settings: ScaleSettings) -> ScaledImage:
    """Guess a pixel size at which vessels can be found that lead to an optic disc, and nothing be measured.

    A field of 45 degrees, the usual one, fills the picture's lesser side: a disc spans about a seventh of it. From 30
    to 60 degrees the guess, and with it the range of vessel radii, errs by less than a half.
    """
    across_px = min(raw.pixels.shape[:2])
    pixel_size_um = (settings.disc_diameter_um or math.nan) / (DISC_SHARE * across_px)
    return ScaledImage(raw, pixel_size_um, math.nan, "guess", Flag.NONE)


def _told(raw: RawImage, typed: TypedScale, settings: ScaleSettings) -> ScaledImage | None:
    """Return the scale as typed or as the file tells it."""
    if typed.pixel_size_um is not None:
        pixel_size_um, source = typed.pixel_size_um, "sheet"
    elif settings.pixel_size_um is not None:
        pixel_size_um, source = settings.pixel_size_um, "study"
    elif raw.file_pixel_size_um is not None:
        pixel_size_um, source = raw.file_pixel_size_um, raw.file_pixel_size_source
    else:
        return None
    _check_range(pixel_size_um, source)
    flags = _contradiction(raw, pixel_size_um, source, settings)
    se_um = _uncertainty(typed, settings, source)
    if math.isnan(se_um) and source == raw.file_pixel_size_source:
        se_um = raw.file_pixel_size_rel_se * pixel_size_um  # NaN where such a carrier tells nothing
    if math.isnan(se_um):
        flags |= Flag.PIXEL_SIZE_SE_UNKNOWN
    elif not 0 <= se_um < pixel_size_um:
        msg = f"pixel_size_se_um = {se_um:g} is not between 0 and the pixel size of {pixel_size_um:g} um ({source})."
        raise ScaleError(msg)
    return ScaledImage(raw, pixel_size_um, se_um, source, flags)


def _of_eye(raw: RawImage, told: ScaledImage | None, eye: EyeScale, settings: EyeSettings) -> ScaledImage:
    """Give the pixel size in this eye, by the camera factor or from that of the reference eye."""
    before_um = told.pixel_size_um if told is not None else math.nan
    if settings.camera_factor is not None:
        pixel_size_um, source = eye.mm_per_deg * settings.camera_factor * UM_PER_MM, "camera"
        _check_camera(settings.camera_factor, pixel_size_um, before_um)
        unknown = settings.camera_factor_se is None
        rel_se = (settings.camera_factor_se or 0.0) / settings.camera_factor
        basis = f"{settings.camera_factor:g} degrees a pixel"
    else:
        pixel_size_um = before_um * eye.mm_per_deg / eye.reference_mm_per_deg
        source = told.pixel_size_source if told is not None else ""
        unknown = told is None or math.isnan(told.pixel_size_se_um)
        rel_se = 0.0 if told is None or unknown else told.pixel_size_se_um / before_um
        basis = f"{before_um:g} um in a reference eye of {eye.reference_mm_per_deg:.6f} mm a degree"
    _check_range(pixel_size_um, source)
    flags = (told.flags if told is not None else Flag.NONE) & ~Flag.PIXEL_SIZE_SE_UNKNOWN
    if unknown:
        flags |= Flag.PIXEL_SIZE_SE_UNKNOWN
    note = (
        f"pixel size {pixel_size_um:.6g} um: {basis}, {eye.mm_per_deg:.6f} mm a degree in this eye ({eye.rule}, "
        f"{eye.words})."
    )
    se_um = pixel_size_um * math.hypot(rel_se, eye.rel_se)
    return ScaledImage(raw, pixel_size_um, se_um, source, flags, Magnification(eye.rule, before_um), (note,))


def _check_camera(camera_factor: float, pixel_size_um: float, told_um: float) -> None:
    """Stop where a told pixel size shows that the camera factor has another unit; NaN: none was told."""
    ratio = pixel_size_um / told_um
    if ratio > MOST_OF_EYES or ratio < 1 / MOST_OF_EYES:
        msg = (
            f"camera_factor = {camera_factor:g} degrees a pixel makes pixels of {pixel_size_um:.4g} um in this eye, "
            f"where {told_um:g} um were told: more than eyes can differ. Correct one, or leave the pixel size out."
        )
        raise ScaleError(msg)


def _of_disc(raw: RawImage, disc: OpticDisc, diameter_um: float, diameter_se_um: float | None) -> ScaledImage:
    pixel_size_um = diameter_um / (2 * disc.radius_px)
    _check_range(pixel_size_um, "disc")
    rel_se = DISC_SPREAD if diameter_se_um is None else diameter_se_um / diameter_um
    note = (
        f"pixel size {pixel_size_um:.6g} um: an optic disc of {2 * disc.radius_px:.4g} px across ({disc.source}) was "
        f"taken for {diameter_um:g} um."
    )
    return ScaledImage(raw, pixel_size_um, rel_se * pixel_size_um, "disc", Flag.SCALE_FROM_DISC, notes=(note,))


def _check_range(pixel_size_um: float, source: str) -> None:
    if not LEAST_UM <= pixel_size_um <= MOST_UM:
        msg = (
            f"pixel size {pixel_size_um:g} um ({source}) is outside {LEAST_UM:g} to {MOST_UM:g} um. Usual causes: "
            "millimetres or nanometres taken for micrometres, dots per inch, binning that was left out."
        )
        raise ScaleError(msg)


def _contradiction(raw: RawImage, pixel_size_um: float, source: str, settings: ScaleSettings) -> Flag:
    said_um = raw.file_pixel_size_um
    if said_um is None or abs(said_um / pixel_size_um - 1) <= CONTRADICTION:
        return Flag.NONE
    if settings.scale_conflict == "sheet":
        return Flag.SCALE_CONFLICT
    msg = (
        f"the {source} says pixel_size_um = {pixel_size_um:g}, the file itself says {said_um:g} um "
        f"({raw.file_pixel_size_source}): more than {CONTRADICTION:.0%} apart. Correct the wrong one, or set "
        'scale_conflict = "sheet" in [scale] to use the typed one.'
    )
    raise ScaleError(msg)


def _uncertainty(typed: TypedScale, settings: ScaleSettings, source: str) -> float:
    """Return the uncertainty told for this value; one that the study tells for a size of its own is only its own."""
    if typed.pixel_size_se_um is not None:
        return typed.pixel_size_se_um
    is_for_it = source == "study" or settings.pixel_size_um is None
    return settings.pixel_size_se_um if settings.pixel_size_se_um is not None and is_for_it else math.nan
