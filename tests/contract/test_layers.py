"""The arrows between modules: they point one way, and files are opened at the ends only."""

import ast
import graphlib
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[2] / "pipeline" / "vasohm"
SYNTHETIC = Path(__file__).parents[2] / "synthetic" / "vasohm_synthetic"

LAYERS = (
    "arrays errors units flags uncertainty plugins",
    "image",
    "network",
    "flow",
    "results",
    "config",
    "cohorts",
    "pipeline",
    "study",
    "cli",
    "__main__",
)
RANK = {name: rank for rank, names in enumerate(LAYERS) for name in names.split()}

# Folders or files that may open files; all others are pure functions of what they are given.
OPENERS = ("image", "config", "results/write", "results/pages", "results/overlay", "study", "cli.py", "__main__.py")
OPENING_NAMES = {"open", "imread", "imwrite", "savefig", "read_csv", "to_csv", "TiffFile", "TiffWriter"}
OPENING_METHODS = {"read_text", "read_bytes", "write_text", "write_bytes", "touch", "mkdir", "unlink"}


def modules(root: Path) -> list[Path]:
    """Every module but the root's list of public names."""
    return sorted(file for file in root.rglob("*.py") if file != root / "__init__.py")


def imports(file: Path) -> Iterator[tuple[str, tuple[str, ...]]]:
    """Each import statement of a file, those inside functions too: the module, and the names taken from it."""
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom):
            yield node.module or "", tuple(alias.name for alias in node.names)
        elif isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, ()


def targets(module: str, names: tuple[str, ...], root: Path) -> Iterator[Path]:
    """Files that an import of our own reaches; a package stands for its `__init__.py` unless a submodule is named."""
    parts = module.split(".")
    if parts[0] != root.name:
        return
    place = root.joinpath(*parts[1:])
    if place.is_dir():
        for name in names or ("__init__",):
            inside = place / name
            yield inside.with_suffix(".py") if inside.with_suffix(".py").exists() else place / "__init__.py"
    else:
        yield place.with_suffix(".py")


def rank(file: Path, root: Path) -> int:
    return RANK[file.relative_to(root).with_suffix("").parts[0]]


def wrong_imports(root: Path) -> list[str]:
    wrong = []
    for file in modules(root):
        for module, names in imports(file):
            for target in targets(module, names, root):
                through_package = target.name == "__init__.py"
                if through_package or rank(target, root) > rank(file, root):
                    wrong.append(f"{file.relative_to(root)} imports {module}")
    return wrong


def test_imports_follow_the_order_of_the_layers() -> None:
    """An arrow against the data's way would let a lower room depend on what is built upon it."""
    assert wrong_imports(PACKAGE) == []


def test_no_module_is_reached_from_itself() -> None:
    """A cycle has no first module to read or to test."""
    graph = {
        file: {target for module, names in imports(file) for target in targets(module, names, PACKAGE)}
        for file in modules(PACKAGE)
    }
    tuple(graphlib.TopologicalSorter(graph).static_order())  # raises CycleError, which names the cycle


def test_both_checks_have_teeth(tmp_path: Path) -> None:
    """A package with one wrong arrow and one cycle is refused."""
    root = tmp_path / "vasohm"
    (root / "image").mkdir(parents=True)
    (root / "flow").mkdir()
    (root / "flow" / "b.py").write_text("from vasohm.image.a import x\n")
    (root / "image" / "a.py").write_text("def f():\n    from vasohm.flow.b import y\n")
    assert wrong_imports(root) == ["image/a.py imports vasohm.flow.b"]
    graph = {f: {t for m, names in imports(f) for t in targets(m, names, root)} for f in modules(root)}
    with pytest.raises(graphlib.CycleError):
        tuple(graphlib.TopologicalSorter(graph).static_order())


def test_phantoms_and_measurement_share_no_code() -> None:
    """An error that both sides share would hide: truth and measurement would be wrong alike."""
    for file in SYNTHETIC.rglob("*.py"):
        assert not [m for m, _ in imports(file) if m.split(".")[0] == "vasohm"], file
    for file in PACKAGE.rglob("*.py"):
        if file != PACKAGE / "cli.py":
            assert not [m for m, _ in imports(file) if m.split(".")[0] == "vasohm_synthetic"], file


def opens_files(file: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if not isinstance(node, ast.Call):
            continue
        if isinstance(node.func, ast.Name) and node.func.id in OPENING_NAMES:
            found.add(node.func.id)
        if isinstance(node.func, ast.Attribute) and node.func.attr in OPENING_NAMES | OPENING_METHODS:
            found.add(node.func.attr)
    return found


def test_files_are_opened_at_the_ends_only() -> None:
    """A stage that opens files is no function of its nouns: its result would depend on what lies on the disk."""
    for file in modules(PACKAGE):
        place = file.relative_to(PACKAGE).as_posix()
        if place.startswith(OPENERS) or place == "results/encode.py":  # encode writes TIFF to memory
            continue
        assert not opens_files(file), place
