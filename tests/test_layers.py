"""The order of the rooms: a file imports only rooms above its own, inside functions too."""

from __future__ import annotations

import ast
import graphlib
from pathlib import Path

import pytest

import evidence

HOME = Path(evidence.__file__).parent
DOOR = "__init__"  # of the package: names its version and loads the rest on use
# in the order of the calculation; a folder is one room
ORDER = [
    DOOR,
    "outcome",
    "complaints",
    "arithmetic",
    "compiling",
    "fingerprint",
    "report",  # takes plain records and numbers, no result class
    "distributions",
    "tables",
    "model",
    "shelf",  # ready parts: functions that return a Model
    "study",
    "candidates",
    "tracing",
    "layout",
    "problem",
    "replicas",
    "simulation",
    "newton",
    "mode",
    "curvature",
    "laplace",
    "implicit",
    "derivatives",
    "cautions",
    "marginals",
    "posterior",
    "rungs",
    "portrait",
    "record",
    "estimate",
    "approximation",
    "comparison",
    "recorded",
    "weighing",
    "hyperfit",
    "stress",
    "prediction",
    "batches",
    "rehearsal",
    "cli",
    "__main__",
]
PLACE = {room: place for place, room in enumerate(ORDER)}
FILES = sorted(HOME.rglob("*.py"))


def file_of(module: str) -> Path | None:
    """The file behind a dotted name, None where the name is something inside a module."""
    path = HOME.joinpath(*module.split(".")[1:])
    if module.split(".")[0] != "evidence":
        return None
    if path.with_suffix(".py").exists():
        return path.with_suffix(".py")
    return path / "__init__.py" if (path / "__init__.py").exists() else None


def without_types(tree: ast.Module) -> ast.Module:
    """The tree less what stands under ``if TYPE_CHECKING``, which is never run."""

    def for_types(node: ast.AST) -> bool:
        return isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING"

    tree.body = [node for node in tree.body if not for_types(node)]
    return tree


def imported(source: str, *, types_too: bool = True) -> set[str]:
    """Modules of the package that a source imports anywhere, as dotted names."""
    found = set()
    tree = ast.parse(source)
    for node in ast.walk(tree if types_too else without_types(tree)):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are written in full"
            full = {f"{node.module}.{alias.name}" for alias in node.names}
            # of a folder, the file that is named; its door where the name is something else
            found |= {name if file_of(name) else node.module for name in full}
    return {name for name in found if name.split(".")[0] == "evidence"}


def room_of(module: str) -> str:
    """The room of a module, or the door where a name of the package itself is imported."""
    parts = module.split(".")
    name = parts[1] if len(parts) > 1 else DOOR
    is_room = (HOME / f"{name}.py").exists() or (HOME / name).is_dir()
    return name if is_room else DOOR


def room_of_file(file: Path) -> str:
    return file.relative_to(HOME).parts[0].removesuffix(".py")


def wrong_imports(room: str, source: str) -> list[str]:
    rooms = {room_of(module) for module in imported(source)} - {room}
    return sorted(other for other in rooms if PLACE[other] >= PLACE[room])


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(HOME)))
def test_imports_point_one_way(file):
    room = room_of_file(file)
    assert room in PLACE, f"{file.name} has no place in the order: give it one here"
    assert not wrong_imports(room, file.read_text())


@pytest.mark.parametrize(
    ("room", "source", "wrong"),
    [
        ("curvature", "from evidence.laplace import expand", ["laplace"]),
        ("curvature", "def f():\n    import evidence.laplace", ["laplace"]),
        ("curvature", "from evidence import laplace", ["laplace"]),
        ("curvature", "from evidence import weigh", []),  # a name of the door, loaded on use
        ("laplace", "from evidence.curvature import Axes\nimport numpy", []),
        ("report", "if TYPE_CHECKING:\n    from evidence.weighing import Weighing", ["weighing"]),
        ("mode", "from evidence import newton, rungs", ["rungs"]),
    ],
)
def test_the_check_itself(room, source, wrong):
    assert wrong_imports(room, source) == wrong


def test_no_room_is_named_twice():
    assert len(PLACE) == len(ORDER)


def _inside(folder: Path) -> dict[str, set[str]]:
    graph = {}
    for file in folder.rglob("*.py"):
        names = imported(file.read_text(), types_too=False)
        behind = {file_of(module) for module in names} - {None, file}
        graph[str(file)] = {str(f) for f in behind if folder in f.parents}
    return graph


@pytest.mark.parametrize(
    "folder", sorted({f.parent for f in FILES} - {HOME}), ids=lambda f: str(f.relative_to(HOME))
)
def test_files_of_a_room_import_one_another_without_a_circle(folder):
    assert circle(_inside(folder)) == []


def circle(graph: dict[str, set[str]]) -> list[str]:
    try:
        graphlib.TopologicalSorter(graph).prepare()
    except graphlib.CycleError as error:
        return error.args[1]
    return []


def test_the_search_for_circles():
    assert circle({"a": {"b"}, "b": {"a"}}) != []
    assert circle({"a": {"b", "c"}, "b": {"c"}}) == []
