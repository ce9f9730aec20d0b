"""The command line on real studies, from the file to the saved result."""

import csv
import os
from pathlib import Path

import pytest
from click.testing import CliRunner

from evidence.cli import main
from evidence.report.json_form import read_record, record_from_json

ROOT = Path(__file__).resolve().parent.parent
STUDIES = [p for p in sorted((ROOT / "models").glob("*.py")) if "def models(" in p.read_text()]
QUICK = {"litter", "nests"}  # the others are weighed by the slow tests
LITTER = ROOT / "models" / "litter.py"


def run(*arguments):
    return CliRunner().invoke(main, [str(a) for a in arguments], prog_name="evidence")


@pytest.mark.parametrize(
    "study",
    [
        pytest.param(p, marks=() if p.stem in QUICK else pytest.mark.slow, id=p.stem)
        for p in STUDIES
    ],
)
def test_a_study_from_the_file_to_the_saved_result(study, tmp_path):
    saved = [tmp_path / f"result{suffix}" for suffix in (".json", ".csv", ".md")]
    saves = [word for path in saved for word in ("--save", path)]
    done = run("weigh", study, "--depth", "none", *saves)
    assert done.exit_code == 0, done.output
    record = read_record(saved[0])
    assert done.stdout.startswith(record["verdict"].split(";")[0][:40])
    assert all(c["trust"] == "unchecked" for c in record["candidates"])
    with open(saved[1], newline="") as file:
        names = [row["candidate"] for row in csv.DictReader(file)]
    assert sorted(names) == sorted(c["candidate"] for c in record["candidates"])
    assert run("show", saved[0]).stdout == done.stdout
    full = run("show", saved[0], "--only", names[0])
    assert full.stdout.startswith(f"{names[0]}: log evidence")
    assert max(map(len, (done.stdout + full.stdout).splitlines())) <= 80


def test_the_starter_study_runs_as_it_is(tmp_path):
    assert run("new", tmp_path / "mine.py").exit_code == 0
    done = run("weigh", tmp_path / "mine.py", "--depth", "none", "--json")
    assert done.exit_code == 0, done.output
    record = record_from_json(done.stdout)
    assert record["title"] == "How does salt hold back reed seedlings?"
    # the invented heights fall from 13 to 4 cm, steeply at first: a flat line must come last
    by_name = {c["candidate"]: c["log_evidence"] for c in record["candidates"]}
    assert min(by_name, key=by_name.get) == "no effect"
    assert record["leader"] == "steady share"


def test_a_candidate_left_out_changes_no_other(tmp_path):
    whole = record_from_json(run("weigh", LITTER, "--depth", "none", "--json").stdout)
    part = record_from_json(
        run("weigh", LITTER, "--depth", "none", "--json", "--only", "one pool").stdout
    )
    assert [c["candidate"] for c in part["candidates"]] == ["one pool"]
    before = next(c for c in whole["candidates"] if c["candidate"] == "one pool")
    assert part["candidates"][0]["log_evidence"] == pytest.approx(before["log_evidence"], abs=1e-9)


def test_not_settled_at_depth_none_when_that_is_required():
    done = run("weigh", LITTER, "--depth", "none", "--quiet", "--require-settled")
    assert (done.exit_code, done.stdout) == (4, "")


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (None, "other.csv"),
        ("", "other.csv"),
        ("days,grams\n1,2\n3\n", "other.csv"),
        ("days,grams\n1,2\n3,wet\n", "wet"),
        ("days,weight\n1,2\n3,4\n", "grams"),
    ],
    ids=["missing", "empty", "ragged", "text", "column"],
)
def test_bad_data_is_one_message(tmp_path, monkeypatch, content, said):
    monkeypatch.chdir(tmp_path)
    if content is not None:
        (tmp_path / "other.csv").write_text(content)
    before = os.listdir()
    done = run("weigh", LITTER, "--data", "other.csv", "--save", "r.json", "--depth", "none")
    assert done.exit_code == 1
    assert done.stderr.count("evidence: ") == 1
    assert said in done.stderr
    assert "Traceback" not in done.output
    assert os.listdir() == before
