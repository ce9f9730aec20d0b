"""No test without an assertion, and no asserting helper that asserts nothing."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

HERE = Path(__file__).parent
FILES = sorted(HERE.rglob("test_*.py"))
HELPER = ("assert_", "check_")
SPEAKS = {"raises", "warns", "fail"}


def asserts(function: ast.AST, helpers: frozenset[str] = frozenset()) -> bool:
    """Whether an assertion, an asserting helper, or pytest.raises occurs in a function."""
    for node in ast.walk(function):
        if isinstance(node, ast.Assert):
            return True
        if isinstance(node, ast.Call):
            called = node.func
            name = getattr(called, "attr", getattr(called, "id", ""))
            if name.startswith(HELPER) or name in helpers:
                return True
            if name in SPEAKS and isinstance(called, ast.Attribute):
                return True
    return False


def local_helpers(source: str) -> frozenset[str]:
    """Functions of a test file that assert, and are not tests."""
    found = functions(source, "")
    return frozenset(f.name for f in found if not f.name.startswith("test_") and asserts(f))


def functions(source: str, prefix: str | tuple[str, ...]) -> list[ast.AST]:
    kinds = (ast.FunctionDef, ast.AsyncFunctionDef)
    nodes = ast.walk(ast.parse(source))
    return [node for node in nodes if isinstance(node, kinds) and node.name.startswith(prefix)]


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(HERE)))
def test_every_test_asserts(file):
    source = file.read_text()
    helpers = local_helpers(source)
    silent = [f.name for f in functions(source, "test_") if not asserts(f, helpers)]
    assert not silent, f"{file.name}: no assertion in {', '.join(silent)}"


def test_asserting_helpers_assert():
    files = sorted(HERE.rglob("*.py"))
    helpers = [(f.name, g) for f in files for g in functions(f.read_text(), HELPER)]
    silent = [f"{file}: {g.name}" for file, g in helpers if not asserts(g)]
    assert len(helpers) > 0
    assert not silent


@pytest.mark.parametrize(
    ("body", "expected"),
    [
        ("    x = 1", False),
        ("    print('assert')", False),
        ("    raises(1)", False),
        ("    assert x", True),
        ("    np.testing.assert_allclose(a, b)", True),
        ("    with pytest.raises(ValueError, match='x'):\n        f()", True),
    ],
)
def test_the_search_itself(body, expected):
    (function,) = functions(f"def test_x():\n{body}\n", "test_")
    assert asserts(function) is expected
