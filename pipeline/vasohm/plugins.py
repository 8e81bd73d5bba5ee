"""What other packages register by entry point: found by name, imported when asked for, never in another's place."""

import sys
from dataclasses import dataclass
from functools import cache
from importlib.metadata import EntryPoint, entry_points
from typing import Any

from vasohm.errors import PluginError


@dataclass(frozen=True, slots=True)
class PluginKind:
    """One kind of plug-in: its group of entry points, how it is called in words, and the names that are taken."""

    group: str
    word: str
    built_in: tuple[str, ...]


def plugin_names(kind: PluginKind) -> tuple[str, ...]:
    """Names of all that can be asked for, those of this package first; nothing is imported."""
    others = {found.name for found in _registered(kind.group, tuple(sys.path))}
    return (*kind.built_in, *sorted(others - {*kind.built_in}))


def load_plugin(kind: PluginKind, name: str) -> Any:
    """Import what another package registers under a name; None where the name is this package's own.

    Raises
    ------
    PluginError
        Nobody has this name, two have it, one has taken it from this package, or it does not load.
    """
    found = [entry for entry in _registered(kind.group, tuple(sys.path)) if entry.name == name]
    if not found and name in kind.built_in:
        return None
    if not found:
        msg = f"no {kind.word} {name!r} is registered; there are {', '.join(plugin_names(kind))}."
        raise PluginError(msg)
    described = " and ".join(_describe(entry) for entry in found)
    if len(found) > 1 or name in kind.built_in:
        msg = f"the {kind.word} {described} has a name that is taken; remove one or rename it."
        raise PluginError(msg)
    try:
        return found[0].load()
    except Exception as error:
        msg = f"the {kind.word} {described} fails to load: {type(error).__name__}: {error}. Repair or remove it."
        raise PluginError(msg) from error


def refuse_plugin(kind: PluginKind, name: str, value: object, wanted: str) -> PluginError:
    """Error of a plug-in that loaded as something else than `wanted`."""
    (found,) = (entry for entry in _registered(kind.group, tuple(sys.path)) if entry.name == name)
    msg = f"the {kind.word} {_describe(found)} is a {type(value).__name__}; it must be {wanted}."
    return PluginError(msg)


@cache
def _registered(group: str, path: tuple[str, ...]) -> tuple[EntryPoint, ...]:
    """All entry points of a group; `path` is where Python looks for packages, since that may change."""
    del path
    return tuple(sorted(entry_points(group=group), key=lambda found: (found.name, found.value)))


def _describe(entry: EntryPoint) -> str:
    owner = entry.dist.name if entry.dist is not None else "an unnamed distribution"
    return f"{entry.name!r} ({entry.value}, from {owner})"
