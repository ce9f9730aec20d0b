"""Predictions of a candidate and data simulated from its posterior, against the data.

Posterior predictive checks: a feature of the data is compared with the same feature of data
simulated from draws of the posterior (Rubin 1984, Annals of Statistics 12:1151; Gelman, Meng &
Stern 1996, Statistica Sinica 6:733). They tell whether a candidate could have made such data,
which no comparison of candidates does.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from typing import Any

import jax
import numpy as np

from evidence.compiling import Program
from evidence.layout import Named, unpack
from evidence.problem import Problem
from evidence.tracing import reworded

__all__ = ["Replicas", "check_replicas", "choose_axis", "prediction_record", "replicate"]

DRAWS = 1000
FEWER = 200  # draws where there are many rows
MANY_ROWS = 4000
NUMBERS_AT_ONCE = 4_000_000
ROWS_KEPT = 20_000
ROWS_SHOWN = 300
BAND = (0.025, 0.975)
EXTREME = 0.005  # a check fails where its p-value is below this or above one minus this


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class Replicas:
    """One response column: what was observed, what is expected, what is simulated.

    Attributes
    ----------
    column : str
    observed : (rows,) or None
        The column of the data; None where the data have no such column.
    expected : (draws, rows) or None
        Expected values at draws of the posterior; None without `predict`.
    simulated : (draws, rows) or None
        Simulated columns; None without `simulate`.
    kept : (rows,)
        Which rows of the data these are: all, or an even choice of 20 000.
    rows : int
        Rows of the data.
    """

    column: str
    observed: np.ndarray | None
    expected: np.ndarray | None
    simulated: np.ndarray | None
    kept: np.ndarray
    rows: int


def replicate(problem: Problem, draws: np.ndarray, *, seed: int) -> list[Replicas]:
    """Predict and simulate at draws of the posterior.

    Parameters
    ----------
    problem : Problem
    draws : (n, d)
        Draws of the posterior [unconstrained]; the first 1000 are used, 200 where there are
        more than 4000 rows.
    seed : int

    Returns
    -------
    list of Replicas
        One for each response column; empty where the candidate has neither `predict` nor
        `simulate`.

    Raises
    ------
    DeclarationError
        One of the user's functions cannot be traced or does not return named columns.
    """
    model = problem.model
    parts = {"predict": model.predict, "simulate": model.simulate}
    if not any(parts.values()):
        return []
    rows = max([np.shape(x)[0] for x in problem.arrays.values() if np.ndim(x)], default=1)
    draws = draws[: DRAWS if rows <= MANY_ROWS else FEWER]
    kept = np.unique(np.linspace(0, rows - 1, min(rows, ROWS_KEPT)).astype(int))
    keys = np.random.default_rng([seed, 0x5E7]).integers(2**31, size=len(draws))
    program = Program(_program(problem), hasty=rows <= MANY_ROWS)
    at_once = int(np.clip(NUMBERS_AT_ONCE // rows, 1, len(draws)))
    pieces: dict[tuple[str, str], list[np.ndarray]] = {}
    with reworded(f"predict or simulate of {model.name!r}"):
        for first in range(0, len(draws), at_once):
            chosen = np.arange(first, first + at_once).clip(max=len(draws) - 1)
            found = program(draws[chosen], keys[chosen], problem.hyper, problem.data)
            for part, columns in found.items():
                for column, values in columns.items():
                    flat = np.asarray(values, dtype=np.float64).reshape(at_once, -1)
                    fresh = flat[: len(draws) - first]
                    whole = fresh.shape[1] == rows
                    pieces.setdefault((column, part), []).append(fresh[:, kept] if whole else fresh)
    joined = {key: np.concatenate(values) for key, values in pieces.items()}
    names = dict.fromkeys(column for column, _ in joined)
    return [_column(problem, name, joined, kept, rows) for name in names]


def _program(problem: Problem) -> Callable[..., Any]:
    model, layout = problem.model, problem.layout

    def one(z: Any, number: Any, hyper: Any, data: Any) -> dict[str, Any]:
        values = {**unpack(layout, z, hyper, data)[0], **hyper["constants"]}
        p, columns = Named(values, "parameter", model.name), Named(data, "column", model.name)
        found = {}
        if model.predict is not None:
            found["expected"] = _named(model, "predict", model.predict(p, columns))
        if model.simulate is not None:
            drawn = model.simulate(jax.random.key(number), p, columns)
            found["simulated"] = _named(model, "simulate", drawn)
        return found

    def evidence_replicas(z: Any, numbers: Any, hyper: Any, data: Any) -> dict[str, Any]:
        return jax.vmap(lambda a, b: one(a, b, hyper, data))(z, numbers)

    return evidence_replicas


def _named(model: Any, what: str, columns: Any) -> dict[str, Any]:
    if not isinstance(columns, Mapping):
        raise TypeError(
            f"{what} of {model.name!r} must return a mapping of column name to values, "
            f"got {type(columns).__name__}"
        )
    return {str(name): jax.numpy.asarray(value) for name, value in columns.items()}


def _column(
    problem: Problem, name: str, joined: Mapping[Any, np.ndarray], kept: np.ndarray, rows: int
) -> Replicas:
    expected, simulated = joined.get((name, "expected")), joined.get((name, "simulated"))
    observed = None
    if name in problem.arrays:
        observed = np.asarray(problem.arrays[name], dtype=np.float64).ravel()
        observed = observed[kept] if len(observed) == rows else observed
        width = {np.shape(x)[1] for x in (expected, simulated) if x is not None}
        observed = observed if width == {len(observed)} else None
    return Replicas(
        column=name,
        observed=observed,
        expected=expected,
        simulated=simulated,
        kept=kept,
        rows=rows,
    )


def choose_axis(problem: Problem, replicas: Replicas) -> tuple[str | None, np.ndarray]:
    """Name and values (rows,) of the column along which a response is drawn.

    The first column of numbers of the response's length that is not constant and no response
    itself, real numbers before whole ones; None and the row's number where there is none.
    """
    width = _width(replicas)
    responses = {replicas.column}
    found: list[tuple[int, str, np.ndarray]] = []
    for name, values in problem.arrays.items():
        values = np.asarray(values)
        if name in responses or values.ndim != 1 or values.dtype.kind not in "iuf":
            continue
        values = values[replicas.kept] if len(values) == replicas.rows else values
        if len(values) == width and np.ptp(values) > 0:
            found.append((0 if values.dtype.kind == "f" else 1, name, values.astype(float)))
    if not found:
        return None, np.arange(1.0, width + 1.0)
    _, name, values = min(found, key=lambda entry: entry[0])
    return name, values


def _width(replicas: Replicas) -> int:
    present = replicas.simulated if replicas.expected is None else replicas.expected
    return int(present.shape[1])


def prediction_record(problem: Problem, replicas: Replicas) -> dict[str, Any]:
    """A prediction as plain lists, ordered along its axis, at most 300 rows of it.

    ``low`` and ``high`` are the 95 % band of a new observation (needs `simulate`),
    ``expected_low`` and ``expected_high`` that of the expected value (needs `predict`).
    """
    axis, at = choose_axis(problem, replicas)
    order = np.argsort(at, kind="stable")
    if len(order) > ROWS_SHOWN:
        order = order[np.linspace(0, len(order) - 1, ROWS_SHOWN).astype(int)]
    record: dict[str, Any] = {
        "column": replicas.column,
        "along": axis,
        "rows": replicas.rows,
        "at": at[order].tolist(),
        "observed": None if replicas.observed is None else replicas.observed[order].tolist(),
    }
    for prefix, draws in (("expected", replicas.expected), ("new", replicas.simulated)):
        if draws is not None:
            low, high = np.quantile(draws[:, order], BAND, axis=0)
            record |= {
                f"{prefix}_mean": draws[:, order].mean(axis=0).tolist(),
                f"{prefix}_low": low.tolist(),
                f"{prefix}_high": high.tolist(),
            }
    return record


def check_replicas(problem: Problem, replicas: Replicas) -> list[dict[str, Any]]:
    """Posterior predictive checks of one response, one plain dict each.

    The features: mean, sd, smallest and largest value; the share of observations inside the
    95 % band; and the correlation of neighbouring residuals along the axis of the picture, which
    shows a curve of the wrong shape. The p-value is the share of simulated data sets with a
    larger value, ties counting one half. Without `simulate` there are none.

    Band and middle of the last two come from every other simulated data set and are compared
    with the rest: a band holds more of the draws that it was made from than of new ones.
    """
    y, simulated = replicas.observed, replicas.simulated
    if y is None or simulated is None or not np.all(np.isfinite(simulated)):
        return []
    compared = {name: _compare(f(y), f(simulated)) for name, f in _FEATURES.items()}
    model, rest = simulated[::2], simulated[1::2]
    low, high = np.quantile(model, BAND, axis=0)
    shares = [np.mean((x >= low) & (x <= high), axis=-1) for x in (y, rest)]
    compared["share inside the 95 % band"] = _compare(*shares)
    if y.size > 3:
        order = np.argsort(choose_axis(problem, replicas)[1], kind="stable")
        middle = model.mean(axis=0)
        near = [_neighbours((x - middle)[..., order]) for x in (y, rest)]
        compared["correlation of neighbouring residuals"] = _compare(*near)
    return [{"column": replicas.column, "check": name, **found} for name, found in compared.items()]


_FEATURES: dict[str, Callable[[np.ndarray], np.ndarray]] = {
    "mean": lambda x: np.mean(x, axis=-1),
    "sd": lambda x: np.std(x, axis=-1),
    "smallest value": lambda x: np.min(x, axis=-1),
    "largest value": lambda x: np.max(x, axis=-1),
}


def _neighbours(residuals: np.ndarray) -> np.ndarray:
    """Lag-one autocorrelation of residuals (..., rows); 0 where they do not vary."""
    x = residuals - residuals.mean(axis=-1, keepdims=True)
    power = np.sum(x**2, axis=-1)
    return np.sum(x[..., 1:] * x[..., :-1], axis=-1) / np.where(power > 0, power, 1.0)


def _compare(observed: Any, simulated: np.ndarray) -> dict[str, Any]:
    size = 1e-9 * (1.0 + np.abs(simulated).max())
    above = np.mean(simulated > observed + size)
    equal = np.mean(np.abs(simulated - observed) <= size)
    p = float(above + 0.5 * equal)
    low, high = np.quantile(simulated, BAND)
    return {
        "observed": float(observed),
        "low": float(low),
        "high": float(high),
        "p_value": p,
        "failed": bool(min(p, 1.0 - p) < EXTREME),
    }
