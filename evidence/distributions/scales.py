"""Densities of positive numbers: scales, rates, waiting times.

Where a density is written in z = log x (``log_prob_z``) the log Jacobian has been worked in by
hand, so that it is exact where exp has run out of digits.
"""

from __future__ import annotations

import math
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.distributions.base import CentreSpread, Distribution, where_allowed
from evidence.distributions.coordinates import log_sigmoid
from evidence.distributions.fields import declared, hyper
from evidence.distributions.special import (
    HALF_LOG_2PI,
    log1p_square,
    log_gamma,
    log_gamma_centre,
    normal_log_density,
    power_log,
)
from evidence.distributions.supports import Positive, positive

__all__ = ["Exponential", "Gamma", "HalfCauchy", "HalfNormal", "InverseGamma", "LogNormal"]

LOG_2 = math.log(2.0)
EULER_GAMMA = 0.5772156649015329


@declared
class HalfNormal(Distribution):
    """Absolute value of a normal variable of mean zero.

    Attributes
    ----------
    sd : float or array
        Standard deviation [batch_shape] of that normal variable, in the unit of x, above zero.
    """

    sd: Any = hyper("positive")

    @property
    def support(self) -> Positive:
        return positive

    def log_prob(self, x: Any) -> jax.Array:
        x, sd = self._floats(x)
        below = x < 0
        return where_allowed(below, LOG_2 + normal_log_density(jnp.where(below, 0.0, x), 0.0, sd))

    def log_prob_z(self, z: Any) -> jax.Array:
        z, sd = self._floats(z)
        u = z - jnp.log(sd)
        return LOG_2 - HALF_LOG_2PI + u - 0.5 * jnp.exp(2.0 * u)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, sd = self._for_draws(sample_shape)
        return jnp.abs(sd * jax.random.normal(key, shape, dtype=float))

    def centre_and_spread(self) -> CentreSpread:
        # log of a chi variable with one degree of freedom: digamma(1/2) and trigamma(1/2)
        (sd,) = self._numbers()
        return self._to_z_shape(np.log(sd) - 0.5 * (EULER_GAMMA + LOG_2), math.pi / math.sqrt(8))


@declared
class LogNormal(Distribution):
    """Exponential of a normal variable.

    Attributes
    ----------
    log_mean : float or array
        Mean [batch_shape] of log x.
    log_sd : float or array
        Standard deviation [batch_shape] of log x, above zero.
    """

    log_mean: Any = hyper("finite")
    log_sd: Any = hyper("positive")

    @property
    def support(self) -> Positive:
        return positive

    def log_prob(self, x: Any) -> jax.Array:
        x, log_mean, log_sd = self._floats(x)
        forbidden = x <= 0
        log_x = jnp.log(jnp.where(forbidden, 1.0, x))
        return where_allowed(forbidden, normal_log_density(log_x, log_mean, log_sd) - log_x)

    def log_prob_z(self, z: Any) -> jax.Array:
        return normal_log_density(*self._floats(z))

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, log_mean, log_sd = self._for_draws(sample_shape)
        return jnp.exp(log_mean + log_sd * jax.random.normal(key, shape, dtype=float))

    def centre_and_spread(self) -> CentreSpread:
        return self._to_z_shape(*self._numbers())


@declared
class Gamma(Distribution):
    """Gamma distribution with a shape and a rate.

    Attributes
    ----------
    alpha : float or array
        The shape [batch_shape], above zero (``shape=`` is the array's shape).
    rate : float or array
        Rate [batch_shape], per unit of x, above zero; the mean is alpha / rate.
    """

    alpha: Any = hyper("positive", label="shape")
    rate: Any = hyper("positive")

    @property
    def support(self) -> Positive:
        return positive

    def log_prob(self, x: Any) -> jax.Array:
        x, alpha, rate = self._floats(x)
        below = x < 0
        x = jnp.where(below, 1.0, x)
        constant = alpha * jnp.log(rate) - log_gamma(alpha)
        return where_allowed(below, power_log(alpha - 1.0, x) - rate * x + constant)

    def log_prob_z(self, z: Any) -> jax.Array:
        z, alpha, rate = self._floats(z)
        u = z + jnp.log(rate)
        return alpha * u - jnp.exp(u) - log_gamma(alpha)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, alpha, rate = self._for_draws(sample_shape)
        return jax.random.gamma(key, alpha, shape, dtype=float) / rate

    def centre_and_spread(self) -> CentreSpread:
        alpha, rate = self._numbers()
        centre, spread = log_gamma_centre(alpha)
        return self._to_z_shape(centre - np.log(rate), spread)


