"""What a study file may say: every table, key, type and range, and how a wrong one is told."""

import re
from collections.abc import Mapping
from typing import Annotated, Any, Literal, get_args

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, PlainValidator, ValidationError
from pydantic_core import ErrorDetails

from vasohm.config.names import nearest
from vasohm.config.presets import PRESETS
from vasohm.config.study_values import (
    Limits,
    Name,
    Names,
    NotNegative,
    Positive,
    RadiusRange,
    Zone,
    blur,
    by_class,
    one_of,
    ratio_of_change,
    ratio_of_effect,
    word_or_index,
)
from vasohm.errors import Problem
from vasohm.flow.monte_carlo import LEAST_DRAWS
from vasohm.flow.phase_separation import SPLIT_LAWS
from vasohm.flow.rheology import HIGHEST_HEMATOCRIT, law_names
from vasohm.flow.scenarios import WIDEST_FACTOR
from vasohm.image.calibrate import LEAST_UM, MOST_UM
from vasohm.image.eye import LONGEST_MM, SHORTEST_MM
from vasohm.image.segment import segmenter_names
from vasohm.network.calibre_equivalents import FORMULAS

CHANNELS = ("green", "red", "blue", "luminance")
PLANES = ("max", "mean")
TYPE_WORDS = {
    "float_type": "a number",
    "int_type": "a whole number",
    "bool_type": "true or false",
    "string_type": "text in quotes",
    "list_type": "a list in square brackets",
    "dict_type": "a table",
    "model_type": "a table",
    "finite_number": "a finite number",
}
BOUND_WORDS = {
    "greater_than": ("gt", "greater than"),
    "greater_than_equal": ("ge", "at least"),
    "less_than_equal": ("le", "at most"),
}
LENGTH_KINDS = ("too_short", "too_long", "string_too_short", "string_too_long")
MOST_SHOWN, MOST_PERCENT = 60, 100  # characters of a faulty value; of a whole
MOST_DEG_PER_PX = 1.0  # the widest cameras see 200 degrees on some thousand pixels
LEAST_DISC_UM, MOST_DISC_UM = 1000.0, 3000.0  # means of peoples lie from 1500 to 2100 um; millimetres are refused
LITERAL = re.compile("'([^']+)'")


