"""From the images' folders and the state of a run to the files at the root of the results."""

import time
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from vasohm.config.study_file import Study
from vasohm.errors import Problem, RequestError
from vasohm.flow.rheology import get_law
from vasohm.results.methods import Methods, MethodsUsed, describe_methods
from vasohm.results.pages import Study as StudyAtAGlance
from vasohm.results.pages import write_study_page
from vasohm.results.write import RECORD, record_is_whole
from vasohm.results.write_study import (
    Failure,
    gather_tables,
    write_datapackage,
    write_failures,
    write_references,
    write_scripts,
    write_study_json,
)
from vasohm.study.ending import EXIT_OK, EXIT_SOME_FAILED
from vasohm.study.folder import image_folder, probe
from vasohm.study.marker import hold_marker
from vasohm.study.outcome import EMPTY, FAILED, MEASURED, PENDING
from vasohm.study.parts import Part, read_state
from vasohm.study.state import ImageState, StudyState

LATE_S = 30.0  # that directories are kept by NFS clients at least where nothing else is set, acdirmin of nfs(5)
_LOOK_S = 0.5
_WITH_TABLES = (MEASURED, EMPTY)


@dataclass(frozen=True, slots=True)
class GatherReport:
    """What was put together, and what is wanting: `damaged` are images whose files are not as they were written."""

    state: StudyState
    missing: tuple[Part, ...]
    damaged: tuple[str, ...]


def methods_used(study: Study, version: str) -> Methods:
    """Return the methods paragraph, references and cautions of a study."""
    settings = study.settings
    return describe_methods(
        MethodsUsed(
            version=version,
            scale=settings.scale,
            prepare=settings.prepare,
            segment=settings.segment,
            radius=settings.radius,
            blood=settings.blood,
            network=settings.network,
            law_citation=get_law(settings.blood.law).citation,
            scenario_names=tuple(scenario.name for scenario in settings.scenarios),
            n_images=len(study.images),
            n_masked=sum(source.mask_file is not None for source in study.images),
            intervals=settings.intervals,
            targets=settings.targets,
            shape=settings.shape,
            trees=settings.trees,
            with_disc=settings.shape.disc == "find" or any(source.disc is not None for source in study.images),
        )
    )


def write_root(out: Path, state: StudyState) -> None:
    """Write tables, page, data package and references of a study, and its state last.

    Raises
    ------
    OSError
        When a file cannot be read or written.
    """
    image_ids = tuple(image.image_id for image in state.images if image.status in _WITH_TABLES)
    failures = _failures(state.images)
    tables = (*gather_tables(out, image_ids), write_failures(out, failures))
    write_datapackage(out, state.study, tables, image_ids)
    write_references(out, state.methods.references)
    write_study_json(out, state.plain())
    write_scripts(out)
    write_study_page(
        out,
        StudyAtAGlance(
            state.study, image_ids, failures, state.methods, n_pending=state.counts[PENDING], versions=state.versions
        ),
    )


def write_state(out: Path, state: StudyState) -> None:
    """Write failures.csv and study.json alone: quick enough for the end of a run that was interrupted."""
    write_failures(out, _failures(state.images))
    write_study_json(out, state.plain())


def gather(out: Path) -> GatherReport:
    """Rebuild the files at the root of a results folder from its images and parts.

    Parameters
    ----------
    out : Path
        The results folder.

    Returns
    -------
    GatherReport
        Its state's exit status is 1 where an image failed or is wanting.

    Raises
    ------
    RequestError
        When nothing has been measured here, parts are mixed, or a run is at work.
    OSError
        When a file cannot be read or written.
    """
    if not out.is_dir():
        raise RequestError([Problem(file=str(out), message="is no folder. Give the folder that was --out of measure.")])
    state, missing = read_state(out)
    if state is None:
        message = "holds neither study.json nor parts. Give the folder that was --out of measure."
        raise RequestError([Problem(file=str(out), message=message)])
    probe(out)
    with hold_marker(out / "run", state.study, ""):
        with_tables = [image.image_id for image in state.images if image.status in _WITH_TABLES]
        if (out / "parts").is_dir():
            _wait_for_records(out, with_tables)
        damaged = tuple(name for name in with_tables if not record_is_whole(image_folder(out, name)))
        state = state.with_images({image_id: ImageState(image_id, PENDING) for image_id in damaged})
        wanting = any(image.status in (FAILED, PENDING) for image in state.images)
        state = replace(state, exit_status=EXIT_SOME_FAILED if wanting or missing else EXIT_OK)
        write_root(out, state)
    return GatherReport(state, missing, damaged)


def _wait_for_records(out: Path, image_ids: Sequence[str]) -> None:
    """Wait a little for records that other machines have written: a shared disk may show them late."""
    deadline = time.monotonic() + LATE_S
    while time.monotonic() < deadline:
        there = {path.parent.name for path in (out / "images").glob(f"*/{RECORD}")}  # listing asks the server anew
        if there.issuperset(image_ids):
            return
        time.sleep(_LOOK_S)


def _failures(images: Sequence[ImageState]) -> tuple[Failure, ...]:
    return tuple(
        Failure(image.image_id, image.failure.stage, image.failure.error, image.failure.message)
        for image in images
        if image.failure is not None
    )
