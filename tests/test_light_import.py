"""Importing the package and its command line loads nothing heavy."""

import subprocess
import sys

import pytest

HEAVY = ("jax", "pandas", "scipy", "arviz", "rich", "matplotlib", "numpy", "optax", "xarray")


def _loaded(program, *arguments):
    """Return which heavy packages a fresh process has loaded at its end."""
    watch = f"import sys, atexit; atexit.register(lambda: print('LOADED', *(m for m in {HEAVY!r} "
    watch += "if m in sys.modules), file=sys.stderr))\n"
    done = subprocess.run(
        [sys.executable, "-c", watch + program, *arguments], capture_output=True, text=True
    )
    assert "Traceback" not in done.stderr
    return set(done.stderr.split("LOADED", 1)[1].split()), done.returncode


@pytest.mark.parametrize("program", ["import evidence", "import evidence.cli"])
def test_importing_loads_nothing_heavy(program):
    assert _loaded(program) == (set(), 0)


def test_the_watch_sees_what_is_loaded():
    assert _loaded("import numpy") == ({"numpy"}, 0)


RUN = "from evidence.cli import main; main(prog_name='evidence')"


@pytest.mark.parametrize(
    ("arguments", "status"),
    [
        (["--help"], 0),
        (["weigh", "--help"], 0),
        (["stress", "--help"], 0),
        (["stress"], 2),
        (["weigh"], 2),
        (["weigh", "study.py", "--depth", "deep"], 2),
        (["weigh", "study.py", "--save", "result.xlsx"], 2),
        (["weigh", "study.py", "--save", "no/such/folder/result.json"], 1),
        (["wiegh", "study.py"], 2),
        (["show", "none.json"], 1),
        (["new", "study.txt"], 2),
    ],
)
def test_help_and_wrong_arguments_load_nothing_heavy(arguments, status):
    assert _loaded(RUN, *arguments) == (set(), status)


def test_new_and_show_load_no_jax(tmp_path):
    from evidence.report.writing import save
    from tests.records import make_record

    assert _loaded(RUN, "new", str(tmp_path / "study.py")) == (set(), 0)
    save(make_record(), tmp_path / "result.json")
    assert _loaded(RUN, "show", str(tmp_path / "result.json")) == ({"rich"}, 0)
