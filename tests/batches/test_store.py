"""The store against everything that may happen to it."""

import errno
import json
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pandas
import pytest

import evidence as ev
from tests.batches import batch_problems as problems
from tests.batches import killed_run

ROOT = Path(__file__).parents[2]
WHOLE = {"shared": {"t": problems.TIMES}, "depth": "none", "part_size": 8}


def _run(store, n=40, **options):
    return ev.weigh_many(problems.both(), problems.stacked(n), store=store, **{**WHOLE, **options})


@pytest.fixture(scope="module")
def expected():
    return ev.weigh_many(problems.both(), problems.stacked(40), **WHOLE).table()


@pytest.fixture
def store(tmp_path, expected):
    _run(tmp_path / "out")
    return tmp_path / "out"


def _parts(store):
    return sorted(Path(store).glob("part-*.parquet"))


def test_a_store_holds_what_memory_would_and_pandas_reads_it(store, expected):
    assert len(_parts(store)) == 5
    assert problems.same_tables(ev.Batch.open(store).table(), expected)
    frame = pandas.read_parquet(store)
    np.testing.assert_array_equal(frame.laplace, expected.laplace)
    manifest = json.loads((store / "_manifest.json").read_text())
    assert manifest["candidates"] == ["decay", "constant"]
    assert set(manifest) >= {"version", "models", "versions", "seed", "part_size"}


def test_a_second_call_calculates_nothing_and_missing_parts_are_done(store, expected, monkeypatch):
    stamps = {p.name: p.stat().st_mtime_ns for p in _parts(store)}
    _parts(store)[2].unlink()
    batch = _run(store)
    assert problems.same_tables(batch.table(), expected)
    again = {p.name: p.stat().st_mtime_ns for p in _parts(store)}
    assert [n for n in stamps if stamps[n] != again[n]] == ["part-00000002.parquet"]


@pytest.mark.parametrize("kept", [0, 100, -1])
def test_a_truncated_part_is_done_again_and_named(store, expected, kept):
    part = _parts(store)[3]
    part.write_bytes(part.read_bytes()[:kept])
    batch = _run(store)
    assert problems.same_tables(batch.table(), expected)
    assert batch.set_aside == ("part-00000003.parquet",)
    assert (store / "_unreadable-part-00000003.parquet").exists()


def test_a_full_disk_is_named_and_nothing_finished_is_lost(tmp_path, expected, monkeypatch):
    real, calls = os.fsync, []

    def full(descriptor):
        calls.append(descriptor)
        if len(calls) > 6:  # manifest and folder, then two parts and their folder
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        return real(descriptor)

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(ev.DataError, match="cannot be written: No space left on device"):
        _run(tmp_path / "out")
    monkeypatch.setattr(os, "fsync", real)
    kept = _parts(tmp_path / "out")
    assert len(kept) == 2
    assert not list((tmp_path / "out").glob(".*.tmp"))
    assert problems.same_tables(_run(tmp_path / "out").table(), expected)


def test_two_runs_into_one_store_the_second_refuses(tmp_path):
    from evidence.batches.store import Store

    held = Store(tmp_path / "out").open({"candidates": ["x"], "prior_probabilities": {"x": 1.0}})
    try:
        with pytest.raises(ev.DataError, match="another run is writing into"):
            _run(tmp_path / "out")
    finally:
        held.close()


@pytest.mark.parametrize(
    ("change", "complaint"),
    [
        ({"seed": 1}, r"another seed \(0 then, 1 now\)"),
        ({"depth": "quick"}, r"another depth \(none then, quick now\)"),
        ({"shared": {"t": problems.TIMES + 1.0}}, "another shared"),
        ({"prior_probabilities": [0.3, 0.7]}, "another prior probabilities of 'decay'"),
    ],
)
def test_another_question_is_refused(store, change, complaint):
    with pytest.raises(ev.DataError, match=complaint):
        _run(store, **change)


def test_a_changed_model_is_refused(store):
    other = [problems.staying(), ev.Model("decay", problems.decaying().priors, problems.constant)]
    with pytest.raises(ev.DataError, match="other candidates"):
        ev.weigh_many(other, problems.stacked(40), store=store, **WHOLE)
    with pytest.raises(ev.DataError, match="another models of 'decay'"):
        ev.weigh_many(other[::-1], problems.stacked(40), store=store, **WHOLE)


def test_changed_and_missing_data_sets_are_refused(store):
    data = problems.stacked(40)
    data["y"][19, 0] += 1e-9
    with pytest.raises(ev.DataError, match="the data sets 16 to 23 are not those of which"):
        ev.weigh_many(problems.both(), data, store=store, **WHOLE)
    with pytest.raises(ev.DataError, match="holds results of more data sets than there are now"):
        _run(store, n=32)


def test_more_data_sets_are_added(store, expected):
    batch = _run(store, n=48)
    assert len(batch) == 48
    assert problems.same_tables(batch.table().iloc[:80], expected)


def test_a_folder_of_something_else_is_left_alone(tmp_path):
    (tmp_path / "thesis.txt").write_text("mine")
    with pytest.raises(ev.DataError, match=r"is not empty and holds no _manifest.json; got thesis"):
        _run(tmp_path)
    with pytest.raises(ev.DataError, match="is not a store of a batch"):
        ev.Batch.open(tmp_path)


def test_bad_data_sets_keep_their_reason(tmp_path):
    data = problems.stacked(12)
    data["y"][5] = np.inf
    ev.weigh_many(problems.both(), data, store=tmp_path / "out", **WHOLE)
    again = ev.Batch.open(tmp_path / "out")
    assert list(again.weak_rows().note) == ["column 'y' holds 20 nan or inf"] * 2
    assert again.counts["bad"] == 1


def _kill_at_random(store, rng):
    """Start a run, let it finish some parts, and kill it at a random moment."""
    before = len(_parts(store))
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    process = subprocess.Popen([sys.executable, "-m", "tests.batches.killed_run", str(store)],
                               cwd=ROOT, env=environment)  # fmt: skip
    wanted = before + rng.randint(1, 4)
    while process.poll() is None and len(_parts(store)) < wanted:
        time.sleep(0.001)
    time.sleep(rng.uniform(0.0, 0.03))
    killed = process.poll() is None
    process.send_signal(signal.SIGKILL) if killed else None
    process.wait()
    return killed


def _assert_survives_kills(store, kills):
    rng = random.Random(7)
    killed = sum(_kill_at_random(store, rng) for _ in range(kills))
    assert killed == kills
    assert 0 < len(_parts(store)) < killed_run.DATA_SETS / killed_run.PART_SIZE
    stamps = {p.name: p.stat().st_mtime_ns for p in _parts(store)}
    resumed = killed_run.main(store)
    again = {p.name: p.stat().st_mtime_ns for p in _parts(store)}
    assert all(again[name] == stamp for name, stamp in stamps.items())  # nothing is done twice
    whole = ev.weigh_many(problems.both(), problems.stacked(killed_run.DATA_SETS),
                          shared={"t": problems.TIMES}, part_size=killed_run.PART_SIZE)  # fmt: skip
    assert problems.same_tables(resumed.table(), whole.table())


@pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="the system has no SIGKILL")
def test_a_killed_run_resumes_with_nothing_lost_and_nothing_doubled(tmp_path):
    _assert_survives_kills(tmp_path / "out", 1)


@pytest.mark.slow
@pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="the system has no SIGKILL")
def test_ten_kills_at_random_moments(tmp_path):
    _assert_survives_kills(tmp_path / "out", 10)
