"""Every kind of data that is accepted, and every mistake that is named."""

import copy
import datetime
import pickle
import re
import sys
from decimal import Decimal

import jax
import jax.numpy as jnp
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from evidence.complaints import DataError
from evidence.tables import NamedArrays, fingerprint, named_arrays, read_data


def write(folder, text, name="litter.csv"):
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def equal(left, right):
    """The same names, types, shapes and bits."""
    return list(left) == list(right) and fingerprint(left) == fingerprint(right)


# ---------------------------------------------------------------- Parquet


def test_parquet_returns_what_was_written(tmp_path):
    frame = pd.DataFrame(
        {"n": [1, 2], "x": [0.1, 1e-300], "wet": [True, False], "site": ["b", "a"]}
    )
    path = tmp_path / "gauge.parquet"
    frame.to_parquet(path)
    data = read_data(path, categories=["site"])
    assert equal(data, named_arrays({**frame.drop(columns="site"), "site": [1, 0]}))
    assert data.labels == {"site": ("a", "b")}
    assert data.source == str(path)


def test_parquet_mistakes_are_named(tmp_path):
    path = tmp_path / "gauge.parquet"
    pd.DataFrame({"site": ["a", None], "n": pd.array([1, None], "Int64")}).to_parquet(path)
    with pytest.raises(DataError, match=re.escape(f'Type: read_data("{path}", categories=["site')):
        read_data(path)
    with pytest.raises(DataError, match="'site' in row 1 is missing, 'n' in row 1 is missing"):
        read_data(path, categories=["site"])
    with pytest.raises(DataError, match=r"columns site, n\. Did you mean 'site'\?"):
        read_data(path, categories=["sit"])
    with pytest.raises(DataError, match=r"bad.parquet is not a readable Parquet file"):
        read_data(write(tmp_path, "no", "bad.parquet"))


def test_parquet_without_pyarrow_says_what_to_install(tmp_path, monkeypatch):
    path = write(tmp_path, "no", "gauge.parquet")
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(ImportError, match=r"pip install 'laplace-model-evidence\[batch\]'"):
        read_data(path)


# ---------------------------------------------------------------- DataFrame


def test_frame_types_become_ours_and_the_frame_stays():
    frame = pd.DataFrame(
        {
            "small": np.array([1, 2], np.int8),
            "single": np.array([0.5, 1.5], np.float32),
            "nullable": pd.array([3, 4], "Int64"),
            "truth": pd.array([True, False], "boolean"),
            "site": pd.Categorical(["low", "high"], categories=["low", "mid", "high"]),
        },
        index=[7, 9],
    )
    before = frame.copy(deep=True)
    data = named_arrays(frame)
    assert {name: column.dtype.name for name, column in data.items()} == {
        "small": "int64",
        "single": "float64",
        "nullable": "int64",
        "truth": "bool",
        "site": "int64",
    }
    assert data["site"].tolist() == [0, 2]
    assert data.labels == {"site": ("low", "mid", "high")}
    pd.testing.assert_frame_equal(frame, before)


@pytest.mark.parametrize(
    ("column", "message"),
    [
        ([1.0, np.nan], r"'x' in row 9 is missing \(nan\)"),
        ([np.inf, 1.0], "'x' in row 7 is inf"),
        (pd.array([1, None], "Int64"), "'x' in row 9 is missing"),
        (pd.array([None, True], "boolean"), "'x' in row 7 is missing"),
        (pd.Categorical(["a", None]), "'x' in row 9 is missing"),
        (np.array([1, "a"], object), "'x' in row 9 is 'a'"),
        (["a", "b"], r'text.*Type: frame\["x"\] = frame\["x"\].astype\("category"\)'),
        (pd.to_datetime(["2024-01-01", "2024-01-02"]), "must hold numbers; got dates"),
        (pd.to_datetime(["2024-01-01", "2024-01-02"], utc=True), "must hold numbers; got dates"),
        (pd.to_timedelta([1, 2], "D"), "must hold numbers; got time differences"),
        ([1 + 2j, 0j], "must hold numbers; got complex numbers. Give real and imaginary"),
        ([Decimal("1.5"), datetime.date(2024, 1, 1)], "objects, such as a Decimal"),
        (np.array([1, 2], object), r"Python objects \(dtype object\)"),
    ],
)
def test_frame_columns_that_are_no_numbers_are_refused(column, message):
    frame = pd.DataFrame({"x": column})
    frame.index = [7, 9]
    with pytest.raises(DataError, match=message):
        named_arrays(frame)


