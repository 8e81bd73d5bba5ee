"""The image sheet: one row an image, read strictly; and the terminals and edits files it names."""

import re
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

from vasohm.config.csv_table import CellError, CsvTable, Range, Row, parse_csv, parse_number, shown_cell
from vasohm.config.names import id_fault, is_one_edit_away, nearest
from vasohm.config.rows import Rows
from vasohm.errors import Problem, RequestError
from vasohm.flow.rheology import HIGHEST_HEMATOCRIT
from vasohm.flow.terminals import ROLES, TerminalPoint
from vasohm.image.calibrate import LEAST_UM, MOST_UM, TypedScale
from vasohm.image.disc import OpticDisc
from vasohm.image.eye import LEAST_D, LONGEST_MM, MOST_D, MOST_LENGTH_SE_MM, SHORTEST_MM, Eye
from vasohm.image.read import shown
from vasohm.network.edits import Edit
from vasohm.results.schema import image_columns

T = TypeVar("T")

POSITIVE = Range(least=0, is_open=True)
NOT_NEGATIVE = Range(least=0)
HEMATOCRIT = Range(least=0, most=HIGHEST_HEMATOCRIT, note="It is a fraction, not per cent.")
NUMBERS: Mapping[str, Range] = {
    "pixel_size_um": Range(LEAST_UM, MOST_UM),
    "pixel_size_se_um": NOT_NEGATIVE,
    "disc_x_px": Range(),
    "disc_y_px": Range(),
    "disc_radius_px": POSITIVE,
    "axial_length_mm": Range(SHORTEST_MM, LONGEST_MM, note="A grown eye is some 24 mm long."),
    "axial_length_se_mm": Range(0, MOST_LENGTH_SE_MM),
    "refraction_d": Range(LEAST_D, MOST_D),
    "hematocrit": HEMATOCRIT,
}
DISC = ("disc_x_px", "disc_y_px", "disc_radius_px")
FILES = ("file", "mask_file", "fov_file", "class_file", "terminals_file", "edits_file")
DESIGN = ("subject", "eye", "group", "condition", "time")
KNOWN = ("image_id", *FILES, *DESIGN, *NUMBERS)
NEEDED = ("image_id", "file")
LEAST_MISSPELT = 6  # letters; shorter known names are one letter away from too many honest ones
UNIT_SUFFIX = re.compile(r"_(pm|nm|um|mm|cm|m|px|microns?|inch|in|d|pct|percent|fraction)$")
TERMINAL_NUMBERS: Mapping[str, Range] = {
    "x_px": Range(),
    "y_px": Range(),
    "pressure_mmhg": Range(),
    "flow_nl_min": NOT_NEGATIVE,
    "hematocrit": HEMATOCRIT,
}
EDIT_WORDS = ("drop", "keep", "class", "crossing", "branching")
CLASS_WORDS = ("arteriole", "venule", "capillary")
MOST_BYTES = 256_000_000  # a million rows of 256 characters


@dataclass(frozen=True, slots=True)
class ImageSource:
    """One image of the sheet: where its files are and what a person said about it."""

    image_id: str
    file: Path
    scale: TypedScale
    mask_file: Path | None
    fov_file: Path | None
    class_file: Path | None
    terminals: tuple[TerminalPoint, ...]
    edits: tuple[Edit, ...]
    disc: OpticDisc | None
    hematocrit: float | None
    design: Mapping[str, str]  # subject, eye, group, condition, time and carried columns, in the sheet's order


@dataclass(frozen=True, slots=True)
class Sheet:
    """All rows of an image sheet, the columns that are carried through, and what deserves a second look."""

    file: str  # its name
    images: tuple[ImageSource, ...]
    lines: Mapping[str, int]  # on which each image_id stands
    columns: tuple[str, ...]
    carried: tuple[str, ...]
    warnings: tuple[str, ...]


def read_sheet(path: Path, covariates: Collection[str] = (), *, allow_outside: bool = False) -> Sheet:
    """Read an image sheet and the terminals and edits files that it names.

    Images and masks are not opened and need not be there: measuring the image says so then, and the others go on. A
    terminals or edits file that is missing or wrong is a problem of the request, since without it the image would be
    measured as if nobody had said anything.

    Parameters
    ----------
    path : the sheet; all its files lie in its folder or below.
    covariates : columns that `compare` uses; they are never taken for misspelt ones.
    allow_outside : whether its files may lie anywhere on this machine.

    Raises
    ------
    RequestError : every problem of every row, with line, column and value.
    """
    table = parse_csv(_bytes(path), shown(path))
    problems = list(table.problems)
    if table.columns:
        problems += _column_problems(table, shown(path), covariates)
    if not table.rows and not problems:
        problems.append(Problem(shown(path), "no images: the sheet has a header but no rows."))
    rows = Rows(shown(path), path.parent.resolve(), problems, [], allow_outside)
    sources = [_source(row, table.columns, rows) for row in table.rows]
    problems += _repeated_ids(table, shown(path))
    if problems:
        raise RequestError(sorted(problems, key=lambda problem: problem.row or 0))
    carried = tuple(name for name in table.columns if name not in KNOWN)
    images = tuple(source for source in sources if source is not None)
    lines = {row.cells["image_id"]: row.line for row in table.rows}
    warnings = (*rows.warnings, *_like_numbers(table, shown(path)))
    return Sheet(shown(path), images, lines, table.columns, carried, warnings)