class Table(BaseModel):
    """One table of a study file: strict types, finite numbers, no unknown keys."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)


class StudyTable(Table):
    """Of the study itself."""

    name: Name | None = None
    sheet: Name | None = None
    allow_outside: bool | None = None


class ImageTable(Table):
    """How pictures are read."""

    preset: Annotated[str, PlainValidator(lambda value: one_of(value, tuple(PRESETS)))]
    channel: Annotated[int | str, PlainValidator(lambda value: word_or_index(value, CHANNELS))] | None = None
    polarity: Literal["dark", "bright"] | None = None
    plane: Annotated[int | str, PlainValidator(lambda value: word_or_index(value, PLANES))] | None = None
    gamma: Annotated[float, Field(gt=0, le=10)] | None = None
    max_megapixels: Annotated[float, Field(gt=0, le=100_000)] | None = None
    block_megapixels: Annotated[float, Field(ge=0.25, le=1000)] | None = None


class ScaleTable(Table):
    """Pixel size, and how it follows from an eye or its optic disc."""

    pixel_size_um: Annotated[float, Field(ge=LEAST_UM, le=MOST_UM)] | None = None
    pixel_size_se_um: NotNegative | None = None
    scale_conflict: Literal["stop", "sheet"] | None = None
    magnification: Literal["none", "bennett", "bengtsson"] | None = None
    camera_factor: Annotated[float, Field(gt=0, le=MOST_DEG_PER_PX)] | None = None
    camera_factor_se: NotNegative | None = None
    reference_axial_length_mm: Annotated[float, Field(ge=SHORTEST_MM, le=LONGEST_MM)] | None = None
    disc_diameter_um: Annotated[float, Field(ge=LEAST_DISC_UM, le=MOST_DISC_UM)] | None = None
    disc_diameter_se_um: NotNegative | None = None


class SegmentTable(Table):
    """How vessels are found."""

    method: Annotated[str, PlainValidator(lambda value: one_of(value, segmenter_names()))] | None = None
    radius_um: RadiusRange | None = None
    false_alarms_per_mpx: NotNegative | None = None
    crossing_probability: Annotated[float, Field(ge=0, le=1)] | None = None
    overlap_adds: bool | None = None
    parameters: dict[str, float] | None = None


class RadiusTable(Table):
    """How radii are measured."""

    profile: Literal["auto", "slab", "cylinder", "absorber"] | None = None
    blur_px: Annotated[float | str, PlainValidator(blur)] | None = None
    plasma_layer_um: NotNegative | None = None
    plasma_layer_se_um: NotNegative | None = None


class ClassesTable(Table):
    """How arterioles are told from venules."""

    method: Literal["colour", "none"] | None = None
    probability: Annotated[float, Field(ge=0.5, le=1)] | None = None


class ShapeTable(Table):
    """Where and how calibres are summed up."""

    disc: Literal["find", "none"] | None = None
    zone_dd: Zone | None = None
    calibre_formula: Annotated[str, PlainValidator(lambda value: one_of(value, tuple(FORMULAS)))] | None = None
    calibre_um: Limits | None = None


class BloodTable(Table):
    """Blood."""

    law: Annotated[str, PlainValidator(lambda value: one_of(value, law_names()))] | None = None
    hematocrit: Annotated[float, Field(ge=0, le=HIGHEST_HEMATOCRIT)] | None = None
    hematocrit_se: Annotated[float, Field(ge=0, le=HIGHEST_HEMATOCRIT)] | None = None
    plasma_viscosity_mpa_s: Positive | None = None
    plasma_viscosity_se_mpa_s: NotNegative | None = None
    viscosity_mpa_s: Positive | None = None
    hematocrit_split: bool | None = None
    split_law: Annotated[str, PlainValidator(lambda value: one_of(value, tuple(SPLIT_LAWS)))] | None = None
    diameter_scaling: Literal["none", "red-cell-volume"] | None = None
    red_cell_volume_fl: Annotated[float, Field(ge=5, le=300)] | None = None
    density_kg_m3: Annotated[float, Field(ge=900, le=1200)] | None = None
    heart_rate_per_min: Annotated[float, Field(gt=0, le=1500)] | None = None
    parameters: dict[str, float] | None = None


class NetworkTable(Table):
    """Where blood enters and leaves, and how intervals are found."""

    terminals: Literal["auto", "file", "none", "estimate"] | None = None
    drive_mmhg: Positive | None = None
    trees_by_class: bool | None = None
    target_wall_shear_pa: Annotated[float | dict[str, float], PlainValidator(by_class)] | None = None
    target_wall_shear_sd_pa: Positive | None = None
    target_pressure_mmhg: Annotated[float | dict[str, float], PlainValidator(by_class)] | None = None
    target_pressure_sd_mmhg: Positive | None = None
    intervals: Literal["auto", "delta", "monte-carlo"] | None = None
    draws: Annotated[int, Field(ge=LEAST_DRAWS, le=100_000)] | None = None
    seed: Annotated[int, Field(ge=0, lt=2**63)] | None = None


class WhereTable(Table):
    """Which vessels a scenario changes."""

    radius_um_below: Positive | None = None
    radius_um_above: NotNegative | None = None
    vessel_class: Literal["arteriole", "venule", "capillary"] | None = None


class ScenarioTable(Table):
    """What if some vessels change their radius."""

    name: Name
    where: WhereTable = WhereTable()
    radius_factor: Annotated[float, Field(gt=0, le=WIDEST_FACTOR)] | None = None
    wanted_ratio: Annotated[Positive, AfterValidator(ratio_of_change)] | None = None


class CompareTable(Table):
    """Which cohorts are compared, in what."""

    outcomes: Annotated[Names, Field(min_length=1)] | None = None
    by: Name
    reference: Name
    covariates: Names = []
    plan_ratio: Annotated[Positive, AfterValidator(ratio_of_effect)] | None = None
    radius_um: list[RadiusRange] = []


class RunTable(Table):
    """What one image may take."""

    image_timeout_s: Positive | None = None
    memory_limit_mb: Annotated[float, Field(ge=300)] | None = None


class OutputTable(Table):
    """What is written beside the tables."""

    overlay: bool | None = None
    colour: Literal["radius", "share", "resistance", "uncertainty", "class"] | None = None
    print: bool | None = None


class StudyModel(Table):
    """A whole study file."""

    study: StudyTable = StudyTable()
    image: ImageTable
    scale: ScaleTable = ScaleTable()
    segment: SegmentTable = SegmentTable()
    radius: RadiusTable = RadiusTable()
    classes: ClassesTable = ClassesTable()
    shape: ShapeTable = ShapeTable()
    blood: BloodTable = BloodTable()
    network: NetworkTable = NetworkTable()
    scenario: list[ScenarioTable] = []
    compare: CompareTable | None = None
    run: RunTable = RunTable()
    output: OutputTable = OutputTable()


def parse_model(said: Mapping[str, Any], file: str) -> tuple[StudyModel | None, list[Problem]]:
    """Check what a study says against its model.

    Parameters
    ----------
    said : tables by name.
    file : where they come from, for the problems.

    Returns
    -------
    The model, or None and every problem found.
    """
    try:
        return StudyModel.model_validate(said), []
    except ValidationError as error:
        return None, [_problem(detail, file) for detail in error.errors(include_url=False)]


def _problem(detail: ErrorDetails, file: str) -> Problem:
    key = ""
    for part in detail["loc"]:
        key += f"[{part + 1}]" if isinstance(part, int) else f"{'.' if key else ''}{part}"
    value = "" if detail["type"] == "missing" else _shown(detail["input"])
    return Problem(file, _message(detail), column=key, value=value)


def _message(detail: ErrorDetails) -> str:
    kind, value = detail["type"], _shown(detail["input"])
    if kind == "extra_forbidden":
        return _unknown(detail["loc"])
    if kind == "missing":
        known = ", ".join(map(repr, PRESETS))
        return f"is missing. Give [image] a preset: {known}." if detail["loc"][0] == "image" else "is missing."
    return f"{value} {_rule(detail)}"


def _rule(detail: ErrorDetails) -> str:
    """Say what a value must be."""
    kind, context = detail["type"], detail.get("ctx", {})
    if kind in TYPE_WORDS:
        hint = f" Write [[{detail['loc'][-1]}]], with two brackets." if _is_bare_table(detail) else ""
        return f"must be {TYPE_WORDS[kind]}.{hint}"
    if kind in BOUND_WORDS:
        key, words = BOUND_WORDS[kind]
        return f"must be {words} {context[key]:g}.{_fraction_hint(detail)}"
    if kind in LENGTH_KINDS:
        return _length_rule(detail["input"], context)
    if kind == "literal_error":
        known = tuple(LITERAL.findall(str(context["expected"])))
        like = nearest(str(detail["input"]), known)
        return f"must be one of {', '.join(map(repr, known))}.{f' Did you mean {like!r}?' if like else ''}"
    return detail["msg"] if kind == "vasohm" else f"is wrong: {detail['msg']}."


def _length_rule(value: object, context: Mapping[str, Any]) -> str:
    least = context.get("min_length")
    has = len(value) if isinstance(value, str | list) else 0
    needed = int(context["min_length"] if least is not None else context["max_length"])
    if not isinstance(value, list):
        return f"has {has} characters where {'at least' if least is not None else 'at most'} {needed} are needed."
    numbers = all(isinstance(item, int | float) for item in value)
    word = ("number" if numbers and value else "entry") if has == 1 else ("numbers" if numbers and value else "entries")
    is_split = numbers and has == 2 * needed and all(isinstance(item, int) for item in value[1::2])
    hint = " Are those decimal commas? Write 3.5 and not 3,5." if is_split else ""
    return f"has {has} {word} where {needed} {'is' if needed == 1 else 'are'} needed.{hint}"


def _is_bare_table(detail: ErrorDetails) -> bool:
    """Tell whether a table stands where an array of tables is meant."""
    return detail["type"] == "list_type" and isinstance(detail["input"], Mapping) and len(detail["loc"]) == 1


def _fraction_hint(detail: ErrorDetails) -> str:
    value = detail["input"]
    is_percent = str(detail["loc"][-1]).startswith("hematocrit") and isinstance(value, int | float) and value > 1
    return f" It is a fraction, not per cent: write {value / 100:g}." if is_percent and value <= MOST_PERCENT else ""


def _unknown(place: tuple[int | str, ...]) -> str:
    """Name the nearest known key of the same table, or the table in which the key would be known."""
    *tables, word = (part for part in place if isinstance(part, str))
    known = _keys(tables)
    like = nearest(word, known)
    if like:
        return f"unknown key; the nearest known one is {like!r}."
    homes = [f"[{name}]" for name in StudyModel.model_fields if word in _keys([name])]
    if homes:
        return f"unknown key here; it belongs in {' or '.join(homes)}."
    return f"unknown key; known here are {', '.join(known)}."


def _keys(tables: list[str]) -> tuple[str, ...]:
    model: type[BaseModel] = StudyModel
    for name in tables:
        inner = _model_in(model.model_fields[name].annotation)
        if inner is None:
            return ()
        model = inner
    return tuple(model.model_fields)


def _model_in(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((found for part in get_args(annotation) if (found := _model_in(part))), None)


def _shown(value: object) -> str:
    """Write a value as a study file would, shortened."""
    text = str(value).lower() if isinstance(value, bool) else repr(value)
    return text if len(text) <= MOST_SHOWN else text[:MOST_SHOWN] + "..."
