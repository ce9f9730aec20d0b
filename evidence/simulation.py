"""Parameters drawn from the priors, and data predicted or simulated at given parameters.

The user's `predict` and `simulate` are traced once and mapped over draws; the same seed gives the
same digits whatever random generator the user's session has chosen.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import jax
import numpy as np

from evidence.compiling import Program, float64
from evidence.complaints import DeclarationError, sentence
from evidence.layout import Named, lay_out, prior_of
from evidence.model import Model
from evidence.tables import named_arrays
from evidence.tracing import reworded

__all__ = ["Columns", "draw_prior", "finite_draws", "respond", "response_shapes"]

Columns = dict[str, np.ndarray]
GENERATOR = "threefry2x32"  # of JAX: the session's default may be another
NUMBERS_AT_ONCE = 4_000_000
# samplers of counts compile for 10 s, or hastily for 2 s to code that takes 20 us more a number
HASTY_NUMBERS = 400_000
PARTS = {"expected": "predict", "simulated": "simulate"}


def draw_prior(model: Model, data: Any, number: int, *, seed: Any) -> Columns:
    """Draw parameters from the priors, each prior function at the draws before it.

    Parameters
    ----------
    model : Model
    data : mapping of arrays
        Seen by priors that are functions of the data.
    number : int
    seed : int or sequence of int

    Returns
    -------
    dict
        Name -> (number, *shape) [natural units], in the order of declaration.

    Raises
    ------
    DeclarationError
        The candidate is a bare log posterior, or a prior cannot be traced.
    """
    if model.bare:
        raise DeclarationError(
            sentence(
                f"{model.name!r} has no priors to draw from: it is a bare log posterior",
                remedy="Declare it with ev.Model(name, priors, log_likelihood)",
            )
        )
    hyper, arrays = model.hyperparameters(), dict(named_arrays(data))
    lay_out(model, hyper, arrays)
    if not model.parameters:
        return {}
    numbers = _numbers(seed, number)
    with reworded(f"the priors of {model.name!r}"):
        drawn = Program(_prior_program(model), hasty=True)(numbers, hyper, arrays)
    return {name: np.asarray(drawn[name]) for name in model.parameters}


def _prior_program(model: Model) -> Callable[..., Any]:
    def one(number: Any, hyper: Any, data: Any) -> dict[str, Any]:
        key = jax.random.key(number, impl=GENERATOR)
        values = Named(hyper["constants"], "parameter", model.name)
        columns = Named(data, "column", model.name)
        for place, name in enumerate(model.parameters):
            prior = prior_of(model, name, hyper, values, columns)
            values[name] = prior.sample(jax.random.fold_in(key, place))
        return {name: values[name] for name in model.parameters}

    def evidence_prior_draws(numbers: Any, hyper: Any, data: Any) -> dict[str, Any]:
        return jax.vmap(lambda number: one(number, hyper, data))(numbers)

    return evidence_prior_draws


def respond(
    model: Model,
    values: Mapping[str, np.ndarray],
    data: Any,
    number: int,
    *,
    seed: Any,
    parts: tuple[str, ...] = ("expected", "simulated"),
) -> dict[str, Columns]:
    """Predict and simulate at given parameters.

    Parameters
    ----------
    model : Model
    values : mapping
        Name -> (number, *shape) [natural units].
    data : mapping of arrays
        What `predict` and `simulate` see as ``data``.
    number : int
        How many.
    seed : int or sequence of int
    parts : tuple of {"expected", "simulated"}
        What is wanted; left out where the candidate does not declare it.

    Returns
    -------
    dict
        Part -> column -> (number, ...).

    Raises
    ------
    DeclarationError
        One of the user's functions cannot be traced, or does not return named columns.
    """
    wanted = tuple(part for part in parts if getattr(model, PARTS[part]) is not None)
    if not wanted:
        return {}
    hyper, arrays = model.hyperparameters(), dict(named_arrays(data))
    numbers, values = _numbers(seed, number), dict(values)
    rows_each = _rows(arrays)
    hasty = number * rows_each <= HASTY_NUMBERS
    program = Program(_response_program(model, wanted), hasty=hasty)
    at_once = int(np.clip(NUMBERS_AT_ONCE // rows_each, 1, number))
    pieces = []
    with reworded(f"{' or '.join(PARTS[part] for part in wanted)} of {model.name!r}"):
        for first in range(0, number, at_once):
            rows = np.arange(first, first + at_once).clip(max=number - 1)
            here = {name: array[rows] for name, array in values.items()}
            found = program(here, numbers[rows], hyper, arrays)
            count = min(at_once, number - first)
            pieces.append(jax.tree_util.tree_map(lambda x, n=count: np.asarray(x)[:n], found))
    return jax.tree_util.tree_map(lambda *x: np.concatenate(x), *pieces)


def _response_program(model: Model, wanted: tuple[str, ...]) -> Callable[..., Any]:
    def one(values: Any, number: Any, hyper: Any, data: Any) -> dict[str, Any]:
        p = Named({**values, **hyper["constants"]}, "parameter", model.name)
        columns = Named(data, "column", model.name)
        found = {}
        if "expected" in wanted:
            found["expected"] = _named(model, "predict", model.predict(p, columns))
        if "simulated" in wanted:
            key = jax.random.key(number, impl=GENERATOR)
            found["simulated"] = _named(model, "simulate", model.simulate(key, p, columns))
        return found

    def evidence_responses(values: Any, numbers: Any, hyper: Any, data: Any) -> dict[str, Any]:
        return jax.vmap(lambda v, number: one(v, number, hyper, data))(values, numbers)

    return evidence_responses


def _named(model: Model, what: str, columns: Any) -> dict[str, Any]:
    if not isinstance(columns, Mapping) or not columns:
        raise DeclarationError(
            sentence(
                f"{what} of {model.name!r} must return a mapping of column name to values",
                "an empty mapping" if isinstance(columns, Mapping) else type(columns).__name__,
                f"Return {{'y': ...}} from {what}(...)",
            )
        )
    return {str(name): jax.numpy.asarray(value) for name, value in columns.items()}


def response_shapes(model: Model, data: Any, part: str = "simulated") -> dict[str, Any]:
    """Shape and type of what one `simulate` or `predict` returns, by tracing alone.

    Returns
    -------
    dict
        Column -> jax.ShapeDtypeStruct of one draw.

    Raises
    ------
    DeclarationError
        As :func:`respond`.
    """
    hyper, arrays = model.hyperparameters(), dict(named_arrays(data))
    blocks = lay_out(model, hyper, arrays).blocks
    values = {b.name: np.zeros((1, *b.shape)) for b in blocks}
    with float64(), reworded(f"{PARTS[part]} of {model.name!r}"):
        program = _response_program(model, (part,))
        found = jax.eval_shape(program, values, np.zeros(1, np.int64), hyper, arrays)[part]
    return {k: jax.ShapeDtypeStruct(x.shape[1:], x.dtype) for k, x in found.items()}


def finite_draws(columns: Mapping[str, np.ndarray], number: int) -> tuple[np.ndarray, list[str]]:
    """Which draws (number,) are finite in every column, and for the others, in which not."""
    usable, reasons = np.ones(number, bool), [""] * number
    for name, array in columns.items():
        if array.dtype.kind != "f":
            continue
        here = np.isfinite(array.reshape(number, -1))
        for place in np.flatnonzero(~here.all(axis=1) & usable):
            count = int((~here[place]).sum())
            reasons[place] = f"{name!r} holds {count} nan or inf"
        usable &= here.all(axis=1)
    return usable, reasons


def _numbers(seed: Any, number: int) -> np.ndarray:
    parts = [seed] if isinstance(seed, int | np.integer) else list(seed)
    return np.random.default_rng([*parts, 0x51B]).integers(2**31, size=number)


def _rows(arrays: Mapping[str, np.ndarray]) -> int:
    return max([1, *(np.shape(x)[0] for x in arrays.values() if np.ndim(x))])
