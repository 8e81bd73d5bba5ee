"""Everything that is wrong with a study, at once: each file is opened and decoded, nothing is measured."""

from collections.abc import Iterator
from pathlib import Path

from vasohm.arrays import AnyArray
from vasohm.config.settings import Settings
from vasohm.config.sheet import ImageSource
from vasohm.config.study_file import Study
from vasohm.errors import Problem, VasohmError
from vasohm.flow.rheology import get_law
from vasohm.image.calibrate import calibrate, rests_on_disc
from vasohm.image.disc import check_disc
from vasohm.image.eye import check_side, lacking
from vasohm.image.read import read_image, read_labels, read_mask
from vasohm.image.segment import MASK_METHOD, get_segmenter

_FIRST_ROW = 2  # of the sheet, after its header


def problems_of(study: Study) -> list[Problem]:
    """Decode all files of a study and return what is wrong, in the order of the sheet.

    A header that promises a picture does not yet hold one: a truncated file shows only when it is decoded.
    """
    found = list(_plugin_problems(study))
    sheet = str(study.resolved["study.sheet"]["value"] or study.path.name)
    for row, source in enumerate(study.images, start=_FIRST_ROW):
        for column, path, fault in _faults(source, study.settings):
            found.append(Problem(file=sheet, row=row, column=column, value=path.name, message=str(fault)))
    return found


def _plugin_problems(study: Study) -> Iterator[Problem]:
    law, method = study.settings.blood.law, study.settings.segment.method
    try:
        get_law(law)
    except VasohmError as fault:
        yield Problem(file=study.path.name, column="blood.law", value=law, message=str(fault))
    try:
        if method != MASK_METHOD:
            get_segmenter(method)
    except VasohmError as fault:
        yield Problem(file=study.path.name, column="segment.method", value=method, message=str(fault))


def _faults(source: ImageSource, settings: Settings) -> Iterator[tuple[str, Path, VasohmError]]:
    try:
        raw = read_image(source.file, settings.read)
    except VasohmError as fault:
        yield "file", source.file, fault
        return
    looks = source.disc is None and settings.shape.disc == "find"
    try:
        if not (looks and rests_on_disc(raw, source.scale, settings.scale)):  # only measuring can tell then
            calibrate(raw, source.scale, settings.scale, disc=source.disc)
    except VasohmError as fault:
        yield lacking(source.scale.eye, settings.scale.eye.magnification) or "pixel_size_um", source.file, fault
    if source.disc is not None:
        try:
            check_disc(source.disc, _shape(raw.pixels))
        except VasohmError as fault:
            yield "disc_x_px", source.file, fault
    try:
        check_side(source.design.get("eye", ""), raw.subject.side)
    except VasohmError as fault:
        yield "eye", source.file, fault
    for column, path, read in (
        ("mask_file", source.mask_file, read_mask),
        ("fov_file", source.fov_file, read_mask),
        ("class_file", source.class_file, read_labels),
    ):
        if path is None:
            continue
        try:
            read(path, _shape(raw.pixels))
        except VasohmError as fault:
            yield column, path, fault


def _shape(pixels: AnyArray) -> tuple[int, int]:
    return pixels.shape[0], pixels.shape[1]
