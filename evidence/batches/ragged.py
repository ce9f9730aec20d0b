"""Whether a log-likelihood is row by row, so that data sets may be filled up with repeated rows.

A centred covariate changes the terms of the other rows, a cumulative sum those after it; an
autoregression returns one term less. Therefore the terms of a data set are computed both ways at
two points before it is filled up.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from evidence.batches.density import Given, RowDensity
from evidence.batches.parts import Schema
from evidence.compiling import compile_ahead, float64
from evidence.complaints import DeclarationError, sentence

__all__ = ["check_terms", "is_row_wise"]

ALLOWED = 1e-12  # relative difference


def is_row_wise(
    density: RowDensity,
    given: Given,
    data: Mapping[str, np.ndarray],
    size: int,
    schema: Schema,
    points: np.ndarray,
) -> bool:
    """Compute the terms of one data set as it is and filled up to a size, and compare.

    Parameters
    ----------
    density : RowDensity
    given : Given
        For its hyperparameters and shared columns.
    data : mapping
        The data set's own columns.
    size : int
        Rows to fill up to.
    schema : Schema
        Which columns are filled up.
    points : (2, d)
        Where to compare [unconstrained].
    """
    length = next(len(data[name]) for name in schema.rows)
    filled = {
        name: np.concatenate([x, np.repeat(x[-1:], size - length, axis=0)])
        if name in schema.rows
        else x
        for name, x in data.items()
    }
    plain = _terms(density, given._replace(columns=dict(data), kept=None), points)
    longer = _terms(density, given._replace(columns=filled, kept=None), points)
    if plain is None or longer is None:
        return False
    for (terms, rest), (more, rest_again) in zip(plain, longer, strict=True):
        if terms.shape != (length,) or more.shape != (size,):
            return False
        repeated = np.full(size - length, terms[-1])
        if not (_alike(np.append(terms, repeated), more) and _alike(rest, rest_again)):
            return False
    return True


def check_terms(name: str, terms: int | None) -> None:
    """Refuse a scalar log-likelihood where the lengths of the data sets differ.

    Raises
    ------
    DeclarationError
    """
    if terms is None:
        raise DeclarationError(
            sentence(
                f"the log-likelihood of {name!r} must return one term per observation, since the "
                "data sets differ in length",
                "a scalar",
                "Leave out the sum: return Normal(mean, sd).log_prob(data['y'])",
            )
        )


def _terms(density: RowDensity, given: Given, points: np.ndarray) -> list[Any] | None:
    try:
        program = compile_ahead(density.parts, points[0], given)
    except DeclarationError:
        raise
    except Exception:  # a shape that is fixed inside the function: not row by row
        return None
    with float64():
        return [tuple(np.asarray(x) for x in program(point, given)) for point in points]


def _alike(one: Any, other: Any) -> bool:
    one, other = np.asarray(one), np.asarray(other)
    same = (one == other) | (np.isnan(one) & np.isnan(other))
    with np.errstate(invalid="ignore"):
        near = np.abs(one - other) <= ALLOWED * np.maximum(1.0, np.abs(one))
    return bool(np.all(same | near))
