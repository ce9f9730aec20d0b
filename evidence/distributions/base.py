"""What every density has in common: shapes, the density in both coordinates, centre and spread.

A distribution's hyperparameters are leaves of a pytree and its ``shape`` is static, so that other
numbers, or derivatives with respect to them, need no new program.
"""

from __future__ import annotations

import dataclasses
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.complaints import DeclarationError, sentence
from evidence.distributions.fields import Declared, float32_names

__all__ = ["CentreSpread", "Distribution", "as_floats", "where_allowed"]

CentreSpread = tuple[np.ndarray, np.ndarray]


def as_floats(*values: Any) -> list[jax.Array]:
    """Return the values in JAX's current float type, ranks made equal where not scalar."""
    arrays = [jnp.asarray(value, dtype=float) for value in values]
    rank = max(array.ndim for array in arrays)
    return [
        a if a.ndim in (0, rank) else jnp.reshape(a, (1,) * (rank - a.ndim) + a.shape)
        for a in arrays
    ]


def where_allowed(forbidden: Any, value: jax.Array) -> jax.Array:
    """Return the log density; -inf with zero gradient where x is forbidden or the density zero.

    ``value`` must have been computed with a harmless x there, or its derivatives are nan.
    """
    return jnp.where(forbidden | (value == -jnp.inf), -jnp.inf, value)


@dataclasses.dataclass(frozen=True, eq=False, repr=False)
class Distribution(Declared):
    """A density with a support, a sampler, and a centre and spread in the unconstrained z.

    Attributes
    ----------
    shape : tuple of int
        Shape of an array of independent parameters that share this prior; the package sums
        over them.
    """

    shape: tuple[int, ...] = dataclasses.field(default=(), kw_only=True)

    def _static(self) -> tuple[int, ...]:
        return self.shape

    def _restore(self, static: Any) -> None:
        object.__setattr__(self, "shape", static)

    def __post_init__(self) -> None:
        object.__setattr__(self, "shape", self._checked_shape(self.shape))
        super().__post_init__()
        try:
            _ = self.batch_shape
        except ValueError:
            shapes = {name: np.shape(getattr(self, name)) for name in self._leaf_names}
            expected = "one that broadcasts with the hyperparameters' shapes"
            got = f"shape={self.shape} beside {shapes}"
            subject = f"{self._word()}: shape must be {expected}"
            remedy = "Give each hyperparameter one number, or as many as shape says"
            raise DeclarationError(sentence(subject, got, remedy)) from None

    def _checked_shape(self, shape: Any) -> tuple[int, ...]:
        given = (shape,) if isinstance(shape, int | np.integer) else shape
        whole = isinstance(given, tuple | list) and all(
            isinstance(n, int | np.integer) and not isinstance(n, bool) and n >= 0 for n in given
        )
        if not whole:
            expected = "a tuple of whole numbers"
            raise self._complain("shape", expected, shape, "Type shape=(3,) for three parameters")
        return tuple(int(n) for n in given)

    @property
    def hyperparameters(self) -> tuple[tuple[str, str], ...]:
        """Pairs (field, label) of the hyperparameters that were given."""
        return tuple(
            (field.name, field.metadata["label"] or field.name)
            for field in self._leaf_fields
            if getattr(self, field.name) is not None
        )

    @property
    def float32_leaves(self) -> tuple[str, ...]:
        """Names of hyperparameters held in single precision."""
        return float32_names((name, getattr(self, name)) for name in self._leaf_names)

    @property
    def batch_shape(self) -> tuple[int, ...]:
        """Shape of the array of independent draws: hyperparameters broadcast with ``shape``."""
        shapes = [self.shape]
        for field in self._leaf_fields:
            leaf, rank = getattr(self, field.name), field.metadata["event_rank"]
            if leaf is not None:
                full = np.shape(leaf)
                shapes.append(full[: len(full) - rank])
        return np.broadcast_shapes(*shapes)

    @property
    def event_shape(self) -> tuple[int, ...]:
        """Shape of one draw: () for numbers, (k,) for vectors."""
        return ()

    @property
    def support(self) -> Any:
        """The support: where the density lives, with its map from the unconstrained z."""
        raise NotImplementedError

    def log_prob(self, x: Any) -> jax.Array:
        """Return the log density with all its constants.

        Parameters
        ----------
        x : array_like
            Values in natural units, [..., *event_shape], broadcast with ``batch_shape``.

        Returns
        -------
        jax.Array
            Log density [...] in nats per natural unit, event axes summed; -inf outside the
            support, with zero gradient there. nan where a traced hyperparameter is invalid.
        """
        raise NotImplementedError

    def log_prob_z(self, z: Any) -> jax.Array:
        """Return the log density of the unconstrained coordinate, log Jacobian included.

        Equal to ``log_prob(forward(z)) + log_jacobian(z)``, but written in z wherever that is
        exact far in the tails, where ``forward(z)`` rounds to an edge of the support.

        Parameters
        ----------
        z : array_like
            Unconstrained coordinates, [..., *event shape of z].

        Returns
        -------
        jax.Array
            Log density [...] in nats, event axes summed.
        """
        support = self.support
        return self.log_prob(support.forward(z)) + support.log_jacobian(z)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        """Draw values in natural units.

        Parameters
        ----------
        key : jax.Array
            A JAX random key.
        sample_shape : tuple of int
            Shape of the array of draws.

        Returns
        -------
        jax.Array
            Draws [*sample_shape, *batch_shape, *event_shape].
        """
        raise NotImplementedError

    def centre_and_spread(self) -> CentreSpread:
        """Return where the prior lies in the unconstrained coordinate, in closed form.

        Returns
        -------
        centre, spread : numpy.ndarray
            Mean and standard deviation of z [*batch_shape, *event shape of z]; for tails too
            heavy for these, the median and the half-width that holds 68 %.
        """
        raise NotImplementedError

    def _to_z_shape(self, centre: Any, spread: Any) -> CentreSpread:
        shape = self.support.z_shape(self.batch_shape + self.event_shape)
        return tuple(np.array(np.broadcast_to(a, shape), np.float64) for a in (centre, spread))

    def _leaves(self) -> list[Any]:
        return [leaf for name in self._leaf_names if (leaf := getattr(self, name)) is not None]

    def _floats(self, x: Any) -> list[jax.Array]:
        """Return x and the given hyperparameters as float arrays that broadcast."""
        if self.shape:
            x = jnp.asarray(x, dtype=float)
            x = jnp.broadcast_to(x, np.broadcast_shapes(x.shape, self.shape))
        return as_floats(x, *self._leaves())

    def _numbers(self) -> list[np.ndarray]:
        """Return the given hyperparameters as NumPy float64 arrays."""
        return [np.asarray(leaf, dtype=np.float64) for leaf in self._leaves()]

    def _for_draws(self, sample_shape: tuple[int, ...]) -> list[Any]:
        """Return the shape of the draws and the hyperparameters broadcast to it."""
        shape = (*sample_shape, *self.batch_shape)
        return [shape, *(jnp.broadcast_to(leaf, shape) for leaf in as_floats(*self._leaves()))]
