"""Imports run one way: each module imports only from its own layer's earlier rooms and from layers below."""

import ast
from pathlib import Path

import pytest

import fluvinv

ROOT = Path(fluvinv.__file__).parent

#: From the ground up; inside "science" the order counts too, rooms of one line are equals.
ROOMS = [
    ("ground", ["errors", "units", "network"]),
    ("science", ["terrain"]),
    ("science", ["streampower"]),
    ("science", ["inversion"]),
    ("science", ["landscape"]),
    ("files and report", ["files"]),
    ("files and report", ["report"]),
    ("pipeline", ["guesses", "layout"]),
    ("pipeline", ["pipeline"]),
    ("pipeline", ["beginning"]),
    ("cli", ["progress"]),
    ("cli", ["cli"]),
]
LEVEL = {room: level for level, (_, rooms) in enumerate(ROOMS) for room in rooms}
SCIENCE = {room for layer, rooms in ROOMS for room in rooms if layer in ("ground", "science")}


def modules():
    return sorted(path.relative_to(ROOT) for path in ROOT.rglob("*.py"))


def room_of(path: Path) -> str:
    return path.parts[0].removesuffix(".py")


def imported_rooms(path: Path):
    """Rooms of fluvinv that a module imports, anywhere in its text."""
    for node in ast.walk(ast.parse((ROOT / path).read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.level:
            raise AssertionError(f"{path}: relative import")
        if isinstance(node, ast.ImportFrom) and (node.module or "").split(".")[0] == "fluvinv":
            parts = node.module.split(".")
            yield from [parts[1]] if len(parts) > 1 else [alias.name for alias in node.names]
        if isinstance(node, ast.Import):
            yield from [a.name.split(".")[1] for a in node.names if a.name.startswith("fluvinv.")]


@pytest.mark.parametrize("path", modules(), ids=str)
def test_imports_point_down(path):
    room = room_of(path)
    if room in ("__init__", "__main__"):
        return
    assert room in LEVEL, f"{path}: give the room {room} its place in ROOMS"
    for other in imported_rooms(path):
        if other.startswith("__"):
            continue
        assert other == room or LEVEL[other] < LEVEL[room], f"{path} imports {other}, which stands above it"


@pytest.mark.parametrize("path", [p for p in modules() if room_of(p) in SCIENCE], ids=str)
def test_science_touches_no_files(path):
    """No function of the science layer takes a path: the modules that open files are not imported there."""
    tree = ast.parse((ROOT / path).read_text(encoding="utf-8"))
    names = {a.name.split(".")[0] for n in ast.walk(tree) if isinstance(n, ast.Import) for a in n.names}
    names |= {(n.module or "").split(".")[0] for n in ast.walk(tree) if isinstance(n, ast.ImportFrom)}
    assert not names & {"pathlib", "os", "io", "rasterio", "geopandas", "pyogrio", "pydantic", "ruamel", "matplotlib"}


def test_package_has_no_cycle():
    graph = {}
    for path in modules():
        room = room_of(path)
        graph.setdefault(room, set()).update(r for r in imported_rooms(path) if r != room and not r.startswith("__"))
    done, active = set(), set()

    def visit(room):
        assert room not in active, f"{room} imports itself by a detour"
        if room in done:
            return
        active.add(room)
        for other in graph.get(room, ()):
            visit(other)
        active.discard(room)
        done.add(room)

    for room in list(graph):
        visit(room)
