"""The study file: read, checked and resolved, with every problem told at once."""

import re
import stat
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from vasohm.config.blood_settings import blood_problems, blood_settings, blood_warnings
from vasohm.config.flow_settings import end_targets, scenario_problems, scenarios_asked, target_problems
from vasohm.config.names import ids_from_files, nearest
from vasohm.config.presets import DEFAULTS, PRESETS, SPUR_PX, SPUR_RADII
from vasohm.config.scale_settings import scale_problems, scale_settings, scale_warnings
from vasohm.config.settings import CompareSettings, OutputSettings, RunSettings, Settings
from vasohm.config.sheet import DESIGN, ImageSource, Sheet, read_sheet
from vasohm.config.study_model import CompareTable, ScenarioTable, StudyModel, parse_model
from vasohm.errors import Problem, RequestError
from vasohm.flow.monte_carlo import IntervalSettings
from vasohm.flow.terminals import NetworkSettings
from vasohm.image.calibrate import TypedScale
from vasohm.image.prepare import PrepareSettings
from vasohm.image.read import MAGIC, ReadSettings, shown
from vasohm.image.segment import MASK_METHOD, SegmentSettings
from vasohm.network.class_trees import TreeSettings
from vasohm.network.classes import ClassSettings
from vasohm.network.crossings import CrossingSettings
from vasohm.network.lumenfit import RadiusSettings
from vasohm.network.morphometry import ShapeSettings
from vasohm.network.skeletonize import SkeletonizeSettings
from vasohm.results.schema import OUTCOME_TABLES, outcome_columns

MOST_BYTES = 1_000_000
USUAL_OUTCOMES = ("networks.resistance_pa_s_m3", "segments.radius_hydraulic_um", "image.length_density_per_mm")
AT_LINE = re.compile(r"\(at line (\d+), column \d+\)")
BARE_COMMA = re.compile(r"\s*[\w.-]+\s*=\s*([+-]?\d+),(\d+)\s*(?:#.*)?$")
BARE_WORD = re.compile(r"\s*([\w.-]+)\s*=\s*([^\W\d][\w ./-]*?)\s*(?:#.*)?$")
HEAD_BYTES = 64
AD_HOC = Path("command line")
MAPPING = Path("study mapping")


@dataclass(frozen=True, slots=True)
class Study:
    """A study as it will be measured.

    `resolved` holds every key with its final value and where that comes from: study, preset or default.
    """

    name: str
    path: Path  # the study file
    settings: Settings
    images: tuple[ImageSource, ...]
    sheet: str  # name of the image sheet; "" where there is none
    lines: Mapping[str, int]  # of the sheet, by image_id
    compare: CompareSettings | None
    run: RunSettings
    resolved: Mapping[str, Mapping[str, Any]]
    warnings: tuple[str, ...]


def read_study(path: Path) -> Study:
    """Read a study file and the image sheet that it names.

    Images and masks are not opened and may be missing: that is found out, and told, when each is measured.

    Raises
    ------
    RequestError : every problem of the study file, the sheet, and its terminals and edits files.
    """
    said = read_toml(path)
    return _study(said, path, path.absolute().parent, needs_sheet=True)


def study_from_mapping(said: Mapping[str, Any], base: Path) -> Study:
    """Check a study given as tables by name, as from Python; without `study.sheet` it has no images.

    Parameters
    ----------
    said : what a study file would hold; tuples stand for lists.
    base : the folder to which `study.sheet` is relative.

    Raises
    ------
    RequestError : every problem.
    """
    return _study(_listed(said), MAPPING, base, needs_sheet=False)


def ad_hoc_study(images: Sequence[Path], pixel_size_um: float | None, preset: str) -> Study:
    """Make a study of files named on the command line; ids come from the file names.

    Parameters
    ----------
    images : the files, at least one.
    pixel_size_um : of all of them; None leaves it to the files.
    preset : the kind of image.

    Raises
    ------
    RequestError : no images, an unknown preset, a pixel size out of range.
    """
    scale = {} if pixel_size_um is None else {"pixel_size_um": pixel_size_um}
    if not images:
        raise RequestError([Problem(str(AD_HOC), "no images.")])
    study = _study({"image": {"preset": preset}, "scale": scale}, AD_HOC, Path(), needs_sheet=False)
    named = zip(ids_from_files(images), images, strict=True)
    sources = tuple(_bare_source(name, file.absolute()) for name, file in named)
    return replace(study, images=sources)


