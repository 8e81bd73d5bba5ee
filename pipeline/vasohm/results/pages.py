"""The study's page: read from the files that the images left, so that it cannot disagree with them."""

import csv
import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from statistics import median

from vasohm.results.cells import unguard_text
from vasohm.results.markup import (
    ASSETS,
    FACTS,
    FLAG_MEANING,
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
    section,
    shown,
    table,
    tiles,
)
from vasohm.results.methods import Methods
from vasohm.results.page_charts import Chart, charts_for_page, charts_for_print
from vasohm.results.wording import SCALE_SOURCES, why_no_resistance
from vasohm.results.write import write_atomically
from vasohm.results.write_study import Failure
from vasohm.units import UM_PER_MM

DESIGN_NAMES = ("subject", "eye", "group", "condition", "time")
IDS_SHOWN = 5
MOST_GROUPS = 12  # that a chart holds
CHARTS_FILE = "distributions.svg"
CHARTS_TOLD = "One dot an image, the line the median of its group. Groups are compared by the command compare."
FURTHER = {  # what other commands may have laid here
    "certificate.svg": "Certificate of measurement",
    "appraisal.txt": "How far measured is from truth",
    "compare/index.html": "Comparison of cohorts",
}
_SECTION = re.compile(r'<section id="([a-z]+)"[^>]*><h2>(.*?)</h2>')
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
    versions: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class _Glance:
    """One image in a line of the page."""

    image: Mapping[str, str]
    median_radius_um: float
    largest: Mapping[str, str] | None  # the network that holds most length


def _longest_resistance(glance: _Glance) -> float:
    return _number(glance.largest["resistance_pa_s_m3"]) if glance.largest is not None else math.nan


MEASURES: dict[str, Callable[[_Glance], float]] = {
    "Median lumen radius (µm)": lambda glance: glance.median_radius_um,
    "Length density (mm/mm²)": lambda glance: _number(glance.image["length_density_per_mm"]),
    "Resistance of the longest network (Pa·s/m³)": _longest_resistance,
    "Mean tortuosity": lambda glance: _number(glance.image["tortuosity_mean"]),
}


def write_study_page(out_dir: Path, study: Study) -> None:
    """Write index.html at the root of the results, and its charts for print beside it.

    Raises
    ------
    OSError : an image's tables cannot be read, or the page cannot be written.
    """
    glances = [_glance(out_dir / "images" / image_id) for image_id in study.image_ids]
    charts = _charts(glances)
    drawing = out_dir / CHARTS_FILE
    if charts:
        write_atomically(drawing, charts_for_print(charts))
    else:
        drawing.unlink(missing_ok=True)
    body = [_failures(study.failures), *_lacking(glances), _quality(glances)]
    body.append(section("images", "Images", _images(glances)))
    if charts:
        print_link = paragraph("For print: ", link(CHARTS_FILE, CHARTS_FILE), ".")
        body.append(
            section("distributions", "Distributions", paragraph(CHARTS_TOLD), charts_for_page(charts), print_link)
        )
    body += _scenarios(out_dir / "scenarios_all.csv")
    further = [(name, words) for name, words in FURTHER.items() if (out_dir / name).exists()]
    if further:
        body.append(section("further", "Certificate and comparison", listing(link(*one) for one in further)))
    body.append(section("methods", "Methods", paragraph(study.methods.paragraph)))
    bib = paragraph("As BibTeX: ", link("references.bib", "references.bib"), ".")
    body.append(section("references", "References", listing(study.methods.references, numbered=True), bib))
    body.append(section("cautions", "Cautions", listing(study.methods.cautions)))
    flags = [g.image["flags"] for g in glances] + [g.largest["flags"] for g in glances if g.largest]
    body.append(section("flags", "What the flags mean", flag_meanings(flags)))
    versions = ", ".join(f"{name} {version}" for name, version in study.versions.items())
    body.append(section("versions", "Versions", paragraph(versions or "Not told.")))
    files = [name for name in ROOT_FILES if (out_dir / name).exists()]
    body.append(section("files", "Files", listing(link(name, name) for name in files)))
    top = [heading(study.name, 1), paragraph(_counts(study, glances)), _tiles(study, glances), _contents(body)]
    text = page(f"{study.name} - vasohm", body, top=top, scripts=[f"{ASSETS}/study.js"])
    write_atomically(out_dir / "index.html", text.encode())


def _tiles(study: Study, glances: Sequence[_Glance]) -> Html:
    measured = sum(glance.image["status"] == "measured" for glance in glances)
    length_mm = sum(_known(glance.image["length_um"]) for glance in glances) / UM_PER_MM
    segments = sum(int(glance.image["n_segments"] or 0) for glance in glances)
    numbers: list[tuple[str | Html, str, bool]] = [
        (str(len(study.failures)), "failed", bool(study.failures)),
        (str(measured), "measured", False),
        (str(len(glances) - measured), "empty", False),
        (str(segments), "segments", False),
        (Html(f"{shown(length_mm).source} mm"), "length of vessels", False),
    ]
    if study.n_pending:
        numbers.insert(1, (str(study.n_pending), "not measured yet", True))
    return tiles(numbers)


def _contents(body: Sequence[Html]) -> Html:
    """Links to the sections."""
    found = [_SECTION.match(piece.source) for piece in body]
    links = "".join(f'<a href="#{one[1]}">{one[2]}</a>' for one in found if one)
    return Html(f'<nav aria-label="On this page">{links}</nav>')


def _lacking(glances: Sequence[_Glance]) -> list[Html]:
    lacking = [(glance.image["image_id"], why) for glance in glances if (why := _why_none(glance.largest))]
    return [paragraph(line) for line in lines_without_resistance(lacking, len(glances))]


