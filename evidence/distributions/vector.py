"""Densities of vectors: one draw is a whole last axis."""

from __future__ import annotations

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jax.scipy.linalg import solve_triangular

from evidence.complaints import DeclarationError, sentence
from evidence.distributions.base import CentreSpread, Distribution, as_floats, where_allowed
from evidence.distributions.fields import declared, hyper, is_number
from evidence.distributions.special import HALF_LOG_2PI, log_gamma, log_gamma_centre, power_log
from evidence.distributions.supports import Real, Simplex, real, simplex

__all__ = ["Dirichlet", "MultivariateNormal"]

SUM_TOLERANCE = 1e-6  # how far the components of a simplex may be from summing to one


class VectorDistribution(Distribution):
    """A density whose draws are vectors along the last axis."""

    def _vector(self, x: Any) -> jax.Array:
        """Return x as floats [..., k], broadcast with ``shape``."""
        x = jnp.asarray(x, dtype=float)
        return jnp.broadcast_to(x, (*np.broadcast_shapes(x.shape[:-1], self.shape), x.shape[-1]))


@declared
class Dirichlet(VectorDistribution):
    """Dirichlet distribution on the simplex, per unit of all components but the last.

    Attributes
    ----------
    concentration : array
        Concentrations [*batch_shape, k], above zero, k at least 2.
    """

    concentration: Any = hyper("positive", event_rank=1)

    def _check_together(self) -> None:
        if np.shape(self.concentration)[-1] < 2:
            expected = "an array of two numbers or more"
            remedy = "Type concentration=[1.0, 1.0, 1.0], one number for each component"
            raise self._complain("concentration", expected, self.concentration, remedy)

    @property
    def event_shape(self) -> tuple[int, ...]:
        return np.shape(self.concentration)[-1:]

    @property
    def support(self) -> Simplex:
        return simplex

    def _constant(self, concentration: jax.Array) -> jax.Array:
        total = log_gamma(jnp.sum(concentration, axis=-1))
        return total - jnp.sum(log_gamma(concentration), axis=-1)

    def log_prob(self, x: Any) -> jax.Array:
        x, concentration = as_floats(self._vector(x), self.concentration)
        outside = jnp.abs(jnp.sum(x, axis=-1) - 1.0) > SUM_TOLERANCE
        outside = outside | jnp.any(x < 0, axis=-1)
        x = jnp.where(outside[..., None], 1.0, x)
        # a zero with a negative power beside one with a positive power would be inf - inf
        vanishes = jnp.any((x == 0) & (concentration > 1.0), axis=-1)
        x = jnp.where(vanishes[..., None], 1.0, x)
        powers = jnp.sum(power_log(concentration - 1.0, x), axis=-1)
        return where_allowed(outside | vanishes, powers + self._constant(concentration))

    def log_prob_z(self, z: Any) -> jax.Array:
        z, concentration = as_floats(self._vector(z), self.concentration)
        log_x = simplex.log_forward(z)
        return jnp.sum(concentration * log_x, axis=-1) + self._constant(concentration)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape = (*sample_shape, *self.batch_shape)
        concentration = jnp.asarray(self.concentration, dtype=float)
        concentration = jnp.broadcast_to(concentration, shape + self.event_shape)
        return jax.random.dirichlet(key, concentration, shape, dtype=float)

    def centre_and_spread(self) -> CentreSpread:
        centre, spread = log_gamma_centre(*self._numbers())
        centre = centre[..., :-1] - centre[..., -1:]
        return self._to_z_shape(centre, np.hypot(spread[..., :-1], spread[..., -1:]))


