"""Study files: what is collected, what is left behind, and every mistake with its sentence."""

import dataclasses
import hashlib
import pickle
import re
import sys

import numpy as np
import pytest

from evidence.complaints import DataError, DeclarationError
from evidence.study import Study, read_study

GOOD = '''"""Litter in the reeds.

The data are invented
at Lowmere.

A later paragraph.
"""

import dataclasses
import types


@dataclasses.dataclass
class Bag:
    name: str


def models():
    return [Bag("no loss"), types.SimpleNamespace(name="one pool")]


def data(path=None):
    return {"days": [0, 30], "path": len(str(path or ""))}
'''


@pytest.fixture
def write(tmp_path):
    def write(text, name="litter.py"):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return path

    return write


def study_modules():
    return [name for name in sys.modules if name.startswith("_evidence_study_")]


def refused(path, message, **options):
    """Check the sentence, and that a failed study leaves no module behind."""
    before = study_modules()
    with pytest.raises(DeclarationError, match=message) as caught:
        read_study(path, **options)
    assert study_modules() == before
    return caught.value


def test_study_is_collected(write):
    path = write(GOOD)
    study = read_study(path)
    assert study.title == "Litter in the reeds"
    assert study.text == "The data are invented at Lowmere."
    assert [model.name for model in study.models] == ["no loss", "one pool"]
    assert study.data["days"].tolist() == [0, 30]
    assert study.data["days"].dtype == np.int64
    assert study.path == path.resolve()
    assert study.fingerprint == hashlib.sha256(path.read_bytes()).hexdigest()


def test_study_is_frozen(write):
    study = read_study(write(GOOD))
    with pytest.raises(dataclasses.FrozenInstanceError, match="title"):
        study.title = "another"


def test_data_path_reaches_the_study(write):
    assert read_study(write(GOOD), data_path="abc.csv").data["path"] == 7
    assert read_study(write(GOOD)).data["path"] == 0


def test_module_is_importable_by_name_and_things_of_it_pickle(write):
    bag = read_study(write(GOOD)).models[0]
    assert pickle.loads(pickle.dumps(bag)) == bag


def test_two_readings_do_not_share_a_module(write):
    path = write(GOOD)
    one, two = (type(read_study(path).models[0]) for _ in range(2))
    assert one is not two
    assert one.__module__ != two.__module__


def test_search_path_and_folder_stay_as_they_were(write, tmp_path):
    before = list(sys.path)
    read_study(write(GOOD))
    assert sys.path == before
    assert [p.name for p in tmp_path.iterdir()] == ["litter.py"]


def test_relative_path_and_text_path_are_taken(write, monkeypatch, tmp_path):
    write(GOOD)
    monkeypatch.chdir(tmp_path)
    assert read_study("litter.py").path == (tmp_path / "litter.py").resolve()


@pytest.mark.parametrize(
    ("docstring", "title", "text"),
    [
        ("", "litter", ""),
        ('"""One line."""', "One line", ""),
        ('"""\n    Indented title\n\n    first\n    second\n"""', "Indented title", "first second"),
        ('"""Is it so?\n\nYes."""', "Is it so?", "Yes."),
    ],
)
def test_docstring_gives_title_and_text(write, docstring, title, text):
    body = GOOD.split('"""', 2)[2]
    study = read_study(write(docstring + "\n" + body))
    assert (study.title, study.text) == (title, text)


def test_text_may_follow_the_title_without_a_blank_line(write):
    body = GOOD.split('"""', 2)[2]
    study = read_study(write('"""Title\nand no blank line."""\n' + body))
    assert (study.title, study.text) == ("Title", "and no blank line.")


def test_repr_leads_with_the_title_and_is_short(write):
    many = GOOD.replace("return [Bag(", 'return [*[Bag(f"extra {i}") for i in range(30)], Bag(')
    lines = repr(read_study(write(many))).splitlines()
    assert lines[0] == "Study 'Litter in the reeds' (litter.py): 32 candidates"
    assert lines[1].endswith("extra 5, and 26 more")
    assert len(lines) == 3


def test_missing_file_names_its_neighbour(write, tmp_path):
    write(GOOD)
    refused(tmp_path / "liter.py", r"liter.py does not exist\. Did you mean 'litter.py'\?")
    refused(tmp_path / "nowhere" / "a.py", r"a.py does not exist\.$")


