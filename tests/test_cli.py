"""The command line: what goes where, and which status it ends with."""

import json
import os
import signal
import subprocess
import sys
import time
import types
import warnings

import pytest
from click.testing import CliRunner

from evidence.cli import main
from evidence.complaints import DataError, DeclarationError, EvidenceWarning
from evidence.report.json_form import record_from_json, record_to_json
from evidence.report.text import WeighingView, plain_text
from tests.records import make_candidate, make_record

STUDY = '''"""Litter decay."""
import types

print("the study prints")

def models():
    return [types.SimpleNamespace(name=n) for n in ("one pool", "two pools", "no loss")]

def data(path=None):
    return {"days": [0.0, 1.0 if path is None else 9.0]}
'''


class FakeWeigh:
    """Stands where the calculation stands, notes how it was called."""

    def __init__(self, record):
        self.record, self.calls, self.trouble = record, [], None

    def __call__(self, study, **options):
        self.calls.append((study, options))
        options["progress"]("one pool: modes")
        warnings.warn("read with care", EvidenceWarning, stacklevel=2)
        if self.trouble is not None:
            raise self.trouble
        print("the likelihood prints")
        return types.SimpleNamespace(
            to_dict=lambda **_: self.record, settled=self.record["settled"]
        )


@pytest.fixture
def weigh(monkeypatch):
    fake = FakeWeigh(make_record(make_candidate("one pool"), make_candidate("two pools")))
    monkeypatch.setitem(sys.modules, "evidence.weighing", types.SimpleNamespace(weigh=fake))
    return fake


@pytest.fixture
def study(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "study.py").write_text(STUDY)
    return "study.py"


def run(*arguments):
    return CliRunner().invoke(main, [str(a) for a in arguments], prog_name="evidence")


def test_the_result_goes_to_stdout_and_prints_of_the_study_do_not(weigh, study):
    done = run("weigh", study)
    assert done.exit_code == 0
    assert done.stdout.rstrip() == plain_text(WeighingView(weigh.record), 80)
    assert done.stderr == "the study prints\nthe likelihood prints\n"


def test_json_is_the_record_and_nothing_else(weigh, study):
    done = run("weigh", study, "--json")
    assert done.exit_code == 0
    assert record_from_json(done.stdout)["verdict"] == weigh.record["verdict"]
    assert done.stdout == record_to_json(weigh.record)


def test_quiet_shows_nothing_and_still_saves(weigh, study):
    done = run("weigh", study, "--quiet", "--save", "r.json", "--save", "r.md")
    assert done.exit_code == 0
    assert done.stdout == ""
    assert sorted(os.listdir()) == ["r.json", "r.md", "study.py"]
    assert run("weigh", study, "--quiet", "--json").stdout == record_to_json(weigh.record)


def test_options_reach_the_calculation(weigh, study):
    with open("other.csv", "w") as file:
        file.write("days\n")
    done = run(
        "weigh", study, "--data", "other.csv", "--depth", "quick", "--seed", "7",
        "--only", "no loss", "--only", "one pool",
    )  # fmt: skip
    assert done.exit_code == 0
    ((called, options),) = weigh.calls
    assert [model.name for model in called.models] == ["one pool", "no loss"]
    assert called.data["days"].tolist() == [0.0, 9.0]
    assert (options["depth"], options["seed"]) == ("quick", 7)


def test_the_usual_depth_is_standard(weigh, study):
    run("weigh", study)
    ((called, options),) = weigh.calls
    assert (options["depth"], options["seed"], len(called.models)) == ("standard", 0, 3)


@pytest.mark.parametrize(
    ("trust", "settled", "arguments", "status"),
    [
        ("sound", True, [], 0),
        ("corrected", True, ["--require-settled"], 0),
        ("rough", False, [], 0),
        ("unchecked", False, [], 0),
        ("rough", False, ["--require-settled"], 4),
        ("doubtful", True, [], 3),
        ("failed", False, [], 3),
        ("failed", False, ["--require-settled"], 3),
    ],
)
def test_status_of_a_result(weigh, study, trust, settled, arguments, status):
    weigh.record = make_record(make_candidate(), make_candidate("x", trust=trust), settled=settled)
    done = run("weigh", study, "--save", "r.csv", *arguments)
    assert done.exit_code == status
    assert os.path.exists("r.csv")
    assert done.stdout.startswith(weigh.record["verdict"])


