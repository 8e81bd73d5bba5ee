"""The study's page: read from the files that the images left, so that it cannot disagree with them."""

import csv
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from statistics import median

from vasohm.results.cells import unguard_text
from vasohm.results.markup import (
    Html,
    flag_codes,
    flag_meanings,
    heading,
    html,
    interval,
    link,
    listing,
    page,
    paragraph,
    picture,
    shown,
    table,
)
from vasohm.results.methods import Methods
from vasohm.results.wording import SCALE_SOURCES, why_no_resistance
from vasohm.results.write import write_atomically
from vasohm.results.write_study import Failure
from vasohm.units import UM_PER_MM

DESIGN_NAMES = ("subject", "eye", "group", "condition", "time")
IDS_SHOWN = 5
ROOT_FILES = (
    "images_all.csv",
    "networks_all.csv",
    "segments_all.csv",
    "branchings_all.csv",
    "orders_all.csv",
    "horton_all.csv",
    "classes_all.csv",
    "crossings_all.csv",
    "scenarios_all.csv",
    "failures.csv",
    "datapackage.json",
    "study.json",
    "references.bib",
)


@dataclass(frozen=True, slots=True)
class Study:
    """What the study's page tells beside the images' own files; `image_ids` are those with a folder, in sheet order."""

    name: str
    image_ids: tuple[str, ...]
    failures: tuple[Failure, ...]
    methods: Methods
    n_pending: int = 0  # images that no run has come to yet


@dataclass(frozen=True, slots=True)
class _Glance:
    """One image in a line of the page."""

    image: Mapping[str, str]
    median_radius_um: float
    largest: Mapping[str, str] | None  # the network that holds most length
    has_overlay: bool


def write_study_page(out_dir: Path, study: Study) -> None:
    """Write index.html at the root of the results.

    Raises
    ------
    OSError : an image's tables cannot be read, or the page cannot be written.
    """
    glances = [_glance(out_dir / "images" / image_id) for image_id in study.image_ids]
    body = [heading(study.name, 1), paragraph(_counts(study, glances))]
    lacking = [(glance.image["image_id"], why) for glance in glances if (why := _why_none(glance.largest))]
    body += [paragraph(line) for line in lines_without_resistance(lacking, len(glances))]
    body.append(_failures(study.failures))
    body += [heading("Cautions", 2), listing(study.methods.cautions)]
    body += [heading("Images", 2), _images(glances)]
    flags = [g.image["flags"] for g in glances] + [g.largest["flags"] for g in glances if g.largest]
    body += [heading("What the flags mean", 2), flag_meanings(flags)]
    body += [heading("Methods", 2), paragraph(study.methods.paragraph)]
    body += [heading("References", 2), listing(study.methods.references, numbered=True)]
    files = [name for name in ROOT_FILES if (out_dir / name).exists()]
    body += [heading("Files", 2), listing(link(name, name) for name in files)]
    write_atomically(out_dir / "index.html", page(f"{study.name} - vasohm", body).encode())


def images_without_resistance(out_dir: Path) -> list[tuple[str, str]]:
    """Images whose longest network has no resistance, each with the reason, from the gathered networks.

    Raises
    ------
    OSError : the table cannot be read.
    """
    longest: dict[str, dict[str, str]] = {}
    for row in _read(out_dir / "networks_all.csv"):
        before = longest.get(row["image_id"])
        if before is None or _number(row["length_um"]) > _number(before["length_um"]):
            longest[row["image_id"]] = row
    return [(image_id, why) for image_id, row in longest.items() if (why := _why_none(row))]


def lines_without_resistance(lacking: Sequence[tuple[str, str]], n_images: int) -> list[str]:
    """Tell in one line a reason which images have no resistance of their longest network, the first by name."""
    by_reason: dict[str, list[str]] = {}
    for image_id, why in lacking:
        by_reason.setdefault(why, []).append(image_id)
    return [
        f"{len(ids)} of {n_images} image{'s' if n_images != 1 else ''} without resistance of the longest network "
        f"({named(ids)}): {why}"
        for why, ids in by_reason.items()
    ]


