"""What a reader of the interface is told: public functions, flags."""

import inspect
import re

import pytest

import vasohm
from vasohm.flags import MEANING, Flag, code, codes

PUBLIC = tuple(getattr(vasohm, "__all__", ()))
FUNCTIONS = tuple(name for name in PUBLIC if inspect.isfunction(getattr(vasohm, name, None)))
# A unit, or the words for a quantity that has none.
UNIT = re.compile(
    r"µm|\bum\b|_um\b|mPa|Pa[ ·*.]|_pa_s|mmHg|nL/min|\bmm\b|\bpx\b|pixel|degree|ratio|fraction|"
    r"relative|dimensionless|bool|column|number of"
)


def sections(docstring: str) -> dict[str, str]:
    """Text under each underlined heading of a numpydoc docstring."""
    parts = re.split(r"^[ \t]*(\w[\w ]*)\n[ \t]*-{3,}[ \t]*$", inspect.cleandoc(docstring), flags=re.MULTILINE)
    return {title.strip(): text for title, text in zip(parts[1::2], parts[2::2], strict=True)}


def test_the_package_says_what_is_public() -> None:
    """Without the list, everything would be an interface that nobody may change."""
    assert FUNCTIONS, "vasohm.__all__ names no function"
    assert all(hasattr(vasohm, name) for name in PUBLIC)


@pytest.mark.parametrize("name", FUNCTIONS)
def test_public_function_is_documented(name: str) -> None:
    """A caller could not tell what a number means without its parameters, its result and their units."""
    function = getattr(vasohm, name)
    told = sections(function.__doc__ or "")
    parameters = inspect.signature(function).parameters
    assert not any(p.kind == p.VAR_KEYWORD for p in parameters.values()), f"{name} hides its names in **"
    if parameters:
        assert "Parameters" in told, f"{name}: no section Parameters"
        missing = [p for p in parameters if not re.search(rf"\b{p}\b", told["Parameters"])]
        assert not missing, f"{name}: parameters {missing} are not told"
    assert "Returns" in told, f"{name}: no section Returns"
    assert UNIT.search(function.__doc__), f"{name}: no unit is told"


def test_every_flag_has_a_meaning_of_its_own() -> None:
    """A code without meaning, or two with the same, tells the reader nothing."""
    single = [flag for flag in Flag if flag]
    assert set(MEANING) == set(single)
    assert len({text.lower() for text in MEANING.values()}) == len(single)
    assert all(text.strip() for text in MEANING.values())


def test_flag_codes_can_be_split_again() -> None:
    """Codes are joined by semicolons in tables: one that holds a semicolon or a comma would not come back."""
    for flag in MEANING:
        assert re.fullmatch(r"[a-z][a-z_]*", code(flag))
    bits = [0, int(Flag.RIM | Flag.SHORT), int(Flag.RIM)]
    assert codes(bits).tolist() == ["", "rim;short", "rim"]
