"""Strict reading of tables: unknown keys, wrong types and wrong words become problems, never exceptions."""

import difflib
import math
import re
import reprlib
import types
from collections.abc import Mapping, Sequence
from dataclasses import fields as dataclass_fields
from typing import Any, TypeVar, Union, get_args, get_origin, get_type_hints

Built = TypeVar("Built")

_DEVICE_NAMES = {"con", "prn", "aux", "nul"} | {f"{d}{i}" for d in ("com", "lpt") for i in range(1, 10)}


def name_problem(image_id: str) -> str:
    """Say what is wrong with an image's name; empty where nothing is."""
    if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9._-]{0,99}", image_id) or image_id.endswith("."):
        return f"{image_id!r} must be 1 to 100 of A-Z a-z 0-9 . _ -, begin with a letter or digit, not end in '.'"
    if image_id.partition(".")[0].lower() in _DEVICE_NAMES:
        return f"{image_id!r} is the name of a device on some systems"
    return ""


def merge(below: Mapping[str, Any], above: Any) -> dict[str, Any]:
    """Lay one table over another; inner tables are merged, all else is replaced."""
    merged = dict(below)
    for key, value in above.items() if isinstance(above, Mapping) else ():
        inner = merged.get(key)
        merged[key] = merge(inner, value) if isinstance(inner, Mapping) and isinstance(value, Mapping) else value
    return merged


class Fields:
    """Reads the fields of one table at `where` and adds to `problems` what is wrong with them."""

    def __init__(self, where: str, problems: list[str] | None = None) -> None:
        self.where = where
        self.problems: list[str] = [] if problems is None else problems

    def known(self, table: Any, keys: Sequence[str]) -> dict[str, Any]:
        """Keep the known keys of a table; name the nearest known one for the others."""
        if not isinstance(table, Mapping):
            self.problems.append(f"{self.where}: must be a table, is {table!r}")
            return {}
        for key in table:
            if key not in keys:
                near = difflib.get_close_matches(key, keys, 1, 0.0)
                self.problems.append(f"{self.where} {key}: unknown key; did you mean {near[0]!r}?".strip())
        return {key: value for key, value in table.items() if key in keys}

    def number(self, table: Mapping[str, Any], key: str, default: float) -> float:
        """A finite number."""
        value = self._convert(key, table.get(key, default), float)
        return default if value is None else float(value)

    def whole(self, table: Mapping[str, Any], key: str, default: int) -> int:
        """A whole number."""
        value = self._convert(key, table.get(key, default), int)
        return default if value is None else int(value)

    def text(self, table: Mapping[str, Any], key: str, default: str) -> str:
        """A text."""
        value = self._convert(key, table.get(key, default), str)
        return default if value is None else str(value)

    def flag(self, table: Mapping[str, Any], key: str, *, default: bool) -> bool:
        """True or false."""
        value = self._convert(key, table.get(key, default), bool)
        return default if value is None else bool(value)

    def word(self, table: Mapping[str, Any], key: str, default: str, words: Sequence[str]) -> str:
        """One of some words."""
        value = self.text(table, key, default)
        if value not in words:
            self.problems.append(f"{self.where} {key}: {value!r} is none of {', '.join(words)}")
            return default
        return value

    def pair(self, table: Mapping[str, Any], key: str, default: tuple[float, float]) -> tuple[float, float]:
        """Two numbers."""
        value = self._convert(key, table.get(key, default), tuple[float, float])
        return default if value is None else (float(value[0]), float(value[1]))

    def table(self, table: Mapping[str, Any], key: str) -> Mapping[str, Any]:
        """A table, empty where there is none."""
        value = table.get(key, {})
        if not isinstance(value, Mapping):
            self.problems.append(f"{self.where} {key}: must be a table, is {value!r}".strip())
            return {}
        return value

    def tables(self, table: Mapping[str, Any], key: str) -> list[Mapping[str, Any]]:
        """An array of tables, empty where there is none."""
        value = table.get(key, [])
        if not isinstance(value, list) or not all(isinstance(entry, Mapping) for entry in value):
            self.problems.append(f"{self.where} {key}: must be an array of tables")
            return []
        return value

    def build(
        self, cls: type[Built], table: Any, where: str, *, fallback: Mapping[str, Any] | None = None, **parts: Any
    ) -> Built:
        """Make a dataclass from a table; `parts` are fields already made.

        A field that is absent or cannot be understood keeps its default, or what `fallback` holds in its place, so
        that its problem is told once.
        """
        inner = Fields(where, self.problems)
        hints = get_type_hints(cls)
        names = [f.name for f in dataclass_fields(cls) if f.name not in parts]  # type: ignore[arg-type]
        values = dict(fallback or {})
        for key, value in inner.known(table, names).items():
            converted = inner._convert(key, value, hints[key])
            if converted is not None:
                values[key] = converted
        return cls(**values, **parts)

    def _convert(self, key: str, value: Any, hint: Any) -> Any:
        """Turn a TOML value into the type of a field, or tell a problem and return None."""
        if get_origin(hint) in (Union, types.UnionType):
            hint = next(arg for arg in get_args(hint) if arg is not type(None))
        if get_origin(hint) is tuple:
            inner, length = get_args(hint)[0], None if get_args(hint)[-1] is Ellipsis else len(get_args(hint))
            if isinstance(value, (list, tuple)) and (length is None or len(value) == length):
                items = [self._convert(key, item, inner) for item in value]
                return None if None in items else tuple(items)
            expected = "an array" if length is None else f"an array of {length}"
        elif hint in (float, int) and _is_number(value) and (hint is float or value == int(value)):
            return hint(value)
        elif hint in (bool, str) and isinstance(value, hint):
            return value
        else:
            words = {float: "a finite number", int: "a whole number", bool: "true or false", str: "a text"}
            expected = words[hint]
        self.problems.append(f"{self.where} {key}: must be {expected}, is {reprlib.repr(value)}")
        return None


def _is_number(value: Any) -> bool:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return False
    try:
        return math.isfinite(float(value))
    except OverflowError:  # a whole number of more than 308 digits
        return False