@pytest.mark.parametrize(
    ("trouble", "said"),
    [
        (DataError("column 'x' has nan."), "evidence: column 'x' has nan."),
        (DeclarationError("no prior."), "evidence: no prior."),
        (ImportError("Type: pip install 'y'"), "evidence: Type: pip install 'y'"),
        (
            ZeroDivisionError("by zero"),
            "evidence: could not be computed (ZeroDivisionError: by zero). "
            "Add --debug for the traceback.",
        ),
        (
            SystemExit(0),
            "evidence: could not be computed (RuntimeError: the study ended the program",
        ),
        (DataError("a\x1b[31m\nb"), "evidence: a\\x1b[31m b"),
    ],
)
def test_trouble_is_one_message_and_nothing_is_saved(weigh, study, trouble, said):
    weigh.trouble = trouble
    done = run("weigh", study, "--save", "r.json")
    assert done.exit_code == 1
    assert done.stderr.splitlines()[1].startswith(said)
    assert "Traceback" not in done.output
    assert done.stdout == ""
    assert os.listdir() == ["study.py"]


def test_debug_shows_the_traceback_and_keeps_the_status(weigh, study):
    weigh.trouble = DataError("column 'x' has nan.")
    done = run("weigh", study, "--debug")
    assert done.exit_code == 1
    assert "Traceback" in done.stderr
    assert "Add --debug" not in done.stderr
    assert done.stderr.endswith("evidence: column 'x' has nan.\n")


def test_an_interruption_leaves_nothing(weigh, study):
    weigh.trouble = KeyboardInterrupt()
    done = run("weigh", study, "--save", "r.json")
    assert done.exit_code == 130
    assert done.stderr.endswith("evidence: interrupted.\n")
    assert "Traceback" not in done.output
    assert os.listdir() == ["study.py"]


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ([], "Missing argument 'STUDY'"),
        (["study.py", "--depth", "deep"], "'deep' is not one of 'none', 'quick'"),
        (["study.py", "--seed", "-1"], "-1 is not in the range"),
        (
            ["study.py", "--save", "r.doc"],
            "one of .html, .json, .csv, .tex, .md, .png, .svg; got 'r.doc'",
        ),
        (["study.py", "--only", "two pool"], "Did you mean 'two pools'?"),
        (["study.py", "--dept", "none"], "No such option"),
        (["study.py", "extra"], "unexpected extra argument"),
    ],
)
def test_wrong_usage(weigh, study, arguments, said):
    done = run("weigh", *arguments)
    assert done.exit_code == 2
    assert said in done.stderr
    assert "Traceback" not in done.output
    assert weigh.calls == []


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["stud.py"], "stud.py does not exist. Did you mean 'study.py'?"),
        (["study.txt"], "a study is a Python file"),
        (["study.py", "--save", "no/r.json"], "no/r.json cannot be written: there is no folder no"),
        (["study.py", "--save", "folder.md"], "folder.md cannot be written: it is a folder"),
    ],
)
def test_files_that_cannot_be_used(weigh, study, arguments, said):
    os.mkdir("folder.md")
    done = run("weigh", *arguments)
    assert done.exit_code == 1
    assert said in done.stderr
    assert weigh.calls == []


@pytest.mark.parametrize(
    ("source", "said"),
    [
        ("def models(:\n", "not valid Python"),
        ('"""x"""\ndef data(path=None): return {}\n', "has no function models()"),
        (STUDY.replace('"two pools"', '"one pool"'), "two candidates of study.py are named"),
        (STUDY.replace("[0.0,", "['wet',"), "days"),
        ("raise SystemExit(0)\n", "study.py failed in line 1: SystemExit"),
    ],
)
def test_bad_studies(weigh, study, source, said):
    with open(study, "w") as file:
        file.write(source)
    done = run("weigh", study, "--save", "r.json")
    assert done.exit_code == 1
    assert said in done.stderr
    assert "Traceback" not in done.output
    assert os.listdir() == ["study.py"]