def test_frame_names_are_checked():
    with pytest.raises(DataError, match="two columns named 'a'"):
        named_arrays(pd.DataFrame([[1, 2]], columns=["a", "a"]))
    with pytest.raises(DataError, match="names of columns of the DataFrame must be text; got 0"):
        named_arrays(pd.DataFrame([[1, 2]]))
    with pytest.raises(DataError, match="column 1 of the DataFrame has no name"):
        named_arrays(pd.DataFrame({"": [1]}))
    with pytest.raises(DataError, match="the DataFrame has no rows"):
        named_arrays(pd.DataFrame({"a": []}))


# ---------------------------------------------------------------- xarray


def test_dataset_gives_variables_and_coordinates():
    dataset = xr.Dataset(
        {"level": (("time", "gauge"), np.arange(6.0).reshape(3, 2))},
        coords={"time": [0, 10, 20], "gauge": ["weir", "alder"]},
    )
    data = named_arrays(dataset)
    assert data["level"].shape == (3, 2)
    assert data["time"].tolist() == [0, 10, 20]
    assert data["gauge"].tolist() == [1, 0]
    assert data.labels == {"gauge": ("alder", "weir")}


def test_dataset_flaws_are_named_by_dimension():
    level = np.arange(6.0).reshape(3, 2)
    level[2, 1] = np.nan
    dataset = xr.Dataset({"level": (("time", "gauge"), level)})
    with pytest.raises(DataError, match=r"'level' at time=2, gauge=1 is missing \(nan\)"):
        named_arrays(dataset)
    dated = xr.Dataset(coords={"time": pd.date_range("2024-01-01", periods=2)})
    with pytest.raises(DataError, match=r"'time' of the Dataset must hold numbers; got dates"):
        named_arrays(dated)


def test_lines_to_type_for_text_in_a_dict_and_a_dataset_work():
    values = {"site": np.array([["b", "a"], ["b", "c"]]), "n": np.zeros(3)}
    dataset = xr.Dataset({"site": (("row", "column"), values["site"])})
    for data in (values, dataset):
        with pytest.raises(DataError, match="is text") as caught:
            named_arrays(data)
        line = re.search(r"Type: (.*)\.$", str(caught.value)).group(1)
        exec(line, {"numpy": np, "data": data})
        assert named_arrays(data)["site"].tolist() == [[1, 0], [1, 2]]


# ---------------------------------------------------------------- dict and arrays


def test_dict_of_anything_array_like():
    data = named_arrays(
        {
            "scalar": 3,
            "list": [1, 2.5],
            "grid": np.ones((2, 3), np.float32),
            "jax": jnp.array([0.1], jnp.float32),
            "truth": [True],
            "half": jnp.array([1.5], jnp.bfloat16),
            "series": pd.Series([1, 2]),
            "masked": np.ma.array([1.0, 2.0], mask=False),
            "long": np.array([1.5], np.longdouble),
        }
    )
    assert data["scalar"].shape == ()
    assert data["scalar"].dtype == np.int64
    assert data["list"].tolist() == [1.0, 2.5]
    assert data["grid"].shape == (2, 3)
    assert data["jax"].tolist() == [float(np.float32(0.1))]
    kinds = {data[name].dtype.name for name in ("list", "grid", "jax", "half", "masked", "long")}
    assert kinds == {"float64"}
    assert data["truth"].dtype == np.bool_
    assert data["series"].dtype == np.int64


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ([1.0, np.nan], r"'x' at \[1\] is missing \(nan\)"),
        ([[1.0, 2.0], [np.inf, 4.0]], r"'x' at \[1, 0\] is inf"),
        (np.nan, r"'x' is missing \(nan\)"),
        (None, "'x' is missing"),
        ([1, None], r"'x' at \[1\] is missing"),
        (np.ma.array([1.0, 2.0], mask=[True, False]), r"'x' at \[0\] is missing"),
        (
            np.array([1, 2**63], np.uint64),
            r"'x' at \[1\] is 9223372036854775808, too large for int64",
        ),
        (np.array(["a", "b"]), r"text.*labels, data\[\"x\"\] = numpy.unique"),
        ("abc", "column 'x' of the data is text"),
        ([1j], "complex"),
        (np.array(["2024-01-01"], "M8[D]"), r'got dates\. Count in days: \(data\["x"\]'),
        (np.array([3], "m8[h]"), "got time differences"),
        ([[1], [2, 3]], "got list .*numpy.asarray"),
        ([], "got no values at all"),
        ({"a": 1}, "objects, such as a dict"),
        (np.zeros(2, [("a", float), ("b", int)]), "Give each field as a column"),
    ],
)
def test_dict_values_that_are_no_numbers_are_refused(values, message):
    with pytest.raises(DataError, match=message):
        named_arrays({"x": values})


