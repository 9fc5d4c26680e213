"""Rooms import only rooms above them; DEVELOPERS.md shows the same table."""

import ast
from pathlib import Path

import pytest

import bemescape

ROOT = Path(bemescape.__file__).parent
VIZ = ROOT.parent / "viz" if (ROOT.parent / "viz").is_dir() else ROOT / "viz"

BASE = {"errors", "units", "progress", "threads", "version", "compiled"}
#: Room -> rooms it may import. A room is a folder or module of the package.
MAY_IMPORT = {
    "errors": set(),
    "progress": set(),
    "threads": {"errors"},
    "compiled": set(),
    "version": set(),
    "units": {"errors"},
    "surface": BASE,
    "windows": BASE | {"surface"},
    "bem": {"errors", "progress", "threads", "compiled"},
    "results": BASE | {"surface", "windows", "bem"},
    "escape": BASE | {"surface", "windows", "bem", "results"},
    "prepared_surface": BASE | {"surface", "windows", "results", "escape"},
    "arrangements": BASE | {"surface", "windows", "bem", "results", "escape", "prepared_surface"},
    "case": BASE | {"surface", "windows", "results", "escape", "arrangements"},
    "warm": BASE | {"surface", "windows", "bem", "escape"},
    "study": BASE | {"threads", "surface", "windows", "results", "escape", "case"},
    "cli": BASE
    | {"surface", "windows", "results", "escape", "case", "warm", "arrangements", "study", "remote", "service", "viz"},
    "viz": BASE | {"results", "arrangements", "study"},
    "remote": BASE | {"surface", "windows", "results", "escape", "case"},
    "service": BASE | {"surface", "windows", "results", "escape", "case", "study"},
}
#: Imports against the direction, each with its reason. They are made inside functions.
EXCEPTIONS = {
    ("results", "viz"): "result.save writes pictures and the report",
    ("arrangements", "viz"): "exploration.save writes pictures and the page",
    ("study", "viz"): "run_study writes the report and the figure",
}


def imported_rooms(path):
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        names = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
            names = [node.module] if node.module != "bemescape" else [f"bemescape.{a.name}" for a in node.names]
        for name in names:
            parts = name.split(".")
            if parts[0] == "bemescape" and len(parts) > 1:
                yield parts[1]


def python_files():
    for path in sorted(ROOT.rglob("*.py")):
        room = path.relative_to(ROOT).parts[0].removesuffix(".py")
        if room not in {"__init__", "viz"}:
            yield room, path
    for path in sorted(VIZ.rglob("*.py")):
        yield "viz", path


@pytest.mark.parametrize("room", sorted(MAY_IMPORT))
def test_a_room_imports_only_what_the_table_allows(room):
    files = [path for name, path in python_files() if name == room]
    assert files, f"no file in room {room}"
    for path in files:
        for other in imported_rooms(path):
            allowed = other == room or other in MAY_IMPORT[room] or (room, other) in EXCEPTIONS
            assert allowed, f"{path.name} of room {room} imports {other}"


def test_every_file_belongs_to_a_room_of_the_table():
    assert {room for room, _ in python_files()} == set(MAY_IMPORT)
