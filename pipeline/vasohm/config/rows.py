"""Cells of a sheet turned into numbers, words and paths, with every problem noted where it stands."""

import re
import unicodedata
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path, PureWindowsPath
from typing import Literal, TypeVar

from vasohm.config.csv_table import CellError, Range, Row, parse_number, shown_cell
from vasohm.config.names import nearest
from vasohm.errors import Problem
from vasohm.image.read import shown

T = TypeVar("T")

ALLOWING = ", or set allow_outside = true in [study]."
FORMS: tuple[Literal["NFC", "NFD"], ...] = ("NFC", "NFD")  # two ways to write the same accented name


@dataclass(frozen=True, slots=True)
class Rows:
    """Reads the cells of one file's rows and collects what is wrong and what is odd."""

    file: str
    folder: Path
    problems: list[Problem]
    warnings: list[str]
    allow_outside: bool = False  # whether files may lie out of `folder`

    def wrong(self, row: Row, column: str, message: str) -> None:
        """Note that a cell is wrong."""
        value = row.cells.get(column, "")
        self.problems.append(Problem(self.file, message, row=row.line, column=column, value=value))

    def cell(self, row: Row, column: str, parse: Callable[[str], T]) -> T | None:
        """Return the parsed cell; None where it is empty, absent or wrong."""
        text = row.cells.get(column, "")
        if not text:
            return None
        try:
            return parse(text)
        except CellError as error:
            self.wrong(row, column, str(error))
            return None

    def number(self, row: Row, column: str, allowed: Range) -> float | None:
        """Return the number in a cell; None where it is empty, absent or wrong."""
        return self.cell(row, column, lambda text: parse_number(text, allowed))

    def needed(self, row: Row, column: str, value: T | None) -> T | None:
        """Note a problem where the cell is empty, and hand `value` on."""
        if not row.cells.get(column, ""):
            self.wrong(row, column, "is empty, but needed.")
        return value

    def word(self, row: Row, column: str, words: tuple[str, ...]) -> str | None:
        """Return one of the words; None, and a problem, for anything else."""

        def parse(text: str) -> str:
            if text in words:
                return text
            like = nearest(text, words)
            msg = f"{shown_cell(text)} is none of {', '.join(words)}.{f' Did you mean {like}?' if like else ''}"
            raise CellError(msg)

        return self.needed(row, column, self.cell(row, column, parse))

    def path(self, row: Row, column: str) -> Path | None:
        """Return where a file lies: in the sheet's folder, also behind symbolic links, unless all is allowed."""
        path = self.cell(row, column, lambda text: _place(self.folder, text, self.allow_outside))
        if path is None or _exists(path):
            return path
        for form in FORMS:
            other = self.folder / unicodedata.normalize(form, row.cells[column])
            if _exists(other):
                self.warnings.append(
                    f"{self.file}:{row.line} {column}: {shown(path)} was found under a name that looks the same, "
                    f"but is composed otherwise ({form})."
                )
                return other
        return path


def _place(folder: Path, text: str, allow_outside: bool) -> Path:
    if re.match(r"[A-Za-z][A-Za-z0-9+.-]+:/", text):
        msg = f"{shown_cell(text)} is a URL. Copy the file beside the sheet and give its path."
        raise CellError(msg)
    if (text.startswith("/") and not allow_outside) or PureWindowsPath(text).drive:
        msg = f"{shown_cell(text)} is an absolute path. Give it relative to the sheet{ALLOWING}"
        raise CellError(msg)
    if "\\" in text:
        msg = f"{shown_cell(text)} has a backslash. Part folders by /."
        raise CellError(msg)
    if allow_outside:
        return folder / text
    try:
        is_inside = (folder / text).resolve().is_relative_to(folder)
    except (OSError, RuntimeError):  # links in a ring lead nowhere: reading the file says so
        return folder / text
    if not is_inside:
        msg = f"{shown_cell(text)} leads out of the sheet's folder. Move the sheet up, or the file beside it{ALLOWING}"
        raise CellError(msg)
    return folder / text


def _exists(path: Path) -> bool:
    try:
        return path.exists()
    except OSError:  # a name longer than the file system takes
        return False
