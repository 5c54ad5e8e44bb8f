"""Imports go only downwards, and a bare import stays cheap."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import nightfold

ROOT = Path(nightfold.__file__).parent
COMMANDS = ROOT.parents[1] / "cli" / "nightfold_cli"
LAYERS: list[set[str]] = [
    {"errors", "version", "concise", "glimpse"},
    {"units", "timestamps", "mounts"},
    {"records", "cardkeys", "formulas"},
    {"settings", "card"},
    {"tables"},
    {"session"},
    {"schema"},
    {"ledger"},
    {"intake", "scans", "fits", "simulator", "sensors"},
    {"merging", "figures"},
    {"faces"},
    {"store"},
    {"opening"},
]
"""From the lowest to the highest. Modules of one layer may import each other."""
RANK = {name: rank for rank, layer in enumerate(LAYERS) for name in layer}
PURE = [
    "fits/engine",
    "fits/models",
    "formulas",
    "scans/folding.py",
    "scans/stretches.py",
    "scans/segments.py",
    "scans/axes.py",
    "scans/relative.py",
]
MODULES = sorted(ROOT.rglob("*.py"))


def imported(path: Path) -> list[str]:
    """Return the modules that a file imports, anywhere in it, but for those only named in annotations."""
    tree = ast.parse(path.read_text("utf-8"))
    quiet = {
        id(node)
        for block in ast.walk(tree)
        if isinstance(block, ast.If) and isinstance(block.test, ast.Name) and block.test.id == "TYPE_CHECKING"
        for node in ast.walk(block)
    }
    found = []
    for node in ast.walk(tree):
        if id(node) in quiet:
            continue
        if isinstance(node, ast.Import):
            found += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: a relative import"
            found += [f"{node.module}.{alias.name}" for alias in node.names]
    return found


def part(module: str) -> str | None:
    """Return which part of the library a dotted name lies in; None outside, and for the library as a whole."""
    words = module.split(".")
    return words[1] if words[0] == "nightfold" and len(words) > 1 and words[1] in RANK else None


@pytest.mark.parametrize("path", MODULES, ids=[str(path.relative_to(ROOT)) for path in MODULES])
def test_imports_go_only_downwards(path: Path) -> None:
    own = path.relative_to(ROOT).parts[0].removesuffix(".py")
    if own == "__init__":
        pytest.skip("the public face may name everything")
    assert own in RANK, f"{own} has no layer yet"
    for module in imported(path):
        other = part(module)
        if other is not None:
            assert RANK[other] <= RANK[own], f"{path.name} imports {module}, which lies above it"
        assert not module.startswith("nightfold_cli"), f"{path.name} imports the command line"
        assert module.split(".")[0] not in {"rich", "plotext"}, f"{path.name} imports {module}"
        if module.split(".")[0] == "matplotlib":
            assert own == "figures", f"{path.name} imports {module}"
        if module.split(".")[0] == "xarray":
            assert own == "scans", f"{path.name} imports xarray"


def test_every_part_has_a_layer() -> None:
    parts = {path.relative_to(ROOT).parts[0].removesuffix(".py") for path in MODULES} - {
        "__init__",
        "migrations",
    }
    assert parts == set(RANK)


@pytest.mark.parametrize("where", PURE)
def test_numerics_know_arrays_only(where: str) -> None:
    place = ROOT / where
    for path in sorted(place.rglob("*.py")) if place.is_dir() else [place]:
        heads = {module.split(".")[0] for module in imported(path)}
        assert not heads & {"sqlalchemy", "xarray", "pandas", "pydantic"}, path
        assert not {part(module) for module in imported(path)} & {"ledger", "session", "tables", "store"}, (
            path
        )


def test_the_command_line_uses_the_facade() -> None:
    for path in COMMANDS.rglob("*.py"):
        for module in imported(path):
            assert part(module) not in {"tables", "session", "schema"}, f"{path.name} imports {module}"
            assert module.split(".")[0] != "sqlalchemy", f"{path.name} imports {module}"


def loaded_after(code: str) -> set[str]:
    program = f"import sys\n{code}\nprint(' '.join(sorted({{name.split('.')[0] for name in sys.modules}})))"
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    return set(done.stdout.split())


def test_a_bare_import_loads_next_to_nothing() -> None:
    heavy = {
        "rich",
        "plotext",
        "matplotlib",
        "numpy",
        "pandas",
        "scipy",
        "xarray",
        "sqlalchemy",
        "pint",
        "pydantic",
        "lmfit",
    }
    assert not loaded_after("import nightfold, nightfold.errors") & heavy


def test_using_the_library_loads_no_terminal_or_figure() -> None:
    code = """
import nightfold, tempfile, pathlib
for name in nightfold.__all__:
    getattr(nightfold, name)
folder = tempfile.TemporaryDirectory()
with nightfold.open_store(pathlib.Path(folder.name) / "a.sqlite", create=True) as store:
    store.take([{"machine": "m", "sequence": "s", "started": "2026-10-05T20:00:00Z", "parameters": {"a": 1}}])
    store.shots(["a"])
"""
    assert not loaded_after(code) & {"rich", "plotext", "matplotlib", "typer", "nightfold_cli"}


def test_the_public_names() -> None:
    assert list(nightfold.__all__) == sorted(nightfold.__all__)
    for name in nightfold.__all__:
        assert getattr(nightfold, name).__name__ == name
    assert set(nightfold.__all__) <= set(dir(nightfold))
    with pytest.raises(AttributeError, match="module 'nightfold' has no attribute 'magic'"):
        nightfold.magic  # noqa: B018
