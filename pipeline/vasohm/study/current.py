"""Whether the results of an image are current: by content of what they were made from, never by time."""

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, is_dataclass
from enum import Enum
from importlib.metadata import PackageNotFoundError, entry_points, version
from pathlib import Path
from typing import Any

from vasohm.config.settings import Settings
from vasohm.config.sheet import ImageSource

# What can move a number or a byte of the tables and pictures.
PACKAGES = ("vasohm", "numpy", "scipy", "scikit-image", "networkx", "pandas", "tifffile", "pillow", "matplotlib")
INPUTS = ("file", "mask_file", "fov_file", "class_file")
_INPUT_WORDS = {"file": "image", "mask_file": "mask", "fov_file": "field of view", "class_file": "class file"}
_PART_WORDS = {"row": "sheet row, terminals or edits", "settings": "settings"}


@dataclass(frozen=True, slots=True)
class ContentKey:
    """Digests of all that the results of one image depend on, kept apart so that a change can be named."""

    inputs: Mapping[str, str]  # sha256 of each input file's bytes, "" where it is not there
    row: str  # what the sheet, terminals and edits say
    settings: str
    versions: Mapping[str, str]

    def plain(self) -> dict[str, Any]:
        """Return the form in which it lies in record.json, with one digest over all of it."""
        parts: dict[str, Any] = {
            "inputs": dict(self.inputs),
            "row": self.row,
            "settings": self.settings,
            "versions": dict(self.versions),
        }
        return parts | {"key": _digest(parts)}


def content_key(
    source: ImageSource, settings: Settings, versions: Mapping[str, str], *, inputs: Mapping[str, str] | None = None
) -> ContentKey:
    """Read all input files of an image and digest them with its row, settings and versions.

    Parameters
    ----------
    source : ImageSource
        The image; where its files lie does not enter, only what they hold.
    settings : Settings
        The resolved settings.
    versions : Mapping of str to str
        From `versions_used`.
    inputs : Mapping of str to str, optional
        Digests to be taken for those of the input files, which are then not read.
    """
    if inputs is None:
        inputs = {name: _file_digest(path) for name in INPUTS if (path := getattr(source, name)) is not None}
    row = {field.name: getattr(source, field.name) for field in fields(source) if field.name not in INPUTS}
    row["design"] = list(source.design.items())  # their order is the order of columns
    return ContentKey(inputs, _digest(row), _digest(settings), versions)


def reason_to_run(recorded: Mapping[str, Any], key: ContentKey) -> str:
    """Say in words what changed since `recorded`; "" where nothing did."""
    now = key.plain()
    if recorded.get("key") == now["key"]:
        return ""
    before = recorded.get("inputs")
    before = before if isinstance(before, Mapping) else {}
    changed = [
        f"{_INPUT_WORDS[name]} {_change(before.get(name), now['inputs'].get(name))}"
        for name in INPUTS
        if before.get(name) != now["inputs"].get(name)
    ]
    changed += [f"{words} changed" for name, words in _PART_WORDS.items() if recorded.get(name) != now[name]]
    were = recorded.get("versions")
    were = were if isinstance(were, Mapping) else {}
    changed += [
        f"{name} {were.get(name, 'absent')} -> {now['versions'].get(name, 'absent')}"
        for name in sorted({*were, *now["versions"]})
        if were.get(name) != now["versions"].get(name)
    ]
    return ", ".join(changed) or "its record is not of this form"


def versions_used(settings: Settings) -> dict[str, str]:
    """Return the versions of what takes part, with those of the plug-ins that the study names."""
    versions = {name: _version(name) for name in PACKAGES}
    for group, name in (
        ("vasohm.viscosity_laws", settings.blood.law),
        ("vasohm.segmenters", settings.segment.method),
    ):
        for entry in entry_points(group=group, name=name):
            if entry.dist is not None:
                versions[entry.dist.name] = entry.dist.version
    return versions


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "unknown"


def _change(before: object, now: object) -> str:
    if not before:
        return "added"
    return "changed" if now else "gone"


def _file_digest(path: Path) -> str:
    """Digest of a regular file; reading anything else (a pipe, a device) might never end."""
    if not path.is_file():
        return ""
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError:  # not readable: the reader says so in its own words
        return ""


def _digest(value: Any) -> str:
    return hashlib.sha256(json.dumps(_plain(value), sort_keys=True).encode()).hexdigest()


def _plain(value: Any) -> Any:
    if is_dataclass(value) and not isinstance(value, type):
        return {field.name: _plain(getattr(value, field.name)) for field in fields(value)}
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, Enum):
        return _plain(value.value)
    if isinstance(value, str | int | float | bool) or value is None:
        return value
    if isinstance(value, Sequence):
        return [_plain(entry) for entry in value]
    msg = f"{type(value).__name__} {value!r} cannot be digested. Give settings of numbers and texts only."
    raise TypeError(msg)
