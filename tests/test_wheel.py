"""What is installed: the package and nothing else; and the sizes of its files and functions."""

from __future__ import annotations

import ast
import statistics
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

import evidence

HOME = Path(evidence.__file__).parent
PROJECT = HOME.parent
SOURCES = sorted(HOME.rglob("*.py"))
LINES, LONGEST, MEDIAN = 400, 60, 10


@pytest.fixture(scope="module")
def wheel(tmp_path_factory):
    """Names in the wheel, and its metadata as texts."""
    if not (PROJECT / "pyproject.toml").exists():
        pytest.skip("the tests run beside an installed package, not in the project")
    folder = tmp_path_factory.mktemp("wheel")
    build = f"from hatchling.build import build_wheel; print(build_wheel({str(folder)!r}))"
    done = subprocess.run(
        [sys.executable, "-c", build], cwd=PROJECT, capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    (file,) = folder.glob("*.whl")
    with zipfile.ZipFile(file) as archive:
        names = archive.namelist()
        texts = {
            name.split("/")[-1]: archive.read(name).decode()
            for name in names
            if ".dist-info/" in name and name.endswith(("METADATA", "entry_points.txt"))
        }
    return names, texts


def test_the_wheel_holds_the_package_and_nothing_else(wheel):
    names, _ = wheel
    top = {name.split("/")[0] for name in names}
    information = f"laplace_model_evidence-{evidence.__version__}.dist-info"
    assert top == {"evidence", information}
    assert f"{information}/licenses/LICENSE" in names
    assert not [name for name in names if "__pycache__" in name or "test" in name.split("/")[-1]]


def test_the_wheel_holds_every_file_of_the_package(wheel):
    names, _ = wheel
    on_disk = {
        f"evidence/{path.relative_to(HOME).as_posix()}"
        for path in HOME.rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    assert {name for name in names if name.startswith("evidence/")} == on_disk
    assert "evidence/starter_study.txt" in names


def test_the_wheel_brings_the_command_and_its_needs(wheel):
    _, texts = wheel
    assert "evidence = evidence.cli:main" in texts["entry_points.txt"]
    metadata = texts["METADATA"]
    assert f"Version: {evidence.__version__}" in metadata
    needs = {
        line.removeprefix("Requires-Dist: ").split(">")[0].split("<")[0].split(";")[0].strip()
        for line in metadata.splitlines()
        if line.startswith("Requires-Dist: ") and "extra ==" not in line
    }
    assert {"jax", "jaxlib", "numpy", "optax", "arviz", "pandas", "click", "rich"} <= needs
    extras = {line.split(": ")[1] for line in metadata.splitlines() if "Provides-Extra" in line}
    assert {"report", "numpyro", "test", "all"} <= extras


def body_lines(function: ast.AST) -> int:
    """Lines of a function without its docstring."""
    lines = function.end_lineno - function.lineno + 1
    first = function.body[0]
    if isinstance(first, ast.Expr) and isinstance(getattr(first, "value", None), ast.Constant):
        lines -= first.end_lineno - first.lineno + 1
    return lines


def functions(source: str) -> list[ast.AST]:
    kinds = (ast.FunctionDef, ast.AsyncFunctionDef)
    return [node for node in ast.walk(ast.parse(source)) if isinstance(node, kinds)]


@pytest.mark.parametrize("file", SOURCES, ids=lambda f: str(f.relative_to(HOME)))
def test_files_and_functions_stay_short(file):
    source = file.read_text()
    assert len(source.splitlines()) <= LINES
    long = {f.name: body_lines(f) for f in functions(source) if body_lines(f) > LONGEST}
    assert not long


def test_the_usual_function_is_very_short():
    lengths = [body_lines(f) for file in SOURCES for f in functions(file.read_text())]
    assert statistics.median(lengths) <= MEDIAN


def test_every_function_says_what_it_returns():
    silent = [
        f"{file.name}: {f.name}"
        for file in SOURCES
        for f in functions(file.read_text())
        if f.returns is None
    ]
    assert not silent


def test_the_measure_of_a_function():
    (function,) = functions('def f():\n    """One.\n\n    Two.\n    """\n    x = 1\n    return x\n')
    assert body_lines(function) == 3
