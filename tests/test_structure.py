"""The house rules that a machine can check: which room may import which, what may stand where."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "hybridtrack"
ROOMS = (
    "geometry",
    "module",
    "recording",
    "synthesis",
    "calibration",
    "tracking",
    "posegraph",
    "odometry",
    "benchmark",
    "report",
    "cli",
)
ESTIMATORS = ("calibration", "tracking", "posegraph", "odometry")
FILES = sorted(PACKAGE.rglob("*.py"))


def imported_names(path: Path) -> set[str]:
    """Every module of the package that a file imports, at whatever depth of nesting."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            names |= {node.module} | {f"{node.module}.{alias.name}" for alias in node.names}
            assert node.level == 0, f"{path}: relative import"
    return {name for name in names if name.startswith("hybridtrack")}


def room_of(name: str) -> str | None:
    parts = name.split(".")
    return parts[1] if len(parts) > 1 and parts[1] in ROOMS else None


def rooms_imported(path: Path) -> set[str]:
    return {room for name in imported_names(path) if (room := room_of(name)) is not None}


@pytest.mark.parametrize("path", FILES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_imports_point_one_way(path: Path) -> None:
    """A room imports only rooms before it; calibration, tracking and posegraph do not import each other."""
    room = path.relative_to(PACKAGE).parts[0]
    imported = rooms_imported(path) - {room}
    if room not in ROOMS:
        assert not imported, f"{path.name} at the top level imports the rooms {imported}"
        return
    later = {other for other in imported if ROOMS.index(other) > ROOMS.index(room)}
    assert not later, f"{room} imports {later}"
    if room in ("calibration", "tracking", "posegraph"):
        assert not imported & {"calibration", "tracking", "posegraph"}


@pytest.mark.parametrize(
    "path", [p for p in FILES if p.relative_to(PACKAGE).parts[0] in ESTIMATORS], ids=lambda p: p.name
)
def test_nothing_that_estimates_sees_synthesis_or_truth(path: Path) -> None:
    """Estimators import neither the synthesis room nor the reader of ground truth, and name no /truth group."""
    assert "synthesis" not in rooms_imported(path)
    assert not any(name.startswith("hybridtrack.recording.truth") for name in imported_names(path))
    assert '"truth' not in path.read_text()
    assert '"/truth' not in path.read_text()


@pytest.mark.parametrize("path", [p for p in FILES if p.name == "__init__.py"], ids=lambda p: str(p.parent.name))
def test_an_init_is_a_map(path: Path) -> None:
    """No logic in `__init__.py`: a docstring, imports, `__all__`, and the version."""
    allowed = (ast.Import, ast.ImportFrom, ast.Assign, ast.Expr)
    assert all(isinstance(node, allowed) for node in ast.parse(path.read_text()).body)


def test_no_drawer_for_everything() -> None:
    """No module is called utils, helpers, misc or common."""
    assert not [path for path in FILES if path.stem in ("utils", "helpers", "misc", "common")]


def test_nothing_is_unpickled() -> None:
    """No file of the package imports pickle or allows it in numpy."""
    for path in FILES:
        text = path.read_text()
        assert "import pickle" not in text
        assert "allow_pickle=True" not in text


def test_the_top_level_holds_what_was_agreed() -> None:
    """pyproject.toml, README.md, DEVELOPERS.md, the four folders and dot files."""
    allowed = {"pyproject.toml", "README.md", "DEVELOPERS.md", "hybridtrack", "tests", "calib_targets", "sequences"}
    generated = {"build", "dist", "demo", "out", "hybridtrack.egg-info"}
    found = {path.name for path in PACKAGE.parent.iterdir() if not path.name.startswith(".")}
    assert found - generated <= allowed
