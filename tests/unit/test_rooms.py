"""The rooms of the package and what each may import: arrows go down only."""

import ast
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[2] / "pipeline" / "starkiln"

# Each room, and the rooms below it that it may import.
BELOW = {
    "errors": set(),
    "flags": set(),
    "settings": {"errors"},
    "physics": {"errors"},
    "calibration": {"errors", "physics"},
    "inference": {"errors", "flags", "physics"},
    "tables": {"errors", "flags", "settings"},
    "stages": {"errors", "flags", "settings", "tables", "physics", "calibration", "inference"},
    "engine": {"errors", "flags", "settings", "tables", "stages"},
    "report": {"errors", "flags", "settings", "tables", "physics", "inference", "stages", "engine"},
    "cli": {"errors", "flags", "settings", "tables", "physics", "inference", "stages", "engine", "report"},
    "__main__": {"cli"},
}
TABLE_LIBRARIES = {"pandas", "pyarrow", "pydantic", "dask", "distributed", "typer"}
LIGHT = {"typer", "rich", "starkiln.errors", "starkiln.flags", "starkiln.cli", "starkiln.__version__"}


def room_of(module: Path) -> str:
    return module.relative_to(PACKAGE).parts[0].removesuffix(".py")


def modules(*rooms: str) -> pytest.MarkDecorator:
    """Run a test for every module of some rooms, or of all; the package's front door opens all when asked."""
    chosen = [
        module
        for module in sorted(PACKAGE.rglob("*.py"))
        if module != PACKAGE / "__init__.py" and (not rooms or room_of(module) in rooms)
    ]
    return pytest.mark.parametrize("module", chosen, ids=lambda module: str(module.relative_to(PACKAGE)))


def imports(tree: ast.AST, module: Path) -> set[str]:
    """Return the dotted names that a tree imports, with `from a import b` as a.b."""
    parents = ("starkiln", *module.relative_to(PACKAGE).parts[:-1])
    names = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            start = ".".join(parents[: len(parents) - node.level + 1]) if node.level else ""
            source = ".".join(part for part in (start, node.module) if part)
            names |= {f"{source}.{alias.name}" for alias in node.names}
    return names


def imported_when_loaded(module: Path) -> set[str]:
    """Return what importing the module imports: not what its functions, or the type checker, import."""
    tree = ast.parse(module.read_text())
    for node in ast.walk(tree):
        for_types = isinstance(node, ast.If) and ast.unparse(node.test).endswith("TYPE_CHECKING")
        if for_types or isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            node.body = [ast.Pass()]
    return imports(tree, module)


def libraries(names: set[str]) -> set[str]:
    return {name.split(".")[0] for name in names}


def rooms(names: set[str]) -> set[str]:
    return {parts[1] for name in names if (parts := name.split("."))[0] == "starkiln" and len(parts) > 1}


@modules()
def test_imports_go_downwards(module):
    room = room_of(module)
    assert room in BELOW, f"the room {room} has no place in the order yet"
    upwards = rooms(imports(ast.parse(module.read_text()), module)) - BELOW[room] - {room, "__version__"}
    assert not upwards, f"{module.name} imports from {sorted(upwards)}"


@modules()
def test_only_the_engine_imports_dask(module):
    found = libraries(imports(ast.parse(module.read_text()), module)) & {"dask", "distributed"}
    assert not found or room_of(module) == "engine"


@modules("physics", "calibration", "inference")
def test_numbers_know_no_tables(module):
    assert not libraries(imports(ast.parse(module.read_text()), module)) & TABLE_LIBRARIES


@pytest.mark.parametrize("name", ["cli.py", "__init__.py"])
def test_the_front_doors_load_nothing_heavy(name):
    if not (PACKAGE / name).exists():
        pytest.skip("not written yet")
    heavy = {
        imported
        for imported in imported_when_loaded(PACKAGE / name)
        if imported.split(".")[0] not in sys.stdlib_module_names
        and not any(imported == light or imported.startswith(light + ".") for light in LIGHT)
    }
    assert not heavy


@pytest.mark.parametrize(
    ("source", "expected"),
    [
        ("import dask.array as da", {"dask.array"}),
        ("from starkiln.engine import plan", {"starkiln.engine.plan"}),
        ("from ..engine.plan import Plan", {"starkiln.engine.plan.Plan"}),
        ("from . import values", {"starkiln.settings.values"}),
        ("def f():\n    import pandas", {"pandas"}),
    ],
)
def test_imports_are_seen(source, expected):
    assert imports(ast.parse(source), PACKAGE / "settings" / "load.py") == expected