@declared
class InverseGamma(Distribution):
    """Inverse of a gamma variable.

    Attributes
    ----------
    alpha : float or array
        The shape [batch_shape], above zero (``shape=`` is the array's shape).
    scale : float or array
        Scale [batch_shape], in the unit of x, above zero; the mode is scale / (alpha + 1).
    """

    alpha: Any = hyper("positive", label="shape")
    scale: Any = hyper("positive")

    @property
    def support(self) -> Positive:
        return positive

    def log_prob(self, x: Any) -> jax.Array:
        x, alpha, scale = self._floats(x)
        forbidden = x <= 0
        x = jnp.where(forbidden, 1.0, x)
        constant = alpha * jnp.log(scale) - log_gamma(alpha)
        value = constant - (alpha + 1.0) * jnp.log(x) - scale / x
        return where_allowed(forbidden, value)

    def log_prob_z(self, z: Any) -> jax.Array:
        z, alpha, scale = self._floats(z)
        u = jnp.log(scale) - z
        return alpha * u - jnp.exp(u) - log_gamma(alpha)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, alpha, scale = self._for_draws(sample_shape)
        return scale * jnp.exp(-jax.random.loggamma(key, alpha, shape, dtype=float))

    def centre_and_spread(self) -> CentreSpread:
        alpha, scale = self._numbers()
        centre, spread = log_gamma_centre(alpha)
        return self._to_z_shape(np.log(scale) - centre, spread)


@declared
class Exponential(Distribution):
    """Exponential distribution.

    Attributes
    ----------
    rate : float or array
        Rate [batch_shape], per unit of x, above zero; the mean is 1 / rate.
    """

    rate: Any = hyper("positive")

    @property
    def support(self) -> Positive:
        return positive

    def log_prob(self, x: Any) -> jax.Array:
        x, rate = self._floats(x)
        below = x < 0
        return where_allowed(below, jnp.log(rate) - rate * jnp.where(below, 0.0, x))

    def log_prob_z(self, z: Any) -> jax.Array:
        z, rate = self._floats(z)
        u = z + jnp.log(rate)
        return u - jnp.exp(u)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, rate = self._for_draws(sample_shape)
        return jax.random.exponential(key, shape, dtype=float) / rate

    def centre_and_spread(self) -> CentreSpread:
        # digamma(1) and trigamma(1)
        (rate,) = self._numbers()
        return self._to_z_shape(-EULER_GAMMA - np.log(rate), math.pi / math.sqrt(6))


@declared
class HalfCauchy(Distribution):
    """Absolute value of a Cauchy variable of location zero.

    Attributes
    ----------
    scale : float or array
        Scale [batch_shape], the median, in the unit of x, above zero.
    """

    scale: Any = hyper("positive")

    @property
    def support(self) -> Positive:
        return positive

    def log_prob(self, x: Any) -> jax.Array:
        x, scale = self._floats(x)
        below = x < 0
        r = jnp.where(below, 0.0, x) / scale
        return where_allowed(below, math.log(2.0 / math.pi) - jnp.log(scale) - log1p_square(r))

    def log_prob_z(self, z: Any) -> jax.Array:
        z, scale = self._floats(z)
        u = z - jnp.log(scale)
        return math.log(2.0 / math.pi) + u + log_sigmoid(-2.0 * u, jnp)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, scale = self._for_draws(sample_shape)
        return jnp.abs(scale * jax.random.cauchy(key, shape, dtype=float))

    def centre_and_spread(self) -> CentreSpread:
        # the log of a half-Cauchy variable has a hyperbolic secant density, of sd pi / 2
        (scale,) = self._numbers()
        return self._to_z_shape(np.log(scale), math.pi / 2)
