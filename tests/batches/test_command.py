"""weigh-many and show on the command line."""

import json
from pathlib import Path

import pandas
import pytest
from click.testing import CliRunner

from evidence.cli import main
from tests.batches import batch_problems as problems

STUDY = '''
"""Does the litter decay?

Invented bags of the fictional Lowmere reed-bed station.
"""
from tests.batches import batch_problems as problems


def models():
    return problems.both()


def data(path=None):
    return {"t": problems.TIMES, "y": problems.TIMES}
'''


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("field")
    (folder / "bags").mkdir()
    (folder / "study.py").write_text(STUDY)
    for k, columns in enumerate(problems.listed(12)):
        pandas.DataFrame(columns).to_csv(folder / "bags" / f"bag{k:02d}.csv", index=False)
    (folder / "bags" / "bag07.csv").write_text("t,weight\n1,2\n")
    return folder


def _call(*arguments):
    return CliRunner().invoke(main, [str(a) for a in arguments])


def test_a_folder_is_weighed_into_a_store_and_shown(folder, tmp_path):
    command = ["weigh-many", folder / "study.py", "--data", folder / "bags", "--store",
               tmp_path / "out"]  # fmt: skip
    first = _call(*command)
    assert first.exit_code == 3  # one data set is bad, and said to be
    assert "12 data sets, 2 candidates" in first.stdout
    assert "no column 'y'; it has t, weight" in first.stdout
    assert "log Bayes factor of constant against decay" in first.stdout
    again = _call(*command)
    assert again.exit_code == 3
    assert again.stdout == first.stdout
    shown = _call("show", tmp_path / "out")
    assert shown.exit_code == 0
    assert shown.stdout == first.stdout
    record = json.loads(_call("show", tmp_path / "out", "--json").stdout)
    assert record["counts"]["data_sets"] == 12
    assert [row["candidate"] for row in record["candidates"]] == ["decay", "constant"]
    assert sum(record["log_bayes_factors"][0]["counts"]) == 11


def test_a_study_that_asks_something_else_is_refused(folder, tmp_path):
    options = ["--data", folder / "bags", "--store", tmp_path / "out", "--depth", "none", "--quiet"]
    assert _call("weigh-many", folder / "study.py", *options).exit_code == 3
    refused = _call("weigh-many", folder / "study.py", *options, "--seed", "5")
    assert refused.exit_code == 1
    assert "another seed (0 then, 5 now)" in refused.stderr


@pytest.mark.parametrize(
    ("extra", "status", "said"),
    [
        (["--workers", "1", "--cluster", "tcp://here"], 2, "--workers or --cluster, not both"),
        (["--depth", "thorough"], 2, "'thorough' is not one of"),
        (["--workers", "0"], 2, "0 is not in the range"),
    ],
)
def test_wrong_usage(folder, tmp_path, extra, status, said):
    done = _call("weigh-many", folder / "study.py", "--data", folder / "bags", "--store",
                 tmp_path / "out", *extra)  # fmt: skip
    assert done.exit_code == status
    assert said in done.stderr


def test_what_is_no_store_is_said(tmp_path):
    done = _call("show", tmp_path)
    assert done.exit_code == 1
    assert "is not a store of a batch" in done.stderr
    assert not list(Path(tmp_path).iterdir())
