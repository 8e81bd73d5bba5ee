"""A strict reader of comma-separated tables: nothing is guessed, nothing shifts, only the empty cell is missing."""

import csv
import io
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass

from vasohm.errors import Problem

NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?", re.ASCII)
DECIMAL_COMMA = re.compile(r"[+-]?\d+,\d+", re.ASCII)
UTF16_MARKS = (b"\xff\xfe", b"\xfe\xff")
MOST_SHOWN = 40  # characters of a faulty cell


class CellError(ValueError):
    """A cell that does not hold what its column asks for; the message says what and what to do."""


@dataclass(frozen=True, slots=True)
class Row:
    """One data row: the line on which it begins, counted from 1, and its cells by column."""

    line: int
    cells: Mapping[str, str]


@dataclass(frozen=True, slots=True)
class CsvTable:
    """The sound rows of a table, and everything that is wrong with the others."""

    columns: tuple[str, ...]
    rows: tuple[Row, ...]
    problems: tuple[Problem, ...]


@dataclass(frozen=True, slots=True)
class Range:
    """Numbers that a column takes; `is_open` leaves `least` itself out."""

    least: float = -math.inf
    most: float = math.inf
    is_open: bool = False
    note: str = ""  # what to say beside it to one who is outside

    def __contains__(self, value: float) -> bool:
        return (value > self.least if self.is_open else value >= self.least) and value <= self.most

    def __str__(self) -> str:
        low = f"{'greater than' if self.is_open else 'at least'} {self.least:g}" if self.least > -math.inf else ""
        high = f"at most {self.most:g}" if self.most < math.inf else ""
        return " and ".join(part for part in (low, high) if part)


def parse_csv(data: bytes, file: str) -> CsvTable:
    """Split a table into cells of text.

    Parameters
    ----------
    data : UTF-8, with or without a byte order mark; lines may end in LF, CRLF or CR.
    file : name of the file for the problems.
    """

    def failed(message: str, line: int | None = None) -> CsvTable:
        return CsvTable((), (), (Problem(file, message, row=line),))

    try:
        text = _text(data)
        records = _records(text)
    except CellError as error:
        message, line = error.args
        return failed(message, line)
    if not records:
        return failed("is empty. Write a header line and one row an image or point.")
    (header_line, header), *body = records
    problems = _header_problems(header, header_line, file)
    if problems:
        return CsvTable((), (), tuple(problems))
    rows = []
    for line, cells in body:
        if len(cells) == len(header):
            rows.append(Row(line, dict(zip(header, cells, strict=True))))
        else:
            problems.append(Problem(file, _ragged(header, cells), row=line))
    return CsvTable(tuple(header), tuple(rows), tuple(problems))


def parse_number(text: str, allowed: Range) -> float:
    """Read a finite decimal number within a range.

    Raises
    ------
    CellError : anything else, with what it looks like.
    """
    word = text.strip(" ")
    if DECIMAL_COMMA.fullmatch(word):
        msg = f"{shown_cell(text)} is not a number. Is that a decimal comma? Write {word.replace(',', '.')}."
        raise CellError(msg)
    if not NUMBER.fullmatch(word):
        hint = " Write the number alone, without its unit." if re.match(r"[+-]?\.?\d", word) else ""
        msg = f"{shown_cell(text)} is not a number.{hint}"
        raise CellError(msg)
    value = float(word)
    if not math.isfinite(value):
        msg = f"{shown_cell(text)} is too large for a number."
        raise CellError(msg)
    if value not in allowed:
        msg = f"{shown_cell(text)} must be {allowed}.{f' {allowed.note}' if allowed.note else ''}"
        raise CellError(msg)
    return value


def shown_cell(text: str) -> str:
    """Quote a cell for messages, shortened, with control characters escaped."""
    return repr(text if len(text) <= MOST_SHOWN else text[:MOST_SHOWN] + "...")


def _text(data: bytes) -> str:
    if data.startswith(UTF16_MARKS):
        msg = "looks like UTF-16. Save it as UTF-8."
        raise CellError(msg, 1)
    if b"\0" in data:
        line = data.count(b"\n", 0, data.index(b"\0")) + 1
        msg = "holds a NUL byte: it is binary or UTF-16. Save it as plain UTF-8 text."
        raise CellError(msg, line)
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        msg = f"byte 0x{data[error.start]:02x} is not UTF-8: it looks like Latin-1 or Windows-1252. Save it as UTF-8."
        raise CellError(msg, line) from error


def _records(text: str) -> list[tuple[int, list[str]]]:
    """Return each record with the line on which it begins."""
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    records = []
    begins = 1
    try:
        for cells in reader:
            records.append((begins, cells))
            begins = reader.line_num + 1
    except csv.Error as error:
        reason = "a quote that is opened here is never closed" if "unexpected end" in str(error) else str(error)
        msg = f"cannot be split into cells: {reason}."
        raise CellError(msg, begins) from error
    return records


def _header_problems(header: list[str], line: int, file: str) -> list[Problem]:
    problems = []
    whole = ",".join(header)
    for mark, word in ((";", "semicolons"), ("\t", "tabs")):
        if len(header) < 1 + whole.count(mark):
            message = f"its columns are separated by {word}. Save it with commas, and with . as decimal mark."
            return [Problem(file, message, row=line)]
    if not any(header):
        return [Problem(file, "has no header line.", row=line)]
    for at, name in enumerate(header):
        if not name:
            problems.append(Problem(file, f"column {at + 1} has no name.", row=line))
        elif name in header[:at]:
            problems.append(Problem(file, f"column {name!r} occurs twice. Rename one.", row=line, column=name))
        elif name != name.strip() or not name.isprintable():
            message = f"column {name!r} has spaces around its name or characters that do not print."
            problems.append(Problem(file, message, row=line, column=name))
    return problems


def _ragged(header: list[str], cells: list[str]) -> str:
    if not cells:
        return "is a blank line. Remove it."
    hint = ""
    if len(cells) == len(header) + 1 and not cells[-1]:
        hint = " Remove the comma at its end."
    elif len(cells) > len(header):
        hint = " A cell with a comma in it needs quotes around it."
    return f"has {len(cells)} cells, but the header has {len(header)}.{hint}"
