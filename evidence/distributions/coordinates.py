"""Small functions the supports are made of, in JAX and in NumPy; words for array elements."""

from __future__ import annotations

import types
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.distributions.fields import is_number

__all__ = ["Index", "bound_words", "element", "log_sigmoid", "log_softmax", "sigmoid"]

Index = int | tuple[int, ...] | None


def element(name: str, index: Any) -> str:
    """Return "rate" or "rate[2]" or "rate[1, 2]"."""
    if index is None or index == ():
        return name
    index = index if isinstance(index, tuple) else (index,)
    return f"{name}[{', '.join(str(i) for i in index)}]"


def bound_words(bound: Any, index: Index, x_shape: Any, otherwise: str) -> str:
    """Return the bound as a number where it is known for this element, else in words."""
    if not is_number(bound):
        return otherwise
    if np.ndim(bound) and index is not None and x_shape is not None:
        bound = np.broadcast_to(bound, x_shape)[index]
    if np.ndim(bound):
        return otherwise
    return f"{bound:g}" if bound >= 0 else f"({bound:g})"


def sigmoid(z: Any, xp: types.ModuleType) -> Any:
    """Return 1 / (1 + exp(-z)) without overflow, with exact derivatives under JAX."""
    if xp is not np:
        return jax.nn.sigmoid(z)
    small = np.exp(-np.abs(z))
    return np.where(np.asarray(z) < 0, small, 1.0) / (1.0 + small)


def log_sigmoid(z: Any, xp: types.ModuleType) -> Any:
    """Return log sigmoid(z), exact in both tails."""
    if xp is not np:
        return _log_sigmoid(jnp.asarray(z))
    return np.minimum(z, 0.0) - np.log1p(np.exp(-np.abs(z)))


@jax.custom_jvp
def _log_sigmoid(z: jax.Array) -> jax.Array:
    return jnp.minimum(z, 0.0) - jnp.log1p(jnp.exp(-jnp.abs(z)))


@_log_sigmoid.defjvp
def _log_sigmoid_slope(primals: tuple, tangents: tuple) -> tuple:
    # half of what logaddexp takes to compile, and finite at infinity
    (z,), (tangent,) = primals, tangents
    return _log_sigmoid(z), tangent * jax.nn.sigmoid(-z)


def log_softmax(z: Any, xp: types.ModuleType) -> Any:
    """Return z - logsumexp(z) along the last axis."""
    if xp is not np:
        return jax.nn.log_softmax(z, axis=-1)
    shifted = z - z.max(axis=-1, keepdims=True)
    return shifted - np.log(np.exp(shifted).sum(axis=-1, keepdims=True))