def named(ids: Sequence[str]) -> str:
    """Name the first few of many images."""
    return ", ".join(ids[:IDS_SHOWN]) + (f" and {len(ids) - IDS_SHOWN} more" if len(ids) > IDS_SHOWN else "")


def _why_none(network: Mapping[str, str] | None) -> str:
    return why_no_resistance(_number(network["resistance_pa_s_m3"]), network["flags"]) if network else ""


def _counts(study: Study, glances: Sequence[_Glance]) -> str:
    measured = sum(glance.image["status"] == "measured" for glance in glances)
    empty, failed = len(glances) - measured, len(study.failures)
    total = len(glances) + failed + study.n_pending
    pending = f", {study.n_pending} not measured yet" if study.n_pending else ""
    return f"{total} images: {measured} measured, {empty} empty (no vessel found), {failed} failed{pending}."


def _failures(failures: Sequence[Failure]) -> Html:
    if not failures:
        return paragraph("No image failed.")
    rows = [(f.image_id, f.stage, f.error, f.message) for f in failures]
    told = table(("image", "stage", "error", "what was wrong and what to do"), rows)
    return Html(f'<section class="alert">{heading("Failed images", 2).source}{told.source}</section>')


def _images(glances: Sequence[_Glance]) -> Html:
    design = [name for name in DESIGN_NAMES if any(glance.image.get(name) for glance in glances)]
    numbers = (
        "pixel size (µm)",
        "segments",
        "length (mm)",
        "median radius (µm)",
        "resistance of the longest network (Pa·s/m³), 95 % interval",
    )
    names = ("picture", "image", "status", *design, *numbers, "flags")
    return table(names, [_line(glance, design) for glance in glances], numbers)


def _line(glance: _Glance, design: Sequence[str]) -> list[str | Html]:
    image = glance.image
    target = f"images/{image['image_id']}/"
    thumbnail: str | Html = ""
    if glance.has_overlay:
        small = picture(f"{target}overlay.png", f"Segments of {image['image_id']}", "small")
        thumbnail = link(f"{target}overlay.png", small)
    resistance: str | Html = ""
    flags = image["flags"]
    if glance.largest is not None:
        columns = ("resistance_pa_s_m3", "resistance_lo_pa_s_m3", "resistance_hi_pa_s_m3")
        resistance = interval(*(_number(glance.largest[name]) for name in columns))
        if _why_none(glance.largest):
            resistance = "none"
        flags = ";".join(dict.fromkeys(filter(None, f"{flags};{glance.largest['flags']}".split(";"))))
    return [
        thumbnail,
        link(f"{target}index.html", image["image_id"]),
        image["status"],
        *(image.get(name, "") for name in design),
        _pixel_size(image),
        image["n_segments"],
        shown(_number(image["length_um"]) / UM_PER_MM),
        shown(glance.median_radius_um),
        resistance,
        flag_codes(flags),
    ]


def _pixel_size(image: Mapping[str, str]) -> Html:
    size, se = shown(_number(image["pixel_size_um"])), shown(_number(image["pixel_size_se_um"]), 2)
    source = html(SCALE_SOURCES.get(image["pixel_size_source"], image["pixel_size_source"]))
    return Html(f"{size.source}{f' ± {se.source}' if se.source else ''} <br>({source})")


def _glance(folder: Path) -> _Glance:
    image = _read(folder / "image.csv")[0]
    networks = _read(folder / "networks.csv")
    radii = [_number(row["radius_mean_um"]) for row in _read(folder / "segments.csv")]
    known = [radius for radius in radii if not math.isnan(radius)]
    return _Glance(
        image=image,
        median_radius_um=median(known) if known else math.nan,
        largest=max(networks, key=lambda row: _number(row["length_um"]), default=None),
        has_overlay=(folder / "overlay.png").exists(),
    )


def _read(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return [{name: unguard_text(cell) for name, cell in row.items()} for row in csv.DictReader(file, strict=True)]


def _number(cell: str) -> float:
    return float(cell) if cell else math.nan