def read_terminals(path: Path) -> tuple[TerminalPoint, ...]:
    """Read a terminals file: `x_px,y_px,role[,pressure_mmhg][,flow_nl_min][,hematocrit]`.

    Raises
    ------
    RequestError : every problem of every row.
    """
    table = parse_csv(_bytes(path), shown(path))
    needed = ("x_px", "y_px", "role")
    problems = [*table.problems, *_closed_columns(table, shown(path), needed, (*TERMINAL_NUMBERS, "role"))]
    rows = Rows(shown(path), path.parent, problems, [])
    points = []
    places: dict[tuple[float, float], int] = {}
    for row in table.rows:
        numbers = {name: rows.number(row, name, allowed) for name, allowed in TERMINAL_NUMBERS.items()}
        role = rows.word(row, "role", tuple(ROLES))
        x, y = rows.needed(row, "x_px", numbers["x_px"]), rows.needed(row, "y_px", numbers["y_px"])
        if numbers["pressure_mmhg"] is not None and numbers["flow_nl_min"] is not None:
            rows.wrong(row, "flow_nl_min", "a terminal takes a pressure or a flow, not both.")
        if x is None or y is None or role is None:
            continue
        if (x, y) in places:
            rows.wrong(row, "x_px", f"the terminal of line {places[x, y]} lies at the same place ({x:g}, {y:g}).")
        places[x, y] = row.line
        points.append(
            TerminalPoint(
                x,
                y,
                "inlet" if role == "inlet" else "outlet",
                numbers["pressure_mmhg"],
                numbers["flow_nl_min"],
                numbers["hematocrit"],
            )
        )
    if problems:
        raise RequestError(problems)
    return tuple(points)


def read_edits(path: Path) -> tuple[Edit, ...]:
    """Read an edits file: `x_px,y_px,edit[,value]`.

    Raises
    ------
    RequestError : every problem of every row.
    """
    table = parse_csv(_bytes(path), shown(path))
    needed = ("x_px", "y_px", "edit")
    problems = [*table.problems, *_closed_columns(table, shown(path), needed, (*needed, "value"))]
    rows = Rows(shown(path), path.parent, problems, [])
    edits = []
    for row in table.rows:
        x, y = (rows.needed(row, name, rows.number(row, name, Range())) for name in ("x_px", "y_px"))
        edit = rows.word(row, "edit", EDIT_WORDS)
        value = row.cells.get("value", "")
        if edit == "class":
            rows.word(row, "value", CLASS_WORDS)
        elif edit is not None and value:
            rows.wrong(row, "value", f"{shown_cell(value)}: only the edit class takes a value.")
        if x is not None and y is not None and edit is not None:
            edits.append(Edit(x, y, edit, value))  # type: ignore[arg-type]
    if problems:
        raise RequestError(problems)
    return tuple(edits)


def _source(row: Row, columns: tuple[str, ...], rows: Rows) -> ImageSource | None:
    image_id = row.cells.get("image_id", "")
    if "image_id" in row.cells and (fault := id_fault(image_id)):
        rows.wrong(row, "image_id", fault)
    numbers = {name: rows.number(row, name, allowed) for name, allowed in NUMBERS.items()}
    said_um, se_um = numbers["pixel_size_um"], numbers["pixel_size_se_um"]
    if said_um is not None and se_um is not None and se_um >= said_um:
        rows.wrong(row, "pixel_size_se_um", f"{se_um:g} is not below the pixel size of {said_um:g} um.")
    paths = {name: rows.path(row, name) for name in FILES}
    if "file" in row.cells:
        rows.needed(row, "file", paths["file"])
    terminals = _companion(row, "terminals_file", paths, rows, read_terminals)
    edits = _companion(row, "edits_file", paths, rows, read_edits)
    disc = _disc(row, numbers, rows)
    file = paths["file"]
    if file is None:
        return None
    return ImageSource(
        image_id=image_id,
        file=file,
        scale=TypedScale(
            said_um, se_um, Eye(numbers["axial_length_mm"], numbers["axial_length_se_mm"], numbers["refraction_d"])
        ),
        mask_file=paths["mask_file"],
        fov_file=paths["fov_file"],
        class_file=paths["class_file"],
        terminals=terminals,
        edits=edits,
        disc=disc,
        hematocrit=numbers["hematocrit"],
        design={name: row.cells[name] for name in columns if name in DESIGN or name not in KNOWN},
    )