def _study(said: Mapping[str, Any], path: Path, base: Path, *, needs_sheet: bool) -> Study:
    file = shown(path)
    model, problems = parse_model(said, file)
    sheet = None
    sheet_name = _sheet_name(said)
    if sheet_name:
        sheet, sheet_problems = _sheet(sheet_name, file, base, said)
        problems += sheet_problems
    elif needs_sheet and model is not None:
        problems.append(
            Problem(file, 'is missing. Name the image sheet, as in sheet = "images.csv".', column="study.sheet")
        )
    if model is None:
        raise RequestError(problems)
    problems += scenario_problems(model.scenario, file)
    compare = None
    if model.compare is not None:
        compare, compare_problems = _compare(model.compare, sheet, file)
        problems += compare_problems
    resolved = _resolve(model, path)
    values = {key: entry["value"] for key, entry in resolved.items()}
    problems += target_problems(values, file)
    problems += blood_problems(values, file)
    problems += scale_problems(values, file)
    if sheet is not None:
        problems += _mask_problems(values, sheet, file)
    if problems:
        raise RequestError(problems)
    images = sheet.images if sheet is not None else ()
    return Study(
        name=values["study.name"],
        path=path,
        settings=_settings(values, model.scenario),
        images=images,
        sheet=sheet.file if sheet is not None else "",
        lines=sheet.lines if sheet is not None else {},
        compare=compare,
        run=RunSettings(values["run.image_timeout_s"], values["run.memory_limit_mb"]),
        resolved=resolved,
        warnings=(*(sheet.warnings if sheet is not None else ()), *_odd(values, images)),
    )


def read_toml(path: Path) -> Mapping[str, Any]:
    """Read a TOML file as it stands, unchecked; RequestError where it is none."""

    def failed(message: str, row: int | None = None) -> RequestError:
        return RequestError([Problem(shown(path), message, row=row)])

    try:
        status = path.stat()
        if not stat.S_ISREG(status.st_mode):
            raise failed("is not a file.")
        with path.open("rb") as stream:
            head = stream.read(HEAD_BYTES)
        if b"\0" in head and head.startswith(tuple(MAGIC)):
            raise failed("is an image, where a study file (.toml) is wanted. Only measure takes images by name.")
        if status.st_size > MOST_BYTES:
            raise failed(f"has {status.st_size / 1e6:.3g} MB: it is no study file, which has at most 1 MB.")
        data = path.read_bytes()
    except FileNotFoundError as error:
        raise failed(
            f"no such file (looked for {str(path)!r})." if path.name != str(path) else "no such file."
        ) from error
    except OSError as error:
        raise failed(f"cannot be read: {error.strerror}.") from error
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise failed("looks like UTF-16. Save it as UTF-8.", 1)
    try:
        return tomllib.loads(data.decode("utf-8-sig"))
    except UnicodeDecodeError as error:
        row = data.count(b"\n", 0, error.start) + 1
        raise failed("is not UTF-8 text: it is binary, or in another encoding. Save it as UTF-8.", row) from error
    except RecursionError as error:
        raise failed("its brackets are nested too deeply.") from error
    except ValueError as error:
        line = AT_LINE.search(str(error))
        row = int(line[1]) if line else data.rstrip().count(b"\n") + 1
        raise failed(f"is no valid TOML: {error}{_toml_hint(path, data, row)}", row) from error


def _toml_hint(path: Path, data: bytes, row: int) -> str:
    """Say what the usual slips are, where one of them is seen in the line."""
    if path.suffix.lower() in {".csv", ".tsv"}:
        return ". Is that the image sheet? Give the study file that names it."
    said = data.decode("utf-8-sig").splitlines()[row - 1 : row]
    if said and (comma := BARE_COMMA.match(said[0])):
        return f". Is that a decimal comma? Write {comma[1]}.{comma[2]}."
    if said and (word := BARE_WORD.match(said[0])):
        return f'. Text needs quotes: {word[1]} = "{word[2].strip()}".'
    return ""


