"""Which kind of data came: each kind is told by what it can do, and none is imported for it."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from evidence.complaints import DataError, DeclarationError, load_optional, near_name, sentence
from evidence.tables.columns import convert, convert_series, encode, place_in_array
from evidence.tables.csv_file import read_csv
from evidence.tables.flaws import Flaws
from evidence.tables.named import NamedArrays

__all__ = ["named_arrays", "read_data"]

KINDS = "a dict of arrays, a pandas DataFrame, an xarray Dataset or the result of read_data"


def named_arrays(data: object) -> NamedArrays:
    """Turn data of any accepted kind into named arrays.

    Parameters
    ----------
    data : mapping, pandas.DataFrame, xarray.Dataset, NamedArrays or None
        Numbers become float64, integer columns int64, booleans stay; pandas categories and the
        text coordinates of a Dataset become codes with labels. None means no data. Arrays of a
        dict may be scalars and may differ in length. Nothing given is changed or kept hold of.

    Returns
    -------
    NamedArrays
        Read-only copies; named arrays are returned as they are.

    Raises
    ------
    DataError
        If a value is missing, not finite or not a number (named by column and place), or a
        column is text, dates, complex, objects, ragged, or named twice.
    """
    if isinstance(data, NamedArrays):
        return data
    if data is None:
        return NamedArrays({})
    if hasattr(data, "columns") and hasattr(data, "iloc"):
        flaws = Flaws("the DataFrame", _frame_category_line)
        return _from_frame(data, flaws, None)
    if hasattr(data, "data_vars") and hasattr(data, "coords"):
        return _from_dataset(data)
    if isinstance(data, Mapping):
        return _from_mapping(data)
    raise DataError(sentence(f"data must be {KINDS}", type(data).__name__, _advice(data)))


def read_data(path: str | Path, *, categories: Sequence[str] = ()) -> NamedArrays:
    """Read a CSV or Parquet file into named arrays.

    Parameters
    ----------
    path : str or Path
        A ``.csv`` file (UTF-8, commas, names in the first line) or a ``.parquet`` file.
    categories : sequence of str, optional
        Columns of labels: each becomes int64 codes of the sorted labels, which are kept in
        ``.labels``.

    Returns
    -------
    NamedArrays
        Column name -> array [rows]; ``.source`` is the path as given.

    Raises
    ------
    DataError
        If the file is missing, empty, of another kind or ragged, or a value is missing or no
        number; line numbers count from the header, which is line 1.
    DeclarationError
        If ``categories`` is one string.
    ImportError
        If a Parquet file is read without pyarrow.
    """
    if isinstance(categories, str):
        raise DeclarationError(
            sentence(
                "categories must be a list of names",
                repr(categories),
                "Type: categories=" + json.dumps([categories]),
            )
        )
    if not isinstance(path, str | Path):
        raise DataError(
            sentence("read_data takes the path of a file", type(path).__name__, _advice(path))
        )
    categories = list(dict.fromkeys(categories))
    file = _find(Path(path))
    flaws = Flaws(file.name, lambda names: _read_line(path, [*categories, *names]))
    try:
        if file.suffix.lower() == ".csv":
            arrays, labels = read_csv(file, categories, flaws)
            return NamedArrays(arrays, labels, str(path))
        return _from_parquet(file, categories, flaws, str(path))
    except OSError as error:
        raise DataError(f"{path} cannot be read: {error.strerror or error}.") from error


def _advice(data: object) -> str | None:
    if isinstance(data, str | Path):
        return f"Type: read_data({json.dumps(str(data), ensure_ascii=False)})"
    if hasattr(data, "to_pandas"):
        return "Type: data.to_pandas()"
    if hasattr(data, "to_frame"):
        return "Type: data.to_frame()"
    if isinstance(data, np.ndarray | list | tuple):
        return 'Name it: {"y": data}'
    if hasattr(data, "columns"):
        return "Pass it as it is: data=frame"
    return None


def _read_line(path: str | Path, names: list[str]) -> str:
    quoted = json.dumps(str(path), ensure_ascii=False)
    return f"read_data({quoted}, categories={json.dumps(names, ensure_ascii=False)})"


def _frame_category_line(names: list[str]) -> str:
    return "; ".join(f'frame["{n}"] = frame["{n}"].astype("category")' for n in names)


def _mapping_category_line(names: list[str]) -> str:
    return "; ".join(
        f'labels, data["{n}"] = numpy.unique(data["{n}"], return_inverse=True)' for n in names
    )


def _dataset_category_line(names: list[str]) -> str:
    return "; ".join(
        f'data["{n}"] = (data["{n}"].dims, '
        f'numpy.unique(data["{n}"], return_inverse=True)[1].reshape(data["{n}"].shape))'
        for n in names
    )


def _find(path: Path) -> Path:
    path = path.expanduser()
    if path.is_dir():
        raise DataError(f"{path} is a folder. Give the path of a .csv or .parquet file in it.")
    if not path.exists():
        neighbours = [p.name for p in path.parent.iterdir()] if path.parent.is_dir() else []
        raise DataError(f"{path} does not exist.{near_name(path.name, neighbours)}")
    if path.suffix.lower() not in (".csv", ".parquet"):
        message = f"{path.name} must be a .csv or .parquet file"
        remedy = "Save it as CSV, with commas and the names of the columns in the first line"
        raise DataError(sentence(message, repr(path.suffix), remedy))
    return path


def _from_parquet(file: Path, categories: list[str], flaws: Flaws, source: str) -> NamedArrays:
    load_optional("pyarrow", "batch")
    import pandas

    try:
        frame = pandas.read_parquet(file, engine="pyarrow")
    except ValueError as error:
        message = f"{file.name} is not a readable Parquet file"
        raise DataError(sentence(message, str(error).splitlines()[0])) from error
    for name in categories:
        if name not in frame.columns:
            known = ", ".join(map(str, frame.columns))
            message = f"categories names {name!r}, and {file.name} has the columns {known}"
            raise DataError(f"{message}.{near_name(name, frame.columns)}")
    return _from_frame(frame, flaws, source, categories)


def _from_frame(
    frame: Any, flaws: Flaws, source: str | None, categories: Sequence[str] = ()
) -> NamedArrays:
    _check_names(list(frame.columns), flaws)
    if not len(frame):
        raise DataError(f"{flaws.source} has no rows.")
    index = frame.index

    def place(spot: tuple[int, ...]) -> str:
        return f"in row {index[spot[0]]}"

    arrays: dict[str, Any] = {}
    labels: dict[str, tuple[str, ...]] = {}
    for name in frame.columns:
        series = frame[name]
        if name in categories and not series.isna().any():
            arrays[name], labels[name] = encode([str(value) for value in series])
            continue
        if name in categories:
            series = series.astype("category")
        arrays[name], words = convert_series(name, series, flaws, place)
        if words is not None:
            labels[name] = words
    flaws.speak()
    return NamedArrays(arrays, labels, source)


def _check_names(names: list[object], flaws: Flaws) -> None:
    for number, name in enumerate(names, start=1):
        if not isinstance(name, str):
            message = f"names of columns of {flaws.source} must be text"
            raise DataError(sentence(message, repr(name), "Rename the column"))
        if not name.strip():
            raise DataError(f"column {number} of {flaws.source} has no name. Give it one.")
        if names.count(name) > 1:
            raise DataError(f"{flaws.source} has two columns named {name!r}. Rename one.")


def _from_mapping(data: Mapping[str, object]) -> NamedArrays:
    flaws = Flaws("the data", _mapping_category_line)
    _check_names(list(data), flaws)
    arrays: dict[str, Any] = {}
    labels: dict[str, tuple[str, ...]] = {}
    for name, values in data.items():
        if hasattr(values, "iloc") and hasattr(values, "dtype"):
            place = _series_place(values.index)
            arrays[name], words = convert_series(name, values, flaws, place)
            if words is not None:
                labels[name] = words
        else:
            arrays[name] = convert(name, values, flaws)
    flaws.speak()
    return NamedArrays(arrays, labels)


def _series_place(index: Any) -> Callable[[tuple[int, ...]], str]:
    return lambda spot: f"in row {index[spot[0]]}"


def _from_dataset(dataset: Any) -> NamedArrays:
    flaws = Flaws("the Dataset", _dataset_category_line)
    names = [*dataset.data_vars, *dataset.coords]
    _check_names(names, flaws)
    arrays: dict[str, Any] = {}
    labels: dict[str, tuple[str, ...]] = {}
    for name in names:
        values, dims = dataset[name].values, dataset[name].dims
        if name in dataset.coords and len(dims) == 1 and _is_text(values):
            arrays[name], labels[name] = encode([str(word) for word in values])
        else:
            arrays[name] = convert(name, values, flaws, _dataset_place(dims))
    flaws.speak()
    return NamedArrays(arrays, labels)


def _is_text(values: np.ndarray) -> bool:
    if values.dtype.kind == "O":
        return all(isinstance(value, str) for value in values)
    return values.dtype.kind in "UT"


def _dataset_place(dims: tuple[str, ...]) -> Callable[[tuple[int, ...]], str]:
    def place(spot: tuple[int, ...]) -> str:
        if not spot:
            return place_in_array(spot)
        return "at " + ", ".join(f"{d}={i}" for d, i in zip(dims, spot, strict=True))

    return place
