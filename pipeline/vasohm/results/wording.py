"""Words for what the tables say in codes: pixel size with its doubt, and why a network has no resistance."""

import math

from vasohm.flags import MEANING, Flag, code

SCALE_SOURCES = {
    "sheet": "the image sheet",
    "study": "[scale] of the study",
    "ome": "OME-XML of the file",
    "imagej": "the ImageJ description of the file",
    "dicom": "DICOM tags of the file",
    "camera": "the camera factor and the eye",
    "disc": "the declared diameter of the optic disc",
}
TERMINAL_FLAGS = (Flag.NO_INLET, Flag.NO_OUTLET, Flag.NO_TERMINALS, Flag.MESH)
OTHER_FLAGS = (Flag.NO_FLOW, Flag.NO_INTERVAL, Flag.UNRESOLVED)
REMEDY = "Name them in a terminals_file of the image sheet."


def why_no_resistance(resistance_pa_s_m3: float, flags: str) -> str:
    """Tell why a network has no resistance, from its flags and with what to do; "" where it has one."""
    if not math.isnan(resistance_pa_s_m3):
        return ""
    found = set(flags.split(";"))
    lacking = [_meaning(flag) for flag in TERMINAL_FLAGS if code(flag) in found]
    reasons = lacking + [_meaning(flag) for flag in OTHER_FLAGS if code(flag) in found]
    told = "; ".join(reasons) or "the radius or viscosity of its segments is not known"
    return f"{told}. {REMEDY}" if lacking else f"{told}."


def pixel_size_words(size_um: float, se_um: float, source: str) -> str:
    """Pixel size with its standard uncertainty and where it comes from."""
    doubt = "its uncertainty is not told" if math.isnan(se_um) else f"± {se_um:.2g} µm (k = 1)"
    return f"{size_um:g} µm{', ' if math.isnan(se_um) else ' '}{doubt}, from {SCALE_SOURCES.get(source, source)}"


def _meaning(flag: Flag) -> str:
    return MEANING[flag].removesuffix(": no resistance")