def _companion(
    row: Row, column: str, paths: Mapping[str, Path | None], rows: Rows, read: Callable[[Path], tuple[T, ...]]
) -> tuple[T, ...]:
    """Read a row's terminals or edits file now."""
    path = paths[column]
    if path is None:
        return ()
    try:
        return read(path)
    except RequestError as error:
        for problem in error.problems:
            rows.wrong(row, column, str(problem))
        return ()


def _disc(row: Row, numbers: Mapping[str, float | None], rows: Rows) -> OpticDisc | None:
    x, y, radius = (numbers[name] for name in DISC)
    if x is not None and y is not None and radius is not None:
        return OpticDisc(x, y, radius, "sheet", 1.0)
    if any(row.cells.get(name, "") for name in DISC):
        for name in DISC:
            if not row.cells.get(name, ""):
                rows.wrong(row, name, f"is empty; an optic disc needs {', '.join(DISC)}.")
    return None


def _column_problems(table: CsvTable, file: str, covariates: Collection[str]) -> list[Problem]:
    problems = [
        Problem(file, f"the column {name} is missing.", row=1, column=name)
        for name in NEEDED
        if name not in table.columns
    ]
    output = {column.name for column in image_columns((), with_disc=True)}
    for name in table.columns:
        if name in KNOWN:
            continue
        if name in output:
            message = f"column {name!r} has the name of an output column. Rename it."
            problems.append(Problem(file, message, row=1, column=name))
        elif name not in covariates and (meant := _meant(name)):
            message = (
                f"column {name!r} looks like {meant}, but is not. Correct it; if it is meant to be carried through, "
                "rename it or name it in covariates of [compare]."
            )
            problems.append(Problem(file, message, row=1, column=name))
    return problems


def _meant(name: str) -> str:
    """Return the known column that a name was meant to be: one slip away, in another case, or with another unit."""
    stem = UNIT_SUFFIX.sub("", name)
    for known in KNOWN:
        is_slip = len(known) >= LEAST_MISSPELT and is_one_edit_away(name, known)
        is_other_unit = known in NUMBERS and stem == UNIT_SUFFIX.sub("", known)
        if is_slip or is_other_unit or name.casefold() == known:
            return known
    return ""


def _closed_columns(table: CsvTable, file: str, needed: tuple[str, ...], known: tuple[str, ...]) -> list[Problem]:
    """Check the columns of a file that carries nothing through."""
    if not table.columns:
        return []
    problems = [Problem(file, f"the column {n} is missing.", row=1, column=n) for n in needed if n not in table.columns]
    for name in table.columns:
        if name not in known:
            like = nearest(name, known)
            message = f"column {name!r} is not known.{f' Did you mean {like}?' if like else ''}"
            problems.append(Problem(file, message, row=1, column=name))
    return problems


def _repeated_ids(table: CsvTable, file: str) -> list[Problem]:
    problems = []
    first: dict[str, Row] = {}
    for row in table.rows:
        text = row.cells.get("image_id", "")
        before = first.setdefault(text.casefold(), row)
        if before is not row and text:
            same = (
                "occurs"
                if before.cells["image_id"] == text
                else f"differs only in case from {before.cells['image_id']!r}"
            )
            message = f"{text!r} {same} on line {before.line}. Give each image an id of its own."
            problems.append(Problem(file, message, row=row.line, column="image_id", value=text))
    return problems


def _like_numbers(table: CsvTable, file: str) -> list[str]:
    """Warn of ids that a spreadsheet would take for the same number."""
    warnings = []
    first: dict[float, str] = {}
    for row in table.rows:
        text = row.cells["image_id"]
        try:
            number = parse_number(text, Range())
        except CellError:
            continue
        before = first.setdefault(number, text)
        if before != text:
            warnings.append(f"{file}:{row.line} image_id: {text!r} and {before!r} are equal as numbers.")
    return warnings


def _bytes(path: Path) -> bytes:
    try:
        if not path.is_file():
            reason = "is not a file" if path.exists() else f"no such file (looked for {str(path)!r})"
            raise RequestError([Problem(shown(path), f"{reason}. Check its name and folder.")])
        size = path.stat().st_size
        if size > MOST_BYTES:
            raise RequestError([Problem(shown(path), f"has {size / 1e6:.0f} MB: it is no sheet.")])
        return path.read_bytes()
    except OSError as error:
        raise RequestError([Problem(shown(path), f"cannot be read: {error.strerror}.")]) from error
