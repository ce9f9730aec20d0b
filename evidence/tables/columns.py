"""One column, array or Series -> float64, int64 or bool, or a complaint that names the place."""

from __future__ import annotations

import contextlib
import numbers
from collections.abc import Callable
from itertools import islice
from typing import Any

import numpy as np

from evidence.tables.flaws import MOST_SHOWN, Flaws

__all__ = ["convert", "convert_series", "encode", "place_in_array"]

Place = Callable[[tuple[int, ...]], str]
LARGEST = np.iinfo(np.int64).max


def place_in_array(index: tuple[int, ...]) -> str:
    """Return "at [3, 0]", or nothing for a scalar."""
    return f"at [{', '.join(map(str, index))}]" if index else ""


def convert(
    name: str, values: object, flaws: Flaws, place: Place = place_in_array
) -> np.ndarray | None:
    """Turn anything array-like into float64, int64 or bool.

    Parameters
    ----------
    name : str
        The name of the column, for complaints.
    values : array-like
        A scalar, a list, a NumPy, masked or JAX array; never changed.
    flaws : Flaws
        Where unusable values are noted.
    place : callable
        Index -> the place in the user's words.

    Returns
    -------
    np.ndarray or None
        The numbers, maybe in the caller's memory; None if something was noted.

    Raises
    ------
    DataError
        For a column that is complex, holds dates or objects, is ragged or empty.
    """
    array = _as_array(name, values, flaws)
    if array.ndim and array.shape[0] == 0:
        flaws.refuse(name, "no values at all", "Leave the column out")
    kind = array.dtype.kind
    if kind in "UST":
        flaws.text(name, str(array.flat[0]))
        return None
    if kind == "O":
        return _refuse_objects(name, array, flaws, place)
    if kind in "biu":
        return _whole_numbers(name, array, flaws, place)
    if kind == "f" or (kind == "V" and "float" in array.dtype.name):
        return _floats(name, array, flaws, place)
    return _refuse_kind(name, array, flaws)


def _as_array(name: str, values: object, flaws: Flaws) -> np.ndarray:
    if isinstance(values, np.ma.MaskedArray):
        return _fill_mask(values)
    try:
        return np.asarray(values)
    except Exception as error:
        what = f"{type(values).__name__} ({str(error).splitlines()[0]})"
        flaws.refuse(name, what, "Make it an array first: numpy.asarray(values)")


def _fill_mask(values: np.ma.MaskedArray) -> np.ndarray:
    if not np.ma.getmaskarray(values).any():
        return np.asarray(values)
    # numpy.asarray would drop the mask and use what lies under it.
    objects = np.asarray(values).astype(object)
    objects[np.ma.getmaskarray(values)] = None
    return objects


def _note(
    name: str, bad: np.ndarray, flaws: Flaws, place: Place, say: Callable[[tuple[int, ...]], str]
) -> None:
    spots = (tuple(map(int, index)) for index in np.argwhere(bad))
    first = [(place(spot), say(spot)) for spot in islice(spots, MOST_SHOWN)]
    flaws.values(name, int(bad.sum()), first)


def _whole_numbers(name: str, array: np.ndarray, flaws: Flaws, place: Place) -> np.ndarray | None:
    if array.dtype.kind == "b":
        return array
    if array.dtype.kind == "u" and (array > LARGEST).any():
        _note(name, array > LARGEST, flaws, place, lambda i: f"{array[i]}, too large for int64")
        return None
    return array.astype(np.int64, copy=False)


def _floats(name: str, array: np.ndarray, flaws: Flaws, place: Place) -> np.ndarray | None:
    with np.errstate(over="ignore", invalid="ignore"):
        converted = array.astype(np.float64, copy=False)
    finite = np.isfinite(converted)
    if not finite.all():
        _note(name, ~finite, flaws, place, lambda i: _number_word(array[i]))
        return None
    if array.dtype.itemsize > 8 and not (converted == array).all():
        flaws.refuse(
            name, f"{array.dtype} values that float64 cannot hold", "Round them: x.astype(float)"
        )
    return converted


