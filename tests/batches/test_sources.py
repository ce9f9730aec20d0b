"""Where data sets come from: arrays, dicts, files, a table; and what is wrong with some of them."""

import numpy as np
import pandas
import pytest

import evidence as ev
from evidence.batches.sources import open_source
from tests.batches import batch_problems as problems


def _write(folder, data):
    for k, columns in enumerate(data):
        pandas.DataFrame(columns).to_csv(folder / f"bag{k:02d}.csv", index=False)


def _laplace(batch, name="decay"):
    table = batch.table()
    return table[table.candidate == name].set_index("data_set").laplace


def test_folder_pattern_table_and_iterator_give_the_same(tmp_path):
    data = problems.listed(6, lengths=(20, 15))
    expected = _laplace(ev.weigh_many(problems.both(), data, depth="none"))
    _write(tmp_path, data)
    folder = _laplace(ev.weigh_many(problems.both(), tmp_path, depth="none"))
    pattern = _laplace(ev.weigh_many(problems.both(), str(tmp_path / "bag*.csv"), depth="none"))
    frames = [pandas.DataFrame({"bag": f"bag{k:02d}", **x}) for k, x in enumerate(data)]
    pandas.concat(frames).to_parquet(tmp_path / "all.parquet")
    table = _laplace(ev.weigh_many(problems.both(), tmp_path / "all.parquet", by="bag",
                                   depth="none"))  # fmt: skip
    for found in (folder, pattern, table):
        assert list(found.index) == [f"bag{k:02d}" for k in range(6)]
        np.testing.assert_allclose(found, expected, atol=1e-9)


def test_rows_of_a_table_are_grouped_across_the_blocks_it_is_read_in(tmp_path, monkeypatch):
    monkeypatch.setattr("evidence.batches.sources.ROWS_READ", 7)
    data = problems.listed(5)
    frames = [pandas.DataFrame({"bag": 10 - k, **x}) for k, x in enumerate(data)]
    path = tmp_path / "all.parquet"
    pandas.concat(frames).to_parquet(path, row_group_size=13)
    parts = [raw.load() for raw in open_source(path, "bag").parts(2)]
    assert [part.names for part in parts] == [(10, 9), (8, 7), (6,)]
    np.testing.assert_array_equal(parts[1].listed[1]["y"], data[3]["y"])


def test_rows_of_a_data_set_that_lie_apart_are_refused(tmp_path):
    path = tmp_path / "mixed.parquet"
    pandas.DataFrame({"bag": ["a", "b", "a"], "y": [1.0, 2.0, 3.0]}).to_parquet(path)
    with pytest.raises(ev.DataError, match=r"'a' do not lie together\. Sort the table by 'bag'"):
        list(open_source(path, "bag").parts(10))


def test_bad_data_sets_are_recorded_with_the_reason_and_the_others_done(tmp_path):
    data = problems.listed(8)
    good = _laplace(ev.weigh_many(problems.both(), data, depth="none"))
    _write(tmp_path, data)
    (tmp_path / "bag02.csv").write_text("t,y\n1,nan\n2,3\n")
    (tmp_path / "bag03.csv").write_text("t,mass\n1,2\n2,3\n")
    (tmp_path / "bag04.csv").write_text("t,y\n")
    (tmp_path / "bag05.csv").write_text("t,y\n1.5,2.5\n")
    (tmp_path / "bag06.csv").write_text("t,y\n" + "0,0\n" * 20)
    batch = ev.weigh_many(problems.both(), tmp_path, depth="none")
    rows = batch.weak_rows().set_index("data_set")
    assert set(rows.index) == {"bag02", "bag03", "bag04"}
    assert "'y' in line 2 is missing" in rows.note["bag02"].iloc[0]
    assert "no column 'y'; it has t, mass" in rows.note["bag03"].iloc[0]
    assert "no rows" in rows.note["bag04"].iloc[0]
    found = _laplace(batch)
    assert np.isfinite(found["bag05"])
    assert np.isfinite(found["bag06"])
    np.testing.assert_allclose(found[["bag00", "bag01", "bag07"]], good[[0, 1, 7]], atol=1e-9)
    assert batch.counts["bad"] == 3


def test_a_bad_first_data_set_does_not_decide_for_the_others():
    data = problems.listed(4)
    data[0] = {"weight": np.ones(3)}
    batch = ev.weigh_many(problems.both(), data, depth="none")
    assert list(batch.weak_rows().data_set.unique()) == [0]
    assert batch.table().log_evidence.notna().sum() == 6


def test_nan_in_stacked_arrays_is_recorded_or_raised():
    data = problems.stacked(5)
    data["y"][3, 7] = np.nan
    batch = ev.weigh_many(problems.both(), data, shared={"t": problems.TIMES}, depth="none")
    assert list(batch.weak_rows().data_set) == [3, 3]
    assert batch.weak_rows().note[0] == "column 'y' holds 1 nan or inf"
    with pytest.raises(ev.DataError, match="data set 3 cannot be used; got column 'y' holds 1 nan"):
        ev.weigh_many(problems.both(), data, shared={"t": problems.TIMES}, depth="none",
                      on_bad="raise")  # fmt: skip


def test_a_model_that_overflows_on_some_data_sets_fails_there_alone():
    import jax.numpy as jnp

    from evidence.distributions import Normal

    def explosive(p, data):
        return Normal(p["x"], 1.0).log_prob(data["y"]) - jnp.exp(data["power"]) * 0.0

    model = ev.Model("explosive", {"x": Normal(0.0, 1.0)}, explosive)
    power = np.where(np.arange(9) % 4 == 1, 800.0, 1.0)
    batch = ev.weigh_many([model], {"y": np.ones(9), "power": power}, depth="none").table()
    assert list(batch.trust == "failed") == list(power > 1)
    assert set(batch.status[power > 1]) == {"NOT_FINITE"}


def test_names_of_data_sets_may_be_given():
    pairs = [(f"well {k}", x) for k, x in enumerate(problems.listed(3))]
    batch = ev.weigh_many(problems.both(), pairs, depth="none")
    assert list(batch.table().data_set.unique()) == ["well 0", "well 1", "well 2"]


@pytest.mark.parametrize(
    ("data_sets", "complaint"),
    [
        ({"y": np.ones((3, 2)), "x": np.ones(2)}, r"one leading axis, the data set; got 'y' 3"),
        ({"y": ["a", "b"]}, "column 'y' must be an array of numbers"),
        (3, "data_sets must be a dict of stacked arrays"),
        ([], "no data set can be used; got there are none"),
        ("nowhere/at all", "no .csv or .parquet file in"),
        ([{"y": [np.nan]}], "no data set can be used"),
    ],
)
def test_what_is_no_source_is_refused(data_sets, complaint):
    with pytest.raises(ev.DataError, match=complaint):
        ev.weigh_many(problems.both(), data_sets)


def test_by_belongs_to_a_table(tmp_path):
    with pytest.raises(ev.DeclarationError, match="by= names a column of one Parquet table"):
        ev.weigh_many(problems.both(), problems.stacked(2), by="bag")
    path = tmp_path / "one.parquet"
    pandas.DataFrame({"bag": [1], "y": [2.0]}).to_parquet(path)
    with pytest.raises(ev.DataError, match="Name the column that identifies the data set"):
        ev.weigh_many(problems.both(), path)
    with pytest.raises(ev.DataError, match=r"has no column 'bags', only bag, y\. Did you mean"):
        ev.weigh_many(problems.both(), path, by="bags")
