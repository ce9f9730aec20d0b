"""On worker processes: the same rows as here, also where a worker is lost."""

import os
import signal
import threading
import time

import numpy as np
import pytest

import evidence as ev
from evidence.batches import cluster
from evidence.batches.parts import Part
from tests.batches import batch_problems as problems

pytest.importorskip("distributed")
pytestmark = pytest.mark.filterwarnings("ignore::ResourceWarning", "ignore::DeprecationWarning")

STUDY = '''
"""Does it decay?"""
import evidence as ev
from tests.batches import batch_problems as problems


def models():
    return problems.both()


def data(path=None):
    return {"t": problems.TIMES, "y": problems.TIMES}
'''


@pytest.fixture(scope="module")
def client():
    with cluster.own_cluster(2) as client:
        yield client


@pytest.fixture(scope="module")
def expected():
    return _run(None)


def _run(client, models=None, **options):
    chosen = {"shared": {"t": problems.TIMES}, "depth": "none", "part_size": 100, **options}
    return ev.weigh_many(models or problems.both(), problems.stacked(1200), client=client,
                         **chosen).table()  # fmt: skip


def test_two_worker_processes_give_the_same_rows(client, expected):
    assert len({client.submit(os.getpid, key=f"pid-{k}", workers=[w]).result()
                for k, w in enumerate(client.scheduler_info()["workers"])}) == 2  # fmt: skip
    assert problems.same_tables(_run(client), expected)


def test_models_of_a_notebook_travel(client, expected):
    function = eval("lambda p, data: decay(p, data)", {"decay": problems.decay})
    models = [ev.Model("decay", problems.decaying().priors, function), problems.staying()]
    assert problems.same_tables(_run(client, models), expected)


def test_a_study_is_read_by_the_workers_and_a_difference_refused(client, expected, tmp_path):
    path = tmp_path / "decay_study.py"
    path.write_text(STUDY)
    study = ev.read_study(path)
    assert problems.same_tables(_run(client, study), expected)
    path.write_text(STUDY + "\nCHANGED = True\n")
    with pytest.raises(ev.DeclarationError, match="that a worker sees is not the one that was"):
        _run(client, study)


def test_what_is_no_client_is_refused():
    with pytest.raises(ev.DeclarationError, match=r"client must be a dask.distributed.Client; got"):
        _run("tcp://here")


def test_a_killed_worker_loses_nothing(tmp_path, expected):
    store = tmp_path / "out"
    with cluster.own_cluster(2) as client:
        victim = client.submit(os.getpid, workers=[next(iter(client.scheduler_info()["workers"]))],
                               pure=False).result()  # fmt: skip
        killer = threading.Thread(target=_kill_after, args=(store, victim))
        killer.start()
        table = _run(client, store=store)
        killer.join()
    assert problems.same_tables(table, expected)
    assert len(list(store.glob("part-*.parquet"))) == 12
    with pytest.raises(ProcessLookupError, match="No such process"):
        os.kill(victim, 0)


def _kill_after(store, process):
    """Wait until a first part is there, and kill a worker in the middle of its own."""
    while not list(store.glob("part-*.parquet")):
        time.sleep(0.002)
    os.kill(process, signal.SIGKILL)


def test_parts_survive_the_way_as_parquet():
    whole = np.arange(6).reshape(3, 2)
    data = (
        {"y": np.arange(3.0), "x": whole, "flag": np.array([True, False])},
        None,
        {"y": np.zeros(1), "x": whole[:1], "flag": np.array([True, True])},
    )
    part = Part(first=7, names=("a", "b", "c"), listed=data, bad={1: (20, "no")}, fingerprint="f")
    again = cluster.unpack(cluster.pack(part))
    assert (again.first, again.names, again.fingerprint) == (7, ("a", "b", "c"), "f")
    assert again.bad == {1: (20, "no")}
    assert again.listed[1] is None
    for one, other in ((data[0], again.listed[0]), (data[2], again.listed[2])):
        assert one.keys() == other.keys()
        for name in one:
            np.testing.assert_array_equal(one[name], other[name])
            assert one[name].dtype == other[name].dtype
    stacked = Part(first=0, names=(0, 1), stacked={"y": np.array([[1.0, np.nan], [2.0, 3.0]])},
                   bad={0: (20, "nan")})  # fmt: skip
    np.testing.assert_array_equal(cluster.unpack(cluster.pack(stacked)).stacked["y"],
                                  stacked.stacked["y"])  # fmt: skip
