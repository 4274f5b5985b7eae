"""Data walks through the rooms in one direction, and so do imports."""

import ast
from pathlib import Path

import pytest

import quietmill

PACKAGE = Path(quietmill.__file__).parent

# what each room may import of the package, besides itself
MAY_IMPORT = {
    "model": set(),
    "instant": set(),
    "numeral": set(),
    "logs": set(),
    "settings": {"model", "instant"},
    "charts": {"model"},
    "intake": {"model", "instant", "numeral", "settings"},
    "signals": {"model", "instant", "settings"},
    "record": {"model", "settings"},
    "judging": {"model", "charts", "settings", "signals", "record"},
    "recovery": {"model", "judging", "record", "settings", "signals"},
    "outlets": {"model", "instant", "settings"},
    "study": {"model", "instant", "numeral", "settings", "charts", "signals"},
    "demo": {"model", "instant", "settings"},
}
CHARTS_MAY_USE = {"numpy", "numba", "quietmill"}
STANDARD_LIBRARY_OF_CHARTS = {"collections", "hashlib", "math", "os", "pathlib", "tempfile", "typing"}


def room_of(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imported(path: Path) -> set[str]:
    """Return the modules that a file names in any import statement, wherever it stands."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return found


SOURCES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_imports_point_inward(path: Path) -> None:
    room = room_of(path)
    rooms = {name.split(".")[1] for name in imported(path) if name.startswith("quietmill.")} - {"__version__"}
    if room in MAY_IMPORT:
        assert rooms <= MAY_IMPORT[room] | {room}


@pytest.mark.parametrize("path", sorted((PACKAGE / "charts").glob("*.py")), ids=lambda path: path.name)
def test_charts_import_nothing_but_numpy_numba_and_the_model(path: Path) -> None:
    assert {name.split(".")[0] for name in imported(path)} <= CHARTS_MAY_USE | STANDARD_LIBRARY_OF_CHARTS


def test_every_room_has_its_place_in_the_direction() -> None:
    rooms = {room_of(path) for path in SOURCES} - {"__init__", "__main__", "passage", "monitor", "cli"}
    assert rooms == set(MAY_IMPORT)
