"""Each density beside scipy's, with points in the bulk and far in the tails."""

import contextlib
import dataclasses
from typing import Any

import jax
import numpy as np
import scipy.stats as st

from evidence.distributions import (
    Bernoulli,
    Beta,
    Binomial,
    Cauchy,
    Dirichlet,
    Exponential,
    Gamma,
    HalfCauchy,
    HalfNormal,
    InverseGamma,
    LogNormal,
    MultivariateNormal,
    NegativeBinomial,
    Normal,
    Poisson,
    StudentT,
    Uniform,
)

COVARIANCE = np.array([[2.0, 0.3, -0.1], [0.3, 1.0, 0.2], [-0.1, 0.2, 0.5]])


@contextlib.contextmanager
def strict_float64():
    """Float64, and neither ranks nor types promoted in silence."""
    with (
        jax.enable_x64(True),
        jax.numpy_rank_promotion("raise"),
        jax.numpy_dtype_promotion("strict"),
    ):
        yield


@dataclasses.dataclass
class Case:
    """One distribution, scipy's frozen one, and points where to compare."""

    ours: Any
    scipy: Any
    points: Any

    def __str__(self):
        return f"{self.ours!r:.60}"


WIDE = [-1e200, -1e20, -1e5, -40.0, -3.0, -0.4, 0.0, 0.7, 2.0, 30.0, 1e5, 1e20]
POSITIVE = [1e-300, 1e-20, 1e-3, 0.2, 1.0, 2.5, 40.0, 1e4, 1e10]
UNIT = [1e-300, 1e-20, 1e-4, 0.2, 0.5, 0.9, 1 - 1e-10]
COUNTS = [0, 1, 2, 3, 5, 9, 20, 100]

# one number per draw, continuous
SCALAR = [
    Case(Normal(0.3, 1.7), st.norm(0.3, 1.7), WIDE[1:]),
    Case(StudentT(3.5, 0.3, 1.7), st.t(3.5, 0.3, 1.7), WIDE[1:]),
    Case(StudentT(0.4, 0.0, 2), st.t(0.4, 0.0, 2), WIDE[1:]),
    Case(StudentT(60, 1.0, 0.2), st.t(60, 1.0, 0.2), WIDE[1:]),
    Case(Cauchy(0.3, 1.7), st.cauchy(0.3, 1.7), WIDE[1:]),
    Case(Uniform(-1, 2.5), st.uniform(-1, 3.5), [-0.999, 0.0, 1.0, 2.499]),
    Case(Beta(2, 3), st.beta(2, 3), UNIT),
    Case(Beta(0.4, 0.6), st.beta(0.4, 0.6), UNIT),
    Case(Beta(30.5, 41.0), st.beta(30.5, 41.0), UNIT),
    Case(HalfNormal(2), st.halfnorm(scale=2), [0.0, *POSITIVE]),
    Case(LogNormal(0.4, 0.7), st.lognorm(0.7, scale=np.exp(0.4)), POSITIVE),
    Case(Gamma(2.5, 3), st.gamma(2.5, scale=1 / 3), POSITIVE),
    Case(Gamma(0.3, 0.5), st.gamma(0.3, scale=2), POSITIVE),
    Case(InverseGamma(2.5, 3), st.invgamma(2.5, scale=3), POSITIVE[1:]),
    Case(Exponential(3), st.expon(scale=1 / 3), [0.0, *POSITIVE]),
    Case(HalfCauchy(1.7), st.halfcauchy(scale=1.7), [0.0, *POSITIVE]),
]

VECTOR = [
    Case(
        Dirichlet([0.7, 2.0, 3.0]),
        st.dirichlet([0.7, 2.0, 3.0]),
        [[0.2, 0.3, 0.5], [1e-9, 0.4, 0.6 - 1e-9], [0.9, 0.05, 0.05]],
    ),
    Case(
        MultivariateNormal([0.1, -0.2, 0.3], COVARIANCE),
        st.multivariate_normal([0.1, -0.2, 0.3], COVARIANCE),
        [[0.0, 0.0, 0.0], [1.0, -2.0, 0.5], [300.0, 20.0, -1e4]],
    ),
]

DISCRETE = [
    Case(Bernoulli(0.3), st.bernoulli(0.3), [0, 1]),
    Case(Bernoulli(logit=-1.2), st.bernoulli(1 / (1 + np.exp(1.2))), [0, 1]),
    Case(Bernoulli(1e-18), st.bernoulli(1e-18), [0, 1]),
    Case(Binomial(100, 0.3), st.binom(100, 0.3), COUNTS),
    Case(Binomial(100, logit=-1.2), st.binom(100, 1 / (1 + np.exp(1.2))), COUNTS),
    Case(Poisson(4), st.poisson(4), COUNTS),
    Case(Poisson(log_rate=1.3), st.poisson(np.exp(1.3)), COUNTS),
    Case(NegativeBinomial(4, 2.5), st.nbinom(2.5, 2.5 / 6.5), COUNTS),
]