def _quality(glances: Sequence[_Glance]) -> Html:
    """Every flag of the images and their longest networks: how many images carry it, and which."""
    ids: dict[str, list[str]] = {}
    for glance in glances:
        for flag in _flags(glance).split(";"):
            if flag and flag not in FACTS:
                ids.setdefault(flag, []).append(glance.image["image_id"])
    if not ids:
        return section("quality", "Quality", paragraph("No doubt is marked at any image or its longest network."))
    common = sorted(ids.items(), key=lambda one: (-len(one[1]), one[0]))
    rows = [(flag_codes(flag), str(len(found)), FLAG_MEANING.get(flag, ""), named(found)) for flag, found in common]
    return section("quality", "Quality", table(("flag", "images", "what it means", "which"), rows, ["images"]))


def _charts(glances: Sequence[_Glance]) -> list[Chart]:
    measured = [glance for glance in glances if glance.image["status"] == "measured"]
    if not measured:
        return []
    columns = _grouping(measured)
    groups = [", ".join(filter(None, (glance.image[name] for name in columns))) for glance in measured]
    charts = []
    for title, value in MEASURES.items():
        held: dict[str, dict[str, float]] = {name: {} for name in sorted(set(groups))}
        for glance, name in zip(measured, groups, strict=True):
            if not math.isnan(number := value(glance)):
                held[name][glance.image["image_id"]] = number
        charts.append(Chart(title, held))
    return charts


def _grouping(glances: Sequence[_Glance]) -> list[str]:
    """Columns of the sheet that part the images into a few groups; as many of them as leave the charts readable."""
    columns: list[str] = []
    for name in ("group", "condition", "time"):
        if len({glance.image.get(name, "") for glance in glances}) < 2:
            continue
        if len({tuple(glance.image[one] for one in (*columns, name)) for glance in glances}) <= MOST_GROUPS:
            columns.append(name)
    return columns


def _scenarios(path: Path) -> list[Html]:
    """What becomes of resistances, each scenario over all networks that have one."""
    if not path.exists():
        return []
    ratios: dict[str, list[float]] = {}
    images: dict[str, set[str]] = {}
    for row in _read(path):
        if not math.isnan(ratio := _number(row["ratio"])):
            ratios.setdefault(row["scenario"], []).append(ratio)
            images.setdefault(row["scenario"], set()).add(row["image_id"])
    if not ratios:
        return []
    rows = [
        (name, str(len(images[name])), str(len(found)), shown(median(found)), shown(min(found)), shown(max(found)))
        for name, found in ratios.items()
    ]
    names = ("scenario", "images", "networks", "median of after / before", "smallest", "largest")
    return [section("scenarios", "Scenarios", table(names, rows, names[1:]))]


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
    return Html(f'<section id="failed" class="alert">{heading("Failed images", 2).source}{told.source}</section>')


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
    found = table(names, [_line(glance, design) for glance in glances], numbers, sortable=True)
    narrow = (
        '<label>Only those with <input type="search" id="filter"></label><span id="count" aria-live="polite"></span>'
    )
    return Html(f'<div class="tools scripted" hidden>{narrow}</div>{found.source}')


def _line(glance: _Glance, design: Sequence[str]) -> list[str | Html]:
    image = glance.image
    target = f"images/{image['image_id']}/"
    small = picture(f"{target}thumbnail.jpg", f"Segments of {image['image_id']}", "small")
    resistance: str | Html = ""
    if glance.largest is not None:
        columns = ("resistance_pa_s_m3", "resistance_lo_pa_s_m3", "resistance_hi_pa_s_m3")
        resistance = interval(*(_number(glance.largest[name]) for name in columns))
        if kind := glance.largest["vessel_class"]:
            resistance = Html(f"{resistance.source}<br>{html(kind)}s", resistance.value)
        if _why_none(glance.largest):
            resistance = "none"
    return [
        link(f"{target}index.html", small),
        link(f"{target}index.html", image["image_id"]),
        image["status"],
        *(image.get(name, "") for name in design),
        _pixel_size(image),
        Html(image["n_segments"], image["n_segments"]),
        shown(_number(image["length_um"]) / UM_PER_MM),
        shown(glance.median_radius_um),
        resistance,
        flag_codes(_flags(glance)),
    ]


def _flags(glance: _Glance) -> str:
    """Flags of an image and of its longest network."""
    more = glance.largest["flags"] if glance.largest is not None else ""
    return ";".join(dict.fromkeys(filter(None, f"{glance.image['flags']};{more}".split(";"))))


def _known(cell: str) -> float:
    return float(cell) if cell else 0.0


def _pixel_size(image: Mapping[str, str]) -> Html:
    size, se = shown(_number(image["pixel_size_um"])), shown(_number(image["pixel_size_se_um"]), 2)
    source = html(SCALE_SOURCES.get(image["pixel_size_source"], image["pixel_size_source"]))
    return Html(f"{size.source}{f' ± {se.source}' if se.source else ''} <br>({source})", size.value)


def _glance(folder: Path) -> _Glance:
    image = _read(folder / "image.csv")[0]
    networks = _read(folder / "networks.csv")
    radii = [_number(row["radius_mean_um"]) for row in _read(folder / "segments.csv")]
    known = [radius for radius in radii if not math.isnan(radius)]
    return _Glance(
        image=image,
        median_radius_um=median(known) if known else math.nan,
        largest=max(networks, key=lambda row: _number(row["length_um"]), default=None),
    )


def _read(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return [{name: unguard_text(cell) for name, cell in row.items()} for row in csv.DictReader(file, strict=True)]


def _number(cell: str) -> float:
    return float(cell) if cell else math.nan
