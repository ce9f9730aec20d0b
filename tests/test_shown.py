"""Everything a reader is shown is run: the README's blocks and every notebook."""

from __future__ import annotations

import ast
import contextlib
import io
import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import nbformat
import pytest

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
NOTEBOOKS = sorted((ROOT / "notebooks").glob("*.ipynb"))
NUMBER = re.compile(r"-?\d+(?:\.\d+)?")
BLOCK = re.compile(r"```(\w+)\n(.*?)```", re.DOTALL)


def blocks(language):
    """The code blocks of the README in one language."""
    return [text for found, text in BLOCK.findall(README) if found == language]


def run_code(source, namespace):
    """Run source as a notebook cell does: the last expression is shown."""
    tree = ast.parse(source)
    last = tree.body.pop() if tree.body and isinstance(tree.body[-1], ast.Expr) else None
    exec(compile(tree, "cell", "exec"), namespace)
    if last is not None:
        value = eval(compile(ast.Expression(last.value), "cell", "eval"), namespace)
        if value is not None:
            print(repr(value))


def compare_texts(shown, printed, tolerance):
    """Words must be equal; numbers must agree within the tolerance, relative above 1."""
    assert NUMBER.sub("#", shown).split() == NUMBER.sub("#", printed).split()
    for a, b in zip(NUMBER.findall(shown), NUMBER.findall(printed), strict=True):
        assert float(a) == pytest.approx(float(b), rel=tolerance, abs=tolerance), (a, b)


def test_the_readme_is_short_and_says_only_what_is_tested():
    assert len(README.splitlines()) <= 150
    assert {language for language, _ in BLOCK.findall(README)} == {"sh", "python", "text"}
    assert len(blocks("sh")) == 2


def test_the_readme_example_prints_what_the_readme_shows(monkeypatch):
    monkeypatch.chdir(ROOT)
    (source,), (shown,) = blocks("python"), blocks("text")
    with contextlib.redirect_stdout(io.StringIO()) as printed:
        exec(compile(source, "README.md", "exec"), {"__name__": "readme"})
    compare_texts(shown, printed.getvalue(), 0.02)


def test_comparing_texts_can_fail():
    with pytest.raises(AssertionError, match=r"1\.0"):
        compare_texts("a 1.0", "a 1.1", 0.02)
    with pytest.raises(AssertionError, match="b"):
        compare_texts("a 1.0", "b 1.0", 0.02)


def test_the_readme_commands_name_what_exists():
    weigh, test = (shlex.split(block, posix=True) for block in blocks("sh"))
    assert weigh[:3] == test[:3] == ["python3", "-m", "venv"]
    assert (ROOT / weigh[-1]).is_file()
    assert weigh[-3].endswith("bin/evidence")
    assert "pytest" in test[-2]


def test_the_first_readme_command_weighs_the_study():
    # the set-up before it is what .ci/run does with the second command
    study = shlex.split(blocks("sh")[0])[-1]
    done = subprocess.run(
        [sys.executable, "-m", "evidence", "weigh", study, "--depth", "none"],
        cwd=ROOT,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        check=False,
        timeout=240,
    )
    assert done.returncode == 0, done.stderr
    assert "two pools leads" in " ".join(done.stdout.split())


def test_there_are_notebooks():
    known = {"first_comparison", "trust", "pipeline", "own_log_posterior", "reading_the_numbers"}
    assert {path.stem for path in NOTEBOOKS} >= known


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_a_notebook_runs_and_was_saved_with_its_outputs(path, monkeypatch):
    monkeypatch.chdir(path.parent)
    notebook = nbformat.read(path, as_version=4)
    cells = [cell for cell in notebook.cells if cell.cell_type == "code"]
    namespace = {"__name__": "__main__"}
    with contextlib.redirect_stdout(io.StringIO()) as printed:
        for cell in cells:
            run_code(cell.source, namespace)
    assert printed.getvalue()
    outputs = [output for cell in cells for output in cell.outputs]
    assert outputs
    assert not [output for output in outputs if output.output_type == "error"]
    assert path.stat().st_size < 400_000
