"""Special functions exact where the obvious formulas lose digits or derivatives."""

from __future__ import annotations

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

__all__ = [
    "HALF_LOG_2PI",
    "log1p_square",
    "log_beta",
    "log_binomial",
    "log_gamma",
    "log_gamma_centre",
    "log_rising",
    "normal_log_density",
    "power_log",
]

HALF_LOG_2PI = 0.9189385332046727  # log(2 pi) / 2

# Stirling's series of log gamma, B_2k / (2k (2k - 1)) for k = 1..8 (de Moivre 1730); from
# LARGE on, the first term left out is below 1e-16. Smaller arguments are shifted up by LARGE with
# the recurrence. JAX's own gammaln is slow to compile, and its second derivative (a Hurwitz zeta
# function) slower by far; this one is made of logs and divisions.
STIRLING = (1 / 12, -1 / 360, 1 / 1260, -1 / 1680, 1 / 1188, -691 / 360360, 1 / 156, -3617 / 122400)
LARGE = 8


def power_log(exponent: Any, base: Any) -> jax.Array:
    """Return exponent * log(base), the log of a power, without nan at base zero.

    At base 0 the value is 0, -inf or inf as the exponent is zero, positive or negative, and the
    gradient is zero.
    """
    at_zero = base == 0
    regular = exponent * jnp.log(jnp.where(at_zero, 1.0, base))
    edge = jnp.where(exponent > 0, -jnp.inf, jnp.where(exponent < 0, jnp.inf, 0.0))
    return jnp.where(at_zero, edge, regular)


def log1p_square(r: Any) -> jax.Array:
    """Return log(1 + r^2), also where r^2 overflows."""
    big = jnp.abs(r) > 1e8
    regular = jnp.log1p(jnp.square(jnp.where(big, 1.0, r)))
    return jnp.where(big, 2.0 * jnp.log(jnp.abs(jnp.where(big, r, 1.0))), regular)


def stirling_rest(x: Any) -> jax.Array:
    """Return log gamma(x) - [(x - 1/2) log x - x + log(2 pi) / 2] for x >= LARGE."""
    inverse = 1.0 / x
    square = inverse * inverse
    total = STIRLING[-1]
    for coefficient in STIRLING[-2::-1]:
        total = coefficient + square * total
    return inverse * total


def shifted(x: Any) -> tuple[Any, Any, Any]:
    """Return whether x is below LARGE, x shifted up by LARGE there, and x or else 1."""
    small = x < LARGE
    return small, jnp.where(small, x + LARGE, x), jnp.where(small, x, 1.0)


@jax.custom_jvp
def log_run(x: Any) -> jax.Array:
    """Return log[x (x + 1) ... (x + LARGE - 1)] for x > 0."""
    total = 0.0
    for first in (0, LARGE // 2):  # two products, each far from overflow
        product = x + first
        for i in range(first + 1, first + LARGE // 2):
            product = product * (x + i)
        total = total + jnp.log(product)
    return total


@log_run.defjvp
def _log_run_slope(primals: tuple, tangents: tuple) -> tuple:
    # a short formula: differentiating the product twice takes seconds to compile
    (x,), (tangent,) = primals, tangents
    return log_run(x), tangent * sum(1.0 / (x + i) for i in range(LARGE))


def log_gamma(x: Any) -> jax.Array:
    """Return log gamma(x) for x > 0, to 1e-14 of its value or absolutely."""
    small, large, start = shifted(x)
    value = (large - 0.5) * jnp.log(large) - large + HALF_LOG_2PI + stirling_rest(large)
    return value - jnp.where(small, log_run(start), 0.0)


def log_rising(x: Any, step: Any) -> jax.Array:
    """Return log gamma(x + step) - log gamma(x) for x > 0, step >= 0, without cancellation.

    Two Stirling expansions are subtracted term by term; the plain difference of log gammas loses
    1e-5 at x = 1e10.
    """
    small, large, start = shifted(x)
    value = (large + step - 0.5) * jnp.log1p(step / large) + step * (jnp.log(large) - 1.0)
    value = value + stirling_rest(large + step) - stirling_rest(large)
    return value + jnp.where(small, log_run(start) - log_run(start + step), 0.0)


def log_beta(a: Any, b: Any) -> jax.Array:
    """Return the log of the beta function for a, b > 0, without cancellation.

    jax.scipy.special.betaln is off by 1e-7 at moderate arguments such as (12, 15), and the sum
    of three log gammas by 1e-8 at (1e6, 2e6).
    """
    small_a, c, start_a = shifted(a)
    small_b, d, start_b = shifted(b)
    value = HALF_LOG_2PI - 0.5 * jnp.log(c + d)
    value = value - (c - 0.5) * jnp.log1p(d / c) - (d - 0.5) * jnp.log1p(c / d)
    value = value + stirling_rest(c) + stirling_rest(d) - stirling_rest(c + d)
    # B(a, b) = B(a + 1, b) (a + b) / a, first up to B(c, b) and then up to B(c, d)
    value = value + jnp.where(small_a, log_run(start_a + b) - log_run(start_a), 0.0)
    return value + jnp.where(small_b, log_run(start_b + c) - log_run(start_b), 0.0)


def log_binomial(n: Any, k: Any) -> jax.Array:
    """Return the log of the binomial coefficient for 0 <= k <= n."""
    return -jnp.log1p(n) - log_beta(n - k + 1.0, k + 1.0)


def normal_log_density(x: Any, mean: Any, sd: Any) -> jax.Array:
    """Return the normal log density."""
    return -0.5 * jnp.square((x - mean) / sd) - jnp.log(sd) - HALF_LOG_2PI


def log_gamma_centre(shape: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return mean and sd of the log of a gamma variable with rate 1 (digamma, trigamma)."""
    from scipy.special import digamma, polygamma

    return digamma(shape), np.sqrt(polygamma(1, shape))