def test_long_double_is_not_rounded_silently():
    third = np.array([1], np.longdouble) / 3
    if third.dtype.itemsize == 8 or float(third[0]) == third[0]:
        assert named_arrays({"x": third})["x"][0] == 1 / 3
        return
    with pytest.raises(DataError, match="values that float64 cannot hold"):
        named_arrays({"x": third})


def test_traced_value_is_refused_by_name():
    def trace(x):
        return named_arrays({"x": x})["x"]

    with pytest.raises(DataError, match="column 'x' of the data must hold numbers"):
        jax.make_jaxpr(trace)(1.0)


@pytest.mark.parametrize(
    ("data", "message"),
    [
        ([1, 2], r'got list\. Name it: {"y": data}'),
        (np.zeros(2), r"got ndarray\. Name it"),
        ("a.csv", r'got str\. Type: read_data\("a.csv"\)'),
        (pd.Series([1.0]), r"got Series\. Type: data.to_frame\(\)"),
        (5, r"got int\.$"),
    ],
)
def test_data_of_another_kind_are_refused(data, message):
    with pytest.raises(DataError, match=message):
        named_arrays(data)


def test_none_is_no_data():
    assert named_arrays(None) == {}


# ---------------------------------------------------------------- NamedArrays


def test_nothing_of_the_users_is_aliased_or_changed():
    mine = {"x": np.arange(3.0), "n": np.arange(3), "t": np.array([True])}
    data = named_arrays(mine)
    for name, array in mine.items():
        assert not np.shares_memory(array, data[name])
        assert array.flags.writeable
        assert not data[name].flags.writeable
    mine["x"][0] = 99.0
    assert data["x"][0] == 0.0
    with pytest.raises(ValueError, match="read-only"):
        data["x"][0] = 1.0


def test_named_arrays_are_passed_on_and_do_not_change():
    data = named_arrays({"x": [1.0]})
    assert named_arrays(data) is data
    changes = [
        lambda: data.__setitem__("y", 1),
        lambda: data.__delitem__("x"),
        lambda: data.update(y=1),
        lambda: data.pop("x"),
        lambda: data.popitem(),
        lambda: data.clear(),
        lambda: data.setdefault("y", 1),
        lambda: data.__ior__({"y": 1}),
    ]
    for change in changes:
        with pytest.raises(TypeError, match=r"Make new data instead: {\*\*data, 'name': values}"):
            change()
    assert list({**data, "y": 2.0}) == ["x", "y"]


@pytest.mark.parametrize(
    "copied", [copy.copy, copy.deepcopy, lambda d: pickle.loads(pickle.dumps(d))]
)
def test_copies_keep_everything(copied):
    data = NamedArrays({"g": np.array([1, 0])}, {"g": ["a", "b"]}, "nests.csv")
    twin = copied(data)
    assert equal(twin, data)
    assert (twin.labels, twin.source) == (data.labels, data.source)
    assert not twin["g"].flags.writeable


@pytest.mark.parametrize(
    ("array", "message"),
    [
        ([1.0], "must be an array of float64, int64 or bool; got list"),
        (np.zeros(1, np.float32), "got float32"),
        (np.array([np.nan]), "column 'x' holds nan or inf"),
    ],
)
def test_named_arrays_cannot_be_made_of_unchecked_numbers(array, message):
    with pytest.raises(DataError, match=message):
        NamedArrays({"x": array})


def test_repr_is_short():
    data = named_arrays({f"column {i}": np.zeros(1000) for i in range(50)})
    assert "column 7 (1000,) float64, and 42 more" in repr(data)
    assert len(repr(data)) < 400


# ---------------------------------------------------------------- fingerprint


def test_fingerprint_does_not_depend_on_order_or_layout():
    grid = np.arange(6.0).reshape(2, 3)
    one = fingerprint({"a": grid, "b": np.arange(2)})
    assert one == fingerprint({"b": np.arange(2), "a": np.asfortranarray(grid)})
    assert re.fullmatch("[0-9a-f]{64}", one)


@pytest.mark.parametrize(
    "other",
    [
        {"b": np.arange(4)},
        {"a": np.arange(4.0)},
        {"a": np.arange(4).reshape(2, 2)},
        {"a": np.array([0, 1, 2, 4])},
        {"a": np.arange(4), "b": np.arange(0)},
    ],
)
def test_fingerprint_sees_names_types_shapes_and_values(other):
    assert fingerprint(other) != fingerprint({"a": np.arange(4)})


def test_fingerprint_of_a_scalar_is_not_that_of_one_row():
    assert fingerprint({"a": np.array(1.0)}) != fingerprint({"a": np.array([1.0])})
