"""`evidence stress`: its files, its words and its statuses."""

from __future__ import annotations

import json

import pytest
from click.testing import CliRunner

from evidence.cli import main

STUDY = '''"""Is the mean of the stems zero? Invented data of the Lowmere station."""
import evidence as ev
from evidence.distributions import Normal

def models():
    free = ev.Model("free", {"mean": Normal(0.0, 1.0)},
                    lambda p, d: Normal(p["mean"], 1.0).log_prob(d["stems"]))
    fixed = ev.Model("fixed", {}, lambda p, d: Normal(0.0, 1.0).log_prob(d["stems"]))
    return [free, fixed]

def data(path=None):
    return {"stems": [0.4, 1.3, 0.8, 1.9, 0.2, 1.1]}
'''


@pytest.fixture
def study(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "stems.py").write_text(STUDY)


def run(*arguments):
    return CliRunner().invoke(main, ["stress", "stems.py", *arguments])


def test_both_parts_are_shown_and_saved(study, tmp_path):
    done = run("--save", "out.json")
    assert done.exit_code == 0, done.output
    assert "The verdict for free holds unless" in done.stdout
    assert "log Bayes factor of free against fixed, left out (pull):" in done.stdout
    record = json.loads((tmp_path / "out.json").read_text())
    assert {"priors", "observations", "refused"} <= set(record)
    assert record["observations"]["rows"][1]["observation"] == 1


def test_one_part_as_csv_and_as_json(study, tmp_path):
    done = run("--part", "observations", "--save", "out.csv", "--json")
    assert done.exit_code == 0, done.output
    assert json.loads(done.stdout)["observations"]["leader"] == "free"
    assert (tmp_path / "out.csv").read_text().startswith("observation,candidate,pull,left_out")


def test_wrong_usage_is_found_before_the_calculation(study):
    both = run("--save", "out.csv")
    assert both.exit_code == 2
    assert "Add --part priors, or --part observations" in both.stderr
    other = run("--save", "out.html")
    assert other.exit_code == 2
    assert "a stress result is saved as .json or .csv" in other.stderr
    assert run("--only", "frea").exit_code == 2


def test_what_cannot_be_computed_ends_with_one(study):
    alone = run("--part", "observations", "--only", "free", "--depth", "none")
    assert alone.exit_code == 1
    assert "compares the leader with a rival" in alone.stderr
    partly = run("--only", "free", "--depth", "none")
    assert partly.exit_code == 0
    assert "compares the leader with a rival" in partly.stdout