def _number_word(value: Any) -> str:
    return str(value) if value == value else "missing (nan)"


def _refuse_kind(name: str, array: np.ndarray, flaws: Flaws) -> None:
    kind = array.dtype.kind
    if kind == "c":
        flaws.refuse(name, "complex numbers", "Give real and imaginary part as two columns")
    if kind == "M":
        flaws.refuse(name, "dates", _days_line(name, f' - data["{name}"][0]'))
    if kind == "m":
        flaws.refuse(name, "time differences", _days_line(name, ""))
    flaws.refuse(name, str(array.dtype), "Give each field as a column of its own")


def _days_line(name: str, since: str) -> str:
    return f'Count in days: (data["{name}"]{since}) / numpy.timedelta64(1, "D")'


def _is_missing(value: object) -> bool:
    # pandas.NA refuses to be compared, hence the look at type names.
    if value is None or type(value).__name__ in ("NAType", "NaTType"):
        return True
    return isinstance(value, float | np.floating) and bool(np.isnan(value))


def _refuse_objects(name: str, array: np.ndarray, flaws: Flaws, place: Place) -> None:
    """Say what stops a column of Python objects from being numbers."""
    missing = np.vectorize(_is_missing, otypes=[bool])(array)
    words = np.vectorize(lambda v: isinstance(v, str), otypes=[bool])(array)
    present = array[~missing]
    if present.size and (words | missing).all():
        flaws.text(name, str(present[0]))
        return
    for value in present:
        if not isinstance(value, numbers.Real | np.bool_ | str):
            kind = type(value).__name__
            flaws.refuse(name, f"objects, such as a {kind}", "Convert it: x.astype(float)")
    bad = missing | words
    if not bad.any():
        what = "Python objects (dtype object)"
        flaws.refuse(name, what, "Convert it: numpy.asarray(x, dtype=float)")
    _note(name, bad, flaws, place, lambda i: "missing" if missing[i] else f"{array[i]!r}")


def convert_series(
    name: str, series: Any, flaws: Flaws, place: Place
) -> tuple[np.ndarray | None, tuple[str, ...] | None]:
    """Turn a pandas Series into an array and, for a categorical one, its labels.

    Parameters
    ----------
    name : str
        The name of the column.
    series : pandas.Series
        Of any NumPy, nullable, Arrow or categorical type.
    flaws : Flaws
        Where unusable values are noted.
    place : callable
        Index -> the place in the user's words.

    Returns
    -------
    array, labels
        Either may be None.

    Raises
    ------
    DataError
        As :func:`convert`.
    """
    dtype = series.dtype
    if hasattr(dtype, "categories"):
        codes = series.cat.codes.to_numpy().astype(np.int64)
        if (codes < 0).any():
            _note(name, codes < 0, flaws, place, lambda _: "missing")
            return None, None
        return codes, tuple(map(str, dtype.categories))
    kind = getattr(dtype, "kind", "O")
    if isinstance(dtype, np.dtype):
        values = series.to_numpy()
    elif kind == "M":
        flaws.refuse(name, "dates", _days_line(name, f' - data["{name}"].iloc[0]'))
    elif kind in "biuf" and not series.isna().any():
        plain = {"b": np.bool_, "i": np.int64, "u": np.uint64, "f": np.float64}[kind]
        values = series.to_numpy(dtype=plain)
    else:
        values = series.to_numpy(dtype=object)
    return convert(name, values, flaws, place), None


def encode(words: list[str]) -> tuple[np.ndarray, tuple[str, ...]]:
    """Give each distinct label the number of its place among the sorted labels.

    Labels that are all numbers are sorted as numbers, so that plot 10 comes after plot 9.

    Parameters
    ----------
    words : list of str
        One label per row.

    Returns
    -------
    codes, labels
        int64 array [rows], and the sorted labels.
    """
    labels = sorted(set(words))
    with contextlib.suppress(ValueError):
        labels.sort(key=float)
    number = {label: code for code, label in enumerate(labels)}
    return np.array([number[word] for word in words], np.int64), tuple(labels)
