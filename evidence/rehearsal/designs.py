"""Designs: what is fixed before any response is seen, at each of several sizes.

A design is named arrays without the response, or a function from a number of observations to such
arrays. Named arrays are brought to a size by their rows: observation i of n takes row
``floor((i + 1/2) N / n)`` of N. A smaller design is an even thinning of the given order, a size of
k N repeats each row k times, and the range that the rows cover is kept. Where that is not what the
experiment would do (a longer series, new groups), a function says what it would do.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from evidence.complaints import DataError, DeclarationError, sentence
from evidence.model import Model
from evidence.simulation import response_shapes
from evidence.tables import named_arrays

__all__ = ["Design", "checked_sizes", "designs_of", "take_rows"]

TYPE_SIZES = "Type: sizes=[20, 40, 80]"


@dataclass(frozen=True)
class Design:
    """One design.

    Attributes
    ----------
    size : int
        Number of observations.
    columns : dict
        What all its data sets have in common: name -> array.
    responses : dict
        Simulated column -> (shape, dtype) of one data set.
    """

    size: int
    columns: dict[str, np.ndarray]
    responses: dict[str, tuple[tuple[int, ...], np.dtype]]


def designs_of(
    models: Sequence[Model], design: Any, sizes: tuple[int, ...] | None
) -> tuple[Design, ...]:
    """The design at each size, checked against what the candidates simulate.

    Raises
    ------
    DeclarationError
        Candidates that simulate different columns, a function without sizes, or a design whose
        rows cannot be told.
    DataError
        A design that is no named arrays.
    """
    if callable(design) and not isinstance(design, Mapping):
        if sizes is None:
            raise DeclarationError(
                sentence("a design that is a function needs sizes=", "none", TYPE_SIZES)
            )
        return tuple(_design(models, _made(design, size), size) for size in sizes)
    whole = _design(models, dict(named_arrays(design)), None)
    if sizes is None:
        return (whole,)
    return tuple(_resized(models, whole, size) for size in sizes)


def checked_sizes(sizes: Any) -> tuple[int, ...] | None:
    """Sizes in rising order, each once.

    Raises
    ------
    DeclarationError
        Something else than whole numbers from 1 on.
    """
    if sizes is None:
        return None
    given = list(sizes) if isinstance(sizes, Iterable) and not isinstance(sizes, str) else [sizes]
    for size in given:
        if not isinstance(size, int | np.integer) or isinstance(size, bool) or size < 1:
            raise DeclarationError(
                sentence("the size of a design must be a whole number from 1 on", repr(size),
                         TYPE_SIZES)
            )  # fmt: skip
    if not given:
        raise DeclarationError(sentence("sizes= holds no size", repr(sizes), TYPE_SIZES))
    return tuple(sorted({int(size) for size in given}))


def take_rows(rows: int, size: int) -> np.ndarray:
    """Rows (size,) of a design of so many rows, evenly thinned or repeated."""
    return (2 * np.arange(size) + 1) * rows // (2 * size)


def _made(design: Callable[[int], Any], size: int) -> dict[str, np.ndarray]:
    try:
        return dict(named_arrays(design(size)))
    except Exception as error:
        raise DataError(
            sentence(
                f"the design of {size} observations could not be made",
                f"{type(error).__name__}: {error}",
                "The function takes the number of observations and returns named arrays",
            )
        ) from error


def _design(models: Sequence[Model], columns: dict[str, np.ndarray], size: int | None) -> Design:
    responses = _responses(models, columns)
    leading = {shape[0] for shape, _ in responses.values() if shape}
    found = max(leading, default=1)
    if size is not None and leading and size not in leading:
        raise DeclarationError(
            sentence(
                f"a design of {size} observations must give as many simulated values",
                f"{found}",
                "Let `simulate` draw one value for each row of the design",
            )
        )
    kept = {name: x for name, x in columns.items() if name not in responses}
    return Design(found if size is None else size, kept, responses)


def _resized(models: Sequence[Model], whole: Design, size: int) -> Design:
    rows = take_rows(whole.size, size)
    own = [name for name, x in whole.columns.items() if np.shape(x)[:1] == (whole.size,)]
    if not own and size != whole.size:
        raise DeclarationError(
            sentence(
                "sizes= needs a column of the design with a row for each observation",
                ", ".join(f"{k!r} {np.shape(x)}" for k, x in whole.columns.items()) or "none",
                "Give a function: design=lambda n: {'x': np.linspace(0, 1, n)}",
            )
        )
    columns = {name: x[rows] if name in own else x for name, x in whole.columns.items()}
    return _design(models, columns, size)


def _responses(
    models: Sequence[Model], columns: Mapping[str, np.ndarray]
) -> dict[str, tuple[tuple[int, ...], np.dtype]]:
    """Columns that all candidates simulate, in one shape and a type that holds all."""
    found = {model.name: response_shapes(model, columns) for model in models}
    first = next(iter(found))
    expected = {name: x.shape for name, x in found[first].items()}
    for name, shapes in found.items():
        here = {column: x.shape for column, x in shapes.items()}
        if here != expected:
            raise DeclarationError(
                sentence(
                    "the candidates must simulate the same columns in the same shape",
                    f"{first!r} {_shown(expected)}; {name!r} {_shown(here)}",
                )
            )
    return {
        column: (shape, np.result_type(*(shapes[column].dtype for shapes in found.values())))
        for column, shape in expected.items()
    }


def _shown(shapes: Mapping[str, tuple[int, ...]]) -> str:
    return ", ".join(f"{name!r} {shape}" for name, shape in shapes.items())
