"""Densities and supports to declare candidates with.

Each distribution is a frozen dataclass and a JAX pytree with ``log_prob``, ``sample``, ``support``
and ``centre_and_spread``; ``shape=`` makes an array of independent parameters. Each support holds
its map from the real line, the inverse and the log Jacobian.
"""

from evidence.distributions.base import Distribution
from evidence.distributions.continuous import Beta, Cauchy, Normal, StudentT, Uniform
from evidence.distributions.discrete import Bernoulli, Binomial, NegativeBinomial, Poisson
from evidence.distributions.scales import (
    Exponential,
    Gamma,
    HalfCauchy,
    HalfNormal,
    InverseGamma,
    LogNormal,
)
from evidence.distributions.supports import (
    Support,
    above,
    below,
    between,
    discrete,
    fraction,
    ordered,
    positive,
    real,
    simplex,
)
from evidence.distributions.vector import Dirichlet, MultivariateNormal

__all__ = [
    "Bernoulli",
    "Beta",
    "Binomial",
    "Cauchy",
    "Dirichlet",
    "Distribution",
    "Exponential",
    "Gamma",
    "HalfCauchy",
    "HalfNormal",
    "InverseGamma",
    "LogNormal",
    "MultivariateNormal",
    "NegativeBinomial",
    "Normal",
    "Poisson",
    "StudentT",
    "Support",
    "Uniform",
    "above",
    "below",
    "between",
    "discrete",
    "fraction",
    "ordered",
    "positive",
    "real",
    "simplex",
]