def _sheet_name(said: Mapping[str, Any]) -> str:
    table = said.get("study")
    name = table.get("sheet") if isinstance(table, Mapping) else None
    return name if isinstance(name, str) else ""


def _covariates(said: Mapping[str, Any]) -> tuple[str, ...]:
    table = said.get("compare")
    names = table.get("covariates") if isinstance(table, Mapping) else None
    return tuple(name for name in names if isinstance(name, str)) if isinstance(names, list) else ()


def _allows_outside(said: Mapping[str, Any]) -> bool:
    table = said.get("study")
    return isinstance(table, Mapping) and table.get("allow_outside") is True


def _sheet(name: str, file: str, base: Path, said: Mapping[str, Any]) -> tuple[Sheet | None, list[Problem]]:
    if Path(name).is_absolute() or "\\" in name or re.match(r"[A-Za-z][A-Za-z0-9+.-]+:/", name) or "\0" in name:
        message = f"{name!r} must be a path relative to the study file, its folders parted by /."
        return None, [Problem(file, message, column="study.sheet", value=name)]
    try:
        return read_sheet(base / name, _covariates(said), allow_outside=_allows_outside(said)), []
    except RequestError as error:
        return None, list(error.problems)


def _compare(table: CompareTable, sheet: Sheet | None, file: str) -> tuple[CompareSettings, list[Problem]]:
    """Check the outcomes against the output's columns, and the rest against the sheet."""
    problems = []

    def wrong(key: str, message: str, value: str) -> None:
        problems.append(Problem(file, message, column=f"compare.{key}", value=value))

    outcomes = []
    for outcome in table.outcomes or USUAL_OUTCOMES:
        found = _outcomes_named(outcome)
        if len(found) == 1:
            outcomes.append(found[0])
        elif found:
            wrong("outcomes", f"{outcome!r} occurs in more than one table. Say {' or '.join(found)}.", outcome)
        else:
            like = nearest(outcome, [*_numeric_columns(), *(name.partition(".")[2] for name in _numeric_columns())])
            hint = f" Did you mean {like}?" if like else ""
            wrong("outcomes", f"{outcome!r} is no number that a table of the results holds.{hint}", outcome)
    if sheet is not None:
        texts = [*(name for name in DESIGN if name in sheet.columns), *sheet.carried]
        for key, names in (("by", [table.by]), ("covariates", table.covariates)):
            for name in names:
                if name not in texts:
                    known = f"it has {', '.join(texts)}" if texts else "it has none that describe the design"
                    wrong(key, f"{name!r} is no such column of the image sheet; {known}.", name)
        levels = sorted({source.design.get(table.by, "") for source in sheet.images} - {""})
        if table.by in texts and table.reference not in levels:
            wrong(
                "reference",
                f"{table.reference!r} is no value of {table.by}; there are {', '.join(levels)}.",
                table.reference,
            )
    if table.by in table.covariates:
        wrong("covariates", f"{table.by!r} is what is compared; it cannot be a covariate too.", table.by)
    radius_um = tuple((low, high) for low, high in table.radius_um)
    settings = CompareSettings(
        tuple(outcomes),
        table.by,
        table.reference,
        tuple(table.covariates),
        table.plan_ratio,
        radius_um,
        outcomes_named=table.outcomes is not None,
    )
    return settings, problems


def _numeric_columns() -> list[str]:
    return [
        f"{table}.{column.name}"
        for table in OUTCOME_TABLES
        for column in outcome_columns(table)
        if column.type in {"number", "integer"} and not column.name.endswith("_id")
    ]


def _outcomes_named(name: str) -> list[str]:
    """Full names that a name may mean; of the zone none is meant unless it is named."""
    known = [full.partition(".") for full in _numeric_columns()]
    return ["".join(full) for full in known if name == "".join(full) or (name == full[2] and full[0] != "zone")]


