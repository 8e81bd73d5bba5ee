"""From the keys of [scale] to the settings of calibration, and what does not go together in them."""

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from vasohm.config.sheet import ImageSource
from vasohm.errors import Problem
from vasohm.image.calibrate import ScaleSettings
from vasohm.image.eye import EyeSettings


def scale_settings(values: Mapping[str, Any]) -> ScaleSettings:
    """Gather the settings of calibration from the resolved values of a study."""
    return ScaleSettings(
        values["scale.pixel_size_um"],
        values["scale.pixel_size_se_um"],
        values["scale.scale_conflict"],
        EyeSettings(
            values["scale.magnification"],
            values["scale.camera_factor"],
            values["scale.camera_factor_se"],
            values["scale.reference_axial_length_mm"],
        ),
        values["scale.disc_diameter_um"],
        values["scale.disc_diameter_se_um"],
    )


def scale_problems(values: Mapping[str, Any], file: str) -> Iterator[Problem]:
    """Find what does not go together in [scale]."""
    if values["scale.camera_factor"] is not None and values["scale.magnification"] == "none":
        message = 'gives no pixel size without an eye. Set magnification = "bennett" or "bengtsson", or leave it out.'
        yield Problem(file, message, column="scale.camera_factor", value=f"{values['scale.camera_factor']:g}")
    for name, se_name in (("camera_factor", "camera_factor_se"), ("disc_diameter_um", "disc_diameter_se_um")):
        value, se = values[f"scale.{name}"], values[f"scale.{se_name}"]
        if se is not None and value is None:
            yield Problem(file, f"needs {name}, whose uncertainty it is.", column=f"scale.{se_name}", value=f"{se:g}")
        elif se is not None and se >= value:
            yield Problem(file, f"{se:g} is not below {name} = {value:g}.", column=f"scale.{se_name}", value=f"{se:g}")


def scale_warnings(values: Mapping[str, Any], images: Sequence[ImageSource]) -> Iterator[str]:
    """Tell what the sheet says of eyes and the study leaves aside, or uses in two ways."""
    rule = values["scale.magnification"]
    eyes = [source.scale.eye for source in images]
    if rule == "none" and any(eye.axial_length_mm is not None or eye.refraction_d is not None for eye in eyes):
        yield (
            'axial_length_mm and refraction_d of the sheet are not used: magnification = "none" in [scale] takes pixel '
            "sizes as final."
        )
    with_refraction = sum(eye.refraction_d is not None for eye in eyes)
    if rule == "bengtsson" and 0 < with_refraction < len(eyes):
        yield (
            f'magnification = "bengtsson" goes by refraction_d in {with_refraction} of {len(eyes)} images, by '
            "axial_length_mm in the others: the two differ by some per cent, which cohorts would share unequally."
        )