def test_only_python_files_are_run(write, tmp_path):
    refused(write(GOOD, "litter.txt"), r"a study is a Python file, \*\.py; got '.*litter.txt'")
    (tmp_path / "folder.py").mkdir()
    refused(tmp_path / "folder.py", "is a folder")


def test_syntax_error_shows_line_number_and_text(write):
    error = refused(
        write('"""A."""\n\nvalues = [1, 2\nx = = 3\n'),
        r"litter.py, line 3 is not valid Python \('\[' was never closed\): values = \[1, 2",
    )
    assert isinstance(error.__cause__, SyntaxError)


@pytest.mark.parametrize("source", [b"x = 1\0", b"x = '\xff'\n"])
def test_bytes_that_are_no_source_are_refused(write, source):
    refused(write(source), "litter.py.* is not valid Python")


def test_failure_while_running_shows_type_message_and_line(write):
    text = '"""A."""\n\n\ndef half(x):\n    return 1 / x\n\n\nhalf(0)\n'
    error = refused(
        write(text), r"^litter.py failed in line 5: ZeroDivisionError: division by zero\.$"
    )
    assert isinstance(error.__cause__, ZeroDivisionError)


def test_failure_deep_in_a_library_shows_the_line_of_the_study(write):
    refused(write("import json\n\njson.loads('{')\n"), "failed in line 3: JSONDecodeError")


def test_leaving_the_program_is_a_failure_too(write):
    refused(write("import sys\nsys.exit(2)\n"), "litter.py failed in line 2: SystemExit: 2")


def test_interruption_is_not_swallowed(write):
    before = study_modules()
    with pytest.raises(KeyboardInterrupt, match="stop"):
        read_study(write("raise KeyboardInterrupt('stop')\n"))
    assert study_modules() == before


def test_importing_a_neighbour_is_explained(write):
    write("x = 1\n", "helper_of_litter.py")
    refused(
        write("import helper_of_litter\n"),
        "in line 1: ModuleNotFoundError.*cannot import a file beside it",
    )
    error = refused(write("import no_such_module_at_all\n"), "in line 1: ModuleNotFoundError")
    assert "beside" not in str(error)


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("def models(", "def model(", r"no function models\(\).*Did you mean 'model'\?"),
        (
            "def models(",
            "def anything(",
            r"no function models\(\)\. Write: def models\(\): .*\]\.$",
        ),
        ("def data(", "def dat(", r"no function data\(\).*Did you mean 'dat'\?"),
        ("def data(", "data = 3\ndef load(", "data in litter.py must be a function; got a int"),
        ("def models():", "def models(x):", r"models\(\) in litter.py must work without arguments"),
        ("return [Bag", "return 3; [Bag", "must return a list of candidates; got a int"),
        ("return [Bag", "return []; [Bag", "must return a list of candidates; got an empty list"),
        ("return [Bag", "return [7, Bag", "got a int at place 0. Each is an evidence.Model"),
        ("return [Bag", "return [Bag(3), Bag", "got a Bag at place 0"),
        ('"one pool"', '"no loss"', "two candidates of litter.py are named 'no loss'"),
        (
            "return [Bag",
            "raise KeyError('k'); [Bag",
            r"models\(\) of litter.py failed in line \d+: K",
        ),
        ("return {", "return None; {", r"data\(\) in litter.py returned None"),
        ("return {", "return 1 / 0; {", r"data\(\) of litter.py failed in line 23: ZeroDivisionE"),
        ("data(path=None)", "data(path)", r"must work with and without a path\. Write: def data\("),
    ],
)
def test_missing_or_wrong_parts_are_named(write, old, new, message):
    assert old in GOOD
    refused(write(GOOD.replace(old, new)), message)


def test_data_without_a_path_is_refused_only_when_one_is_given(write):
    path = write(GOOD.replace("data(path=None)", "data()").replace("path or", "None or"))
    assert isinstance(read_study(path), Study)
    refused(path, "must work with and without a path", data_path="a.csv")


@pytest.mark.parametrize(
    ("line", "message"),
    [
        ("return {'x': [1.0, None]}", re.escape("'x' at [1] is missing")),
        (
            "from evidence.tables import read_data; return read_data('/nowhere.csv')",
            "^/nowhere.csv does not exist",
        ),
    ],
)
def test_data_errors_pass_through(write, line, message):
    before = study_modules()
    with pytest.raises(DataError, match=message) as caught:
        read_study(write(GOOD.replace('return {"days"', line + '\n    return {"days"')))
    assert caught.value.__cause__ is None
    assert study_modules() == before