@declared
class MultivariateNormal(VectorDistribution):
    """Normal distribution of a vector.

    Attributes
    ----------
    mean : array
        Mean [*batch_shape, k], in the unit of x.
    covariance : array
        Covariance [*batch_shape, k, k], symmetric and positive definite.
    """

    mean: Any = hyper("finite", event_rank=1)
    covariance: Any = hyper("finite", event_rank=2)

    def _check_together(self) -> None:
        k = np.shape(self.mean)[-1]
        if np.shape(self.covariance)[-2:] != (k, k):
            shapes = f"mean {np.shape(self.mean)} and covariance {np.shape(self.covariance)}"
            expected = f"MultivariateNormal: covariance must be of shape [{k}, {k}] for this mean"
            remedy = f"Type covariance=np.eye({k}) for independent components"
            raise DeclarationError(sentence(expected, shapes, remedy))
        if is_number(self.covariance):
            self._check_covariance(self.covariance)

    def _check_covariance(self, covariance: np.ndarray) -> None:
        transposed = np.swapaxes(covariance, -1, -2)
        if np.any(np.abs(covariance - transposed) > 1e-9 * np.max(np.abs(covariance))):
            remedy = "Type covariance=(c + c.T) / 2 if rounding is the cause"
            raise self._complain("covariance", "symmetric", covariance, remedy)
        try:
            np.linalg.cholesky(covariance)
        except np.linalg.LinAlgError:
            smallest = float(np.min(np.linalg.eigvalsh(covariance)))
            got = f"smallest eigenvalue {smallest:g}"
            subject = "MultivariateNormal: covariance must be positive definite"
            remedy = "Drop the components that are combinations of others, or type np.eye(k)"
            raise DeclarationError(sentence(subject, got, remedy)) from None

    @property
    def event_shape(self) -> tuple[int, ...]:
        return np.shape(self.mean)[-1:]

    @property
    def support(self) -> Real:
        return real

    def _factor(self) -> jax.Array:
        return jnp.linalg.cholesky(jnp.asarray(self.covariance, dtype=float))

    def log_prob(self, x: Any) -> jax.Array:
        deviation, mean = as_floats(self._vector(x), self.mean)
        deviation = deviation - mean
        factor = self._factor()
        half_log_det = jnp.sum(jnp.log(jnp.diagonal(factor, axis1=-2, axis2=-1)), axis=-1)
        white = whiten(factor, deviation)
        squares = jnp.sum(jnp.square(white), axis=-1)
        squares, half_log_det = as_floats(squares, half_log_det)
        return -0.5 * squares - half_log_det - self.event_shape[0] * HALF_LOG_2PI

    def log_prob_z(self, z: Any) -> jax.Array:
        return self.log_prob(z)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape = (*sample_shape, *self.batch_shape, *self.event_shape)
        white = jax.random.normal(key, shape, dtype=float)
        mean, factor = jnp.asarray(self.mean, dtype=float), self._factor()
        factor = jnp.broadcast_to(factor, (*shape[:-1], *factor.shape[-2:]))
        return jnp.broadcast_to(mean, shape) + jnp.einsum("...ij,...j->...i", factor, white)

    def centre_and_spread(self) -> CentreSpread:
        mean, covariance = self._numbers()
        return self._to_z_shape(mean, np.sqrt(np.diagonal(covariance, axis1=-2, axis2=-1)))


def whiten(factor: jax.Array, deviation: jax.Array) -> jax.Array:
    """Solve factor @ white = deviation along the last axis.

    Parameters
    ----------
    factor : jax.Array
        Lower triangular [..., k, k].
    deviation : jax.Array
        Right-hand sides [..., k]; one factor [k, k] is solved once for all of them.
    """
    k = deviation.shape[-1]
    if factor.ndim == 2:
        columns = jnp.reshape(deviation, (-1, k)).T
        return jnp.reshape(solve_triangular(factor, columns, lower=True).T, deviation.shape)
    batch = np.broadcast_shapes(factor.shape[:-2], deviation.shape[:-1])
    factor = jnp.broadcast_to(factor, (*batch, k, k))
    columns = jnp.broadcast_to(deviation, (*batch, k))[..., None]
    return solve_triangular(factor, columns, lower=True)[..., 0]