def test_show_prints_what_weigh_printed(weigh, study):
    printed = run("weigh", study, "--save", "r.json").stdout
    shown = run("show", "r.json")
    assert (shown.exit_code, shown.stdout, shown.stderr) == (0, printed, "")
    assert run("show", "r.json", "--json").stdout == record_to_json(weigh.record)
    assert run("show", "r.json", "--save", "r.csv").exit_code == 0
    assert os.path.exists("r.csv")


def test_show_one_candidate_in_full(weigh, study):
    run("weigh", study, "--save", "r.json")
    shown = run("show", "r.json", "--only", "two pools")
    assert shown.exit_code == 0
    assert shown.stdout.startswith("two pools: log evidence")
    assert "0.006132" in shown.stdout
    assert "one pool" not in shown.stdout
    missed = run("show", "r.json", "--only", "two pool")
    assert missed.exit_code == 2
    assert "Did you mean 'two pools'?" in missed.stderr


def test_show_refuses_other_files(study):
    done = run("show", study)
    assert done.exit_code == 1
    assert done.stderr.startswith("evidence: study.py is not JSON")
    assert done.stdout == ""


def test_new_writes_a_study_once(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    first = run("new", "my study.py")
    assert first.exit_code == 0
    assert first.stdout == "Wrote my study.py. Run it: evidence weigh 'my study.py'\n"
    (tmp_path / "my study.py").write_text("mine")
    second = run("new", "my study.py")
    assert second.exit_code == 1
    assert "is there already and is not overwritten" in second.stderr
    assert (tmp_path / "my study.py").read_text() == "mine"
    assert run("new", "study.txt").exit_code == 2
    assert os.listdir() == ["my study.py"]


def test_help_names_every_status():
    for arguments in ([], ["weigh"]):
        said = run(*arguments, "--help").stdout
        assert [n for n in (0, 1, 2, 3, 4, 130) if f"{n:>5}  " not in said] == []


def _start(*arguments, **options):
    command = [sys.executable, "-m", "evidence", *map(str, arguments)]
    pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True}
    return subprocess.Popen(command, **(pipes | options))


def test_ctrl_c_in_a_running_study(tmp_path):
    slow = STUDY.replace("    return {", "    import time; time.sleep(60)\n    return {")
    slow = slow.replace('prints")', 'prints", flush=True)')
    (tmp_path / "study.py").write_text(slow)
    program = _start("weigh", tmp_path / "study.py", "--save", tmp_path / "r.json")
    assert program.stderr.readline() == "the study prints\n"
    time.sleep(0.2)
    program.send_signal(signal.SIGINT)
    said, complained = program.communicate(timeout=30)
    assert program.returncode == 130
    assert complained.strip() == "evidence: interrupted."
    assert said == ""
    assert [p for p in os.listdir(tmp_path) if p != "study.py" and "cache" not in p] == []


def test_a_reader_that_leaves_is_no_traceback(tmp_path):
    record = make_record(*(make_candidate(f"candidate {j}") for j in range(400)))
    (tmp_path / "r.json").write_text(json.dumps(json.loads(record_to_json(record))))
    program = _start("show", tmp_path / "r.json")
    program.stdout.close()
    complained = program.stderr.read()
    program.wait(timeout=30)
    program.stderr.close()
    assert complained == ""
    assert program.returncode == 1


def test_a_terminal_without_the_signs_of_a_name(tmp_path):
    (tmp_path / "r.json").write_text(record_to_json(make_record(make_candidate("modèle 模"))))
    program = _start("show", tmp_path / "r.json", env=os.environ | {"PYTHONIOENCODING": "ascii"})
    said, complained = program.communicate(timeout=30)
    assert (program.returncode, complained) == (0, "")
    assert "mod\\xe8le \\u6a21" in said
    assert "---" in said
    assert "u2500" not in said
