"""Probabilities of counts, for likelihoods: a count has no unconstrained coordinate.

Each may be given its parameter as a probability or rate, or as a logit or log rate; the second
keeps all digits where the first would round to 0, to 1 or to infinity.
"""

from __future__ import annotations

from typing import Any

import jax
import jax.numpy as jnp

from evidence.complaints import DeclarationError, sentence
from evidence.distributions.base import Distribution, where_allowed
from evidence.distributions.coordinates import log_sigmoid
from evidence.distributions.fields import declared, hyper
from evidence.distributions.special import log_binomial, log_gamma, log_rising, power_log
from evidence.distributions.supports import Discrete, discrete

__all__ = ["Bernoulli", "Binomial", "NegativeBinomial", "Poisson"]


class CountDistribution(Distribution):
    """A distribution of whole numbers, zero and above."""

    _either: tuple[str, ...] = ()

    def _check_together(self) -> None:
        given = [name for name in self._either if getattr(self, name) is not None]
        if self._either and len(given) != 1:
            subject = f"{self._word()}: give exactly one of {' and '.join(self._either)}"
            remedy = f"Type {self._word()}(..., {self._either[1]}=...) or the other alone"
            raise DeclarationError(sentence(subject, "both" if given else "neither", remedy))

    @property
    def support(self) -> Discrete:
        return discrete

    def log_prob_z(self, z: Any) -> jax.Array:  # noqa: ARG002
        raise self.support._refuse()

    def centre_and_spread(self) -> Any:
        raise self.support._refuse()


def scaled(count: jax.Array, value: jax.Array) -> jax.Array:
    """Return count * value, zero where the count is zero though the value may be infinite."""
    none = count == 0
    return jnp.where(none, 0.0, count * jnp.where(none, 0.0, value))


def log_successes(yes: jax.Array, no: jax.Array, chance: jax.Array, is_logit: bool) -> jax.Array:
    """Return yes log p + no log(1 - p), from the probability or from its logit."""
    if is_logit:
        return scaled(yes, log_sigmoid(chance, jnp)) + scaled(no, log_sigmoid(-chance, jnp))
    # log1p keeps the digits of a small p, which 1 - p would round away
    certain = chance == 1
    rest = no * jnp.log1p(-jnp.where(certain, 0.0, chance))
    return power_log(yes, chance) + jnp.where(certain, power_log(no, 0.0), rest)


@declared
class Bernoulli(CountDistribution):
    """One trial: 1 with the given probability, else 0.

    Attributes
    ----------
    probability : float or array, optional
        Probability of a 1 [batch_shape].
    logit : float or array, optional
        log(p / (1 - p)) [batch_shape], in place of the probability.
    """

    probability: Any = hyper("probability", default=None)
    logit: Any = hyper("number", default=None, kw_only=True)

    _either = ("probability", "logit")

    def log_prob(self, x: Any) -> jax.Array:
        x, chance = self._floats(x)
        forbidden = (x != 0) & (x != 1)
        x = jnp.where(forbidden, 0.0, x)
        value = log_successes(x, 1.0 - x, chance, self.probability is None)
        return where_allowed(forbidden, value)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, chance = self._for_draws(sample_shape)
        p = jax.nn.sigmoid(chance) if self.probability is None else chance
        return jax.random.bernoulli(key, p, shape).astype(int)


@declared
class Binomial(CountDistribution):
    """Number of successes in so many trials.

    Attributes
    ----------
    trials : int, float or array
        Number of trials [batch_shape].
    probability : float or array, optional
        Probability of success in each [batch_shape].
    logit : float or array, optional
        log(p / (1 - p)) [batch_shape], in place of the probability.
    """

    trials: Any = hyper("count")
    probability: Any = hyper("probability", default=None)
    logit: Any = hyper("number", default=None, kw_only=True)

    _either = ("probability", "logit")

    def log_prob(self, x: Any) -> jax.Array:
        x, trials, chance = self._floats(x)
        forbidden = (x < 0) | (x > trials) | (x != jnp.floor(x))
        x = jnp.where(forbidden, 0.0, x)
        value = log_successes(x, trials - x, chance, self.probability is None)
        return where_allowed(forbidden, log_binomial(trials, x) + value)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, trials, chance = self._for_draws(sample_shape)
        p = jax.nn.sigmoid(chance) if self.probability is None else chance
        return jax.random.binomial(key, trials, p, shape, dtype=float).astype(int)


@declared
class Poisson(CountDistribution):
    """Number of independent events.

    Attributes
    ----------
    rate : float or array, optional
        Expected number [batch_shape], zero or above.
    log_rate : float or array, optional
        Log of the expected number [batch_shape], in place of the rate.
    """

    rate: Any = hyper("nonnegative", default=None)
    log_rate: Any = hyper("number", default=None, kw_only=True)

    _either = ("rate", "log_rate")

    def log_prob(self, x: Any) -> jax.Array:
        x, level = self._floats(x)
        forbidden = (x < 0) | (x != jnp.floor(x))
        x = jnp.where(forbidden, 0.0, x)
        if self.rate is None:
            overflow = jnp.isinf(jnp.exp(level)) & (level > 0)
            forbidden, level = forbidden | overflow, jnp.where(overflow, 0.0, level)
            value = scaled(x, level) - jnp.exp(level)
        else:
            value = power_log(x, level) - level
        return where_allowed(forbidden, value - log_gamma(x + 1.0))

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, level = self._for_draws(sample_shape)
        rate = jnp.exp(level) if self.rate is None else level
        return jax.random.poisson(key, rate, shape, dtype=int)


@declared
class NegativeBinomial(CountDistribution):
    """Number of clustered events: a Poisson whose rate is gamma distributed.

    Attributes
    ----------
    mean : float or array
        Expected number [batch_shape], zero or above.
    size : float or array
        Shape [batch_shape] of that gamma distribution, above zero: the variance is
        mean + mean^2 / size, and a large size is nearly a Poisson.
    """

    mean: Any = hyper("nonnegative")
    size: Any = hyper("positive")

    def log_prob(self, x: Any) -> jax.Array:
        x, mean, size = self._floats(x)
        forbidden = (x < 0) | (x != jnp.floor(x))
        x = jnp.where(forbidden, 0.0, x)
        ways = log_rising(size, x) - log_gamma(x + 1.0)
        value = power_log(x, mean) - x * jnp.log(mean + size) - size * jnp.log1p(mean / size)
        return where_allowed(forbidden, ways + value)

    def sample(self, key: jax.Array, sample_shape: tuple[int, ...] = ()) -> jax.Array:
        shape, mean, size = self._for_draws(sample_shape)
        rate_key, count_key = jax.random.split(key)
        rate = mean / size * jax.random.gamma(rate_key, size, shape, dtype=float)
        return jax.random.poisson(count_key, rate, shape, dtype=int)
