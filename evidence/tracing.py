"""Tracing the user's functions once, and wording what goes wrong there.

JAX's own errors speak of tracers; these speak of the user's function, with what to type.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator, Mapping
from typing import Any

import jax
import numpy as np

from evidence.compiling import float64
from evidence.complaints import DataError, DeclarationError, EvidenceWarning, sentence

__all__ = ["count_terms", "reworded"]


@contextlib.contextmanager
def reworded(what: str) -> Iterator[None]:
    """Turn what goes wrong while tracing a user's function into a DeclarationError."""
    try:
        yield
    except (DeclarationError, DataError, EvidenceWarning) as error:
        # JAX adds a note about its own frames, which says nothing to the user
        notes = [note for note in getattr(error, "__notes__", []) if "JAX" not in note]
        error.__notes__ = notes
        raise
    except jax.errors.TracerArrayConversionError as error:
        raise DeclarationError(
            sentence(
                f"{what} passes a traced value to NumPy",
                _first_line(error),
                "Type jnp.exp(...) instead of np.exp(...), with `import jax.numpy as jnp`",
            )
        ) from error
    except (
        jax.errors.TracerBoolConversionError,
        jax.errors.ConcretizationTypeError,
        jax.errors.NonConcreteBooleanIndexError,
        jax.errors.TracerIntegerConversionError,
    ) as error:
        raise DeclarationError(
            sentence(
                f"{what} branches, loops, indexes or computes in Python on a traced value",
                _first_line(error),
                "Type jnp.where(condition, a, b) instead of `if`, with both branches finite, and "
                "jnp.exp(x) instead of math.exp(x)",
            )
        ) from error
    except Exception as error:
        raise DeclarationError(
            sentence(f"{what} could not be traced", f"{type(error).__name__}: {_first_line(error)}")
        ) from error


def count_terms(
    owner: str, terms: Callable[..., Any], dim: int, hyper: Any, data: Mapping[str, Any]
) -> tuple[int | None, tuple[str, ...]]:
    """Trace a log-likelihood once; return its number of terms and what it computes in float32.

    The number of terms is None for a scalar.

    Raises
    ------
    DeclarationError
        The function cannot be traced, or returns no float64 scalar or vector.
    """
    what = f"the log-likelihood of {owner!r}"
    with float64(), reworded(what):
        traced, result = jax.make_jaxpr(terms, return_shape=True)(np.zeros(dim), hyper, dict(data))
    if not hasattr(result, "shape") or not hasattr(result, "dtype"):
        raise DeclarationError(
            sentence(
                f"{what} must return a number or an array with one term per observation",
                type(result).__name__,
                "Return the terms, e.g. Normal(mean, sd).log_prob(data['y'])",
            )
        )
    if len(result.shape) > 1:
        raise DeclarationError(
            sentence(
                f"{what} must return a scalar or one term per observation, shape (n,)",
                f"shape {tuple(result.shape)}",
                "An (n, 1) array against an (n,) array gives (n, n): check with .shape, and use "
                "jnp.ravel or .sum(axis=...)",
            )
        )
    if np.dtype(result.dtype) != np.float64:
        raise DeclarationError(
            sentence(
                f"{what} must return float64 values",
                str(result.dtype),
                "Remove casts such as .astype(jnp.float32), and make closed-over arrays with NumPy",
            )
        )
    terms_count = int(result.shape[0]) if result.shape else None
    return terms_count, _float32_steps(traced.jaxpr)


def _float32_steps(jaxpr: Any) -> tuple[str, ...]:
    """Names of the places where a traced function casts down to float32."""
    found: list[str] = []
    stack = [jaxpr]
    while stack:
        for equation in stack.pop().eqns:
            if equation.params.get("new_dtype") == np.float32:
                found.append("a cast to float32 inside the function")
            for value in equation.params.values():
                for inner in value if isinstance(value, (tuple, list)) else (value,):
                    inner = getattr(inner, "jaxpr", inner)
                    if hasattr(inner, "eqns"):
                        stack.append(inner)
    return tuple(dict.fromkeys(found))


def _first_line(error: BaseException) -> str:
    lines = str(error).strip().splitlines()
    return lines[0][:300] if lines else type(error).__name__