def _resolve(model: StudyModel, path: Path) -> dict[str, dict[str, Any]]:
    """Fill in what the study leaves open and note where each value comes from."""
    preset = PRESETS[model.image.preset]
    resolved: dict[str, dict[str, Any]] = {
        "study.name": {"value": path.stem, "source": "default"},
        "study.sheet": {"value": None, "source": "default"},
        "image.preset": {"value": model.image.preset, "source": "study"},
        **{key: {"value": value, "source": "preset"} for key, value in preset.items()},
        **{key: {"value": value, "source": "default"} for key, value in DEFAULTS.items()},
        "skeletonize.spur_radii": {"value": SPUR_RADII, "source": "default"},
        "skeletonize.spur_px": {"value": SPUR_PX, "source": "default"},
        "scenario": {"value": [], "source": "default"},
        "compare": {"value": None, "source": "default"},
    }
    for table, entries in model.model_dump(exclude_unset=True).items():
        if table in {"scenario", "compare"}:
            resolved[table] = {"value": entries, "source": "study"}
        else:
            for key, value in entries.items():
                if value is not None:
                    resolved[f"{table}.{key}"] = {"value": value, "source": "study"}
    return dict(sorted(resolved.items()))


def _settings(values: Mapping[str, Any], scenarios: Sequence[ScenarioTable]) -> Settings:
    low, high = values["segment.radius_um"]
    blur_px = values["radius.blur_px"]
    return Settings(
        preset=values["image.preset"],
        read=ReadSettings(
            values["image.plane"],
            values["image.max_megapixels"],
            values["image.channel"],
            values["image.block_megapixels"],
        ),
        scale=scale_settings(values),
        prepare=PrepareSettings(
            values["image.channel"], values["image.polarity"], values["image.gamma"], radius_um=(low, high)
        ),
        segment=SegmentSettings(
            values["segment.method"],
            (low, high),
            values["segment.false_alarms_per_mpx"],
            values["segment.parameters"],
        ),
        skeletonize=SkeletonizeSettings(values["skeletonize.spur_radii"], values["skeletonize.spur_px"]),
        crossings=CrossingSettings(values["segment.crossing_probability"], values["segment.overlap_adds"]),
        radius=RadiusSettings(
            values["radius.profile"],
            None if blur_px == "auto" else blur_px,
            values["radius.plasma_layer_um"],
            values["radius.plasma_layer_se_um"],
            low,
        ),
        classes=ClassSettings(values["classes.method"], values["classes.probability"]),
        trees=TreeSettings(values["network.trees_by_class"]),
        shape=ShapeSettings(
            (values["shape.zone_dd"][0], values["shape.zone_dd"][1]),
            values["shape.calibre_formula"],
            tuple(values["shape.calibre_um"]),
            values["shape.disc"],
        ),
        blood=blood_settings(values),
        network=NetworkSettings(values["network.terminals"], values["network.drive_mmhg"]),
        targets=end_targets(values),
        intervals=IntervalSettings(values["network.intervals"], values["network.draws"], values["network.seed"]),
        scenarios=scenarios_asked(scenarios),
        output=OutputSettings(values["output.overlay"], values["output.colour"], values["output.print"]),
    )


def _mask_problems(values: Mapping[str, Any], sheet: Sheet, file: str) -> Iterator[Problem]:
    bare = [source.image_id for source in sheet.images if source.mask_file is None]
    if values["segment.method"] == MASK_METHOD and bare:
        message = f"method = {MASK_METHOD!r} needs a mask_file for every image; {_some(bare)} have none."
        yield Problem(file, message, column="segment.method", value=MASK_METHOD)


def _odd(values: Mapping[str, Any], images: Sequence[ImageSource]) -> Iterator[str]:
    yield from blood_warnings(values)
    yield from scale_warnings(values, images)
    bare = [source.image_id for source in images if not source.terminals]
    if values["network.terminals"] == "file" and bare:
        yield f'terminals = "file", but {_some(bare)} have no terminals: their networks get no resistance.'


def _some(ids: Sequence[str]) -> str:
    return ", ".join(ids[:5]) + (f" and {len(ids) - 5} more" if len(ids) > 5 else "")


def _bare_source(image_id: str, file: Path) -> ImageSource:
    return ImageSource(image_id, file, TypedScale(None, None), None, None, None, (), (), None, None, {})


def _listed(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _listed(inner) for key, inner in value.items()}
    return [_listed(inner) for inner in value] if isinstance(value, tuple | list) else value
