"""Densities of numbers on the whole line, and between two bounds."""

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
    log1p_square,
    log_beta,
    log_gamma_centre,
    log_rising,
    normal_log_density,
    power_log,
)
from evidence.distributions.supports import Between, Fraction, Real, check_order, fraction, real

__all__ = ["Beta", "Cauchy", "Normal", "StudentT", "Uniform"]

ONE_SD = 0.8413447460685429  # normal distribution function at 1: +-1 sd holds 68 %
CAUCHY_SD = math.tan(math.pi * (ONE_SD - 0.5))


@declared
class Normal(Distribution):
    """Normal distribution.

    Attributes
    ----------
    mean : float or array
        Mean [batch_shape], in the unit of x.
    sd : float or array
        Standard deviation [batch_shape], in the unit of x, above zero.
    """

    mean: Any = hyper("finite")
    sd: Any = hyper("positive")

    @property
    def support(self) -> Real:
        return real

    def log_prob(self, x: Any) -> jax.Array:
        return normal_log_density(*self._floats(x))

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, mean, sd = self._for_draws(sample_shape)
        return mean + sd * jax.random.normal(key, shape, dtype=float)

    def centre_and_spread(self) -> CentreSpread:
        return self._to_z_shape(*self._numbers())


@declared
class StudentT(Distribution):
    """Student's t distribution.

    Attributes
    ----------
    df : float or array
        Degrees of freedom [batch_shape], above zero.
    location : float or array
        Location [batch_shape], in the unit of x.
    scale : float or array
        Scale [batch_shape], in the unit of x, above zero; not the standard deviation.
    """

    df: Any = hyper("positive")
    location: Any = hyper("finite")
    scale: Any = hyper("positive")

    @property
    def support(self) -> Real:
        return real

    def log_prob(self, x: Any) -> jax.Array:
        x, df, location, scale = self._floats(x)
        r = (x - location) / (scale * jnp.sqrt(df))
        constant = log_rising(0.5 * df, 0.5) - 0.5 * jnp.log(math.pi * df) - jnp.log(scale)
        return constant - 0.5 * (df + 1.0) * log1p_square(r)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, df, location, scale = self._for_draws(sample_shape)
        return location + scale * jax.random.t(key, df, shape, dtype=float)

    def centre_and_spread(self) -> CentreSpread:
        from scipy.special import stdtrit

        df, location, scale = self._numbers()
        return self._to_z_shape(location, scale * stdtrit(df, ONE_SD))


@declared
class Cauchy(Distribution):
    """Cauchy distribution.

    Attributes
    ----------
    location : float or array
        Location [batch_shape], the median, in the unit of x.
    scale : float or array
        Scale [batch_shape], half the interquartile range, in the unit of x, above zero.
    """

    location: Any = hyper("finite")
    scale: Any = hyper("positive")

    @property
    def support(self) -> Real:
        return real

    def log_prob(self, x: Any) -> jax.Array:
        x, location, scale = self._floats(x)
        return -jnp.log(math.pi * scale) - log1p_square((x - location) / scale)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, location, scale = self._for_draws(sample_shape)
        return location + scale * jax.random.cauchy(key, shape, dtype=float)

    def centre_and_spread(self) -> CentreSpread:
        location, scale = self._numbers()
        return self._to_z_shape(location, CAUCHY_SD * scale)


@declared
class Uniform(Distribution):
    """Uniform distribution between two bounds.

    Attributes
    ----------
    low, high : float or array
        Bounds [batch_shape], in the unit of x, low below high.
    """

    low: Any = hyper("finite")
    high: Any = hyper("finite")

    def _check_together(self) -> None:
        check_order(self)

    @property
    def support(self) -> Between:
        return Between(self.low, self.high)

    def log_prob(self, x: Any) -> jax.Array:
        x, low, high = self._floats(x)
        return where_allowed((x < low) | (x > high), -jnp.log(high - low) + 0.0 * x)

    def log_prob_z(self, z: Any) -> jax.Array:
        z = self._floats(z)[0]
        return log_sigmoid(z, jnp) + log_sigmoid(-z, jnp)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, low, high = self._for_draws(sample_shape)
        return low + (high - low) * jax.random.uniform(key, shape, dtype=float)

    def centre_and_spread(self) -> CentreSpread:
        # the logit of a uniform variable is logistic
        return self._to_z_shape(0.0, math.pi / math.sqrt(3))


@declared
class Beta(Distribution):
    """Beta distribution on the fractions.

    Attributes
    ----------
    a, b : float or array
        The two shapes [batch_shape], above zero; the mean is a / (a + b).
    """

    a: Any = hyper("positive")
    b: Any = hyper("positive")

    @property
    def support(self) -> Fraction:
        return fraction

    def log_prob(self, x: Any) -> jax.Array:
        x, a, b = self._floats(x)
        forbidden = (x < 0) | (x > 1)
        x = jnp.where(forbidden, 0.5, x)
        at_one = x == 1
        rest = jnp.where(at_one, 0.0, jnp.log1p(-jnp.where(at_one, 0.5, x)))
        upper = jnp.where(at_one, power_log(b - 1.0, 0.0), (b - 1.0) * rest)
        return where_allowed(forbidden, power_log(a - 1.0, x) + upper - log_beta(a, b))

    def log_prob_z(self, z: Any) -> jax.Array:
        z, a, b = self._floats(z)
        return a * log_sigmoid(z, jnp) + b * log_sigmoid(-z, jnp) - log_beta(a, b)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, a, b = self._for_draws(sample_shape)
        return jax.random.beta(key, a, b, shape, dtype=float)

    def centre_and_spread(self) -> CentreSpread:
        (centre_a, sd_a), (centre_b, sd_b) = map(log_gamma_centre, self._numbers())
        return self._to_z_shape(centre_a - centre_b, np.hypot(sd_a, sd_b))
