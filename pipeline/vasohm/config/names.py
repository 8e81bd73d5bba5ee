"""Names: what an image may be called, and which known name an unknown one was meant to be."""

import re
from collections.abc import Iterable
from difflib import get_close_matches
from pathlib import Path

IMAGE_ID = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,99}")
IMAGE_ID_RULE = "use 1 to 100 letters, digits, . _ -, beginning with a letter or digit and not ending in a dot"
MOST_ID_CHARS = 100
# Names that a file cannot have on every system, whatever follows their first dot.
DEVICES = frozenset({"con", "prn", "aux", "nul", *(f"{port}{n}" for port in ("com", "lpt") for n in range(1, 10))})


def id_fault(text: str) -> str:
    """Say what is wrong with an image's id; "" where nothing is."""
    if not IMAGE_ID.fullmatch(text) or text.endswith("."):
        return f"{text!r} is no image_id: {IMAGE_ID_RULE}."
    if text.partition(".")[0].casefold() in DEVICES:
        return f"{text!r} is the name of a device on some systems. Choose another."
    return ""


def ids_from_files(files: Iterable[Path]) -> list[str]:
    """Make a legal and unique id from the name of each file."""
    ids: list[str] = []
    taken: set[str] = set()
    for file in files:
        stem = re.sub(r"\.ome$", "", file.stem, flags=re.IGNORECASE)
        name = re.sub(r"[^A-Za-z0-9._-]+", "_", stem).lstrip("._-")[:MOST_ID_CHARS].rstrip(".")
        if not name or id_fault(name):
            name = f"image_{name}"[:MOST_ID_CHARS].rstrip("._")
        unique, n = name, 1
        while unique.casefold() in taken:
            n += 1
            unique = f"{name[: MOST_ID_CHARS - len(str(n)) - 1]}-{n}"
        taken.add(unique.casefold())
        ids.append(unique)
    return ids


def nearest(word: str, known: Iterable[str]) -> str:
    """Return the known name that looks most like `word`; "" where none does."""
    by_fold = {name.casefold(): name for name in known}
    found = get_close_matches(word.casefold(), by_fold, n=1)
    return by_fold[found[0]] if found else ""


def is_one_edit_away(a: str, b: str) -> bool:
    """Tell whether one letter added, left out, changed or swapped with its neighbour turns `a` into `b`."""
    if len(a) > len(b):
        a, b = b, a
    start = next((i for i, (x, y) in enumerate(zip(a, b, strict=False)) if x != y), len(a))
    if len(b) == len(a) + 1:
        return a[start:] == b[start + 1 :]
    if len(a) != len(b) or start == len(a):
        return False
    is_changed = a[start + 1 :] == b[start + 1 :]
    is_swapped = a[start : start + 2] == b[start : start + 2][::-1] and a[start + 2 :] == b[start + 2 :]
    return is_changed or is_swapped
