"""Gaussian and nearly Gaussian cases: Laplace's method is exact here, or only just not."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
from integrals import (
    LOG_2PI,
    Integral,
    case,
    log_flat_fraction,
    log_gaussian_data,
    log_normal,
    place,
)
from scipy import special, stats


@case
def gauss_corr_d2() -> Integral:
    covariance = np.array([[1.0, 0.95], [0.95, 1.0]])
    precision, mean = np.linalg.inv(covariance), np.array([1.0, -2.0])

    def log_density(z):
        return -0.5 * (z - mean) @ precision @ (z - mean)

    return Integral(
        "gauss_corr_d2",
        log_density,
        **place(2, 0.0, 3.0),
        how="Gaussian, correlation 0.95",
        closed_form=LOG_2PI + 0.5 * float(np.linalg.slogdet(covariance)[1]),
    )


def _regression(name: str, dimension: int, rows: int, seed: int, size: np.ndarray) -> Integral:
    rng = np.random.default_rng(seed)
    design = rng.normal(size=(rows, dimension)) * size
    y = design @ (rng.normal(size=dimension) / size) + rng.normal(size=rows)
    prior_sd = 2.0 / size

    def log_density(z):
        return jnp.sum(log_normal(y, design @ z, 1.0)) + jnp.sum(log_normal(z, 0.0, prior_sd))

    covariance = np.eye(rows) + (design * prior_sd) @ (design * prior_sd).T
    return Integral(
        name,
        log_density,
        **place(dimension, 0.0, prior_sd),
        how="conjugate regression: the data are jointly Gaussian",
        closed_form=log_gaussian_data(y, covariance),
    )


@case
def linreg_d10() -> Integral:
    return _regression("linreg_d10", 10, 50, 3, np.ones(10))


@case
def illcond_d6() -> Integral:
    return _regression("illcond_d6", 6, 40, 5, 10.0 ** np.arange(6))


@case
def nig_n100_d5() -> Integral:
    rng = np.random.default_rng(6)
    rows, terms = 100, 4
    design = np.c_[np.ones(rows), rng.normal(size=(rows, terms - 1))]
    y = design @ rng.normal(size=terms) + 0.7 * rng.normal(size=rows)
    shape, scale, ratio = 2.0, 1.0, 25.0

    def log_density(z):
        slopes, log_variance = z[:terms], z[terms]
        sd = jnp.exp(0.5 * log_variance)
        prior = shape * np.log(scale) - special.gammaln(shape) - shape * log_variance
        prior = prior - scale * jnp.exp(-log_variance)
        return (
            jnp.sum(log_normal(y, design @ slopes, sd))
            + jnp.sum(log_normal(slopes, 0.0, sd * np.sqrt(ratio)))
            + prior
        )

    student = stats.multivariate_t(
        np.zeros(rows), scale / shape * (np.eye(rows) + ratio * design @ design.T), df=2 * shape
    )
    return Integral(
        "nig_n100_d5",
        log_density,
        **place(5, 0.0, np.r_[np.full(terms, 3.0), 1.0]),
        how="normal inverse gamma: the data are jointly Student t",
        closed_form=float(student.logpdf(y)),
    )


@case
def ridge_sum_d3() -> Integral:
    """Only the sum of three parameters is seen by the data."""
    rng = np.random.default_rng(31)
    y = 2.0 + 0.5 * rng.normal(size=20)

    def log_density(z):
        return jnp.sum(log_normal(y, jnp.sum(z), 0.5)) + jnp.sum(log_normal(z, 0.0, 10.0))

    covariance = 0.25 * np.eye(20) + 300.0 * np.ones((20, 20))
    return Integral(
        "ridge_sum_d3",
        log_density,
        **place(3, 0.0, 10.0),
        how="the data are jointly Gaussian",
        closed_form=log_gaussian_data(y, covariance),
    )


@case
def unid_uniform_d2() -> Integral:
    """One parameter the data do not see, uniform on (0, 1)."""
    rng = np.random.default_rng(32)
    y = 0.7 + rng.normal(size=10)

    def log_density(z):
        seen = jnp.sum(log_normal(y, z[0], 1.0)) + log_normal(z[0], 0.0, 2.0)
        return seen + log_flat_fraction(z[1])

    return Integral(
        "unid_uniform_d2",
        log_density,
        **place(2, 0.0, [2.0, 1.8]),
        how="the data are jointly Gaussian; the unseen parameter integrates to one",
        closed_form=log_gaussian_data(y, np.eye(10) + 4.0 * np.ones((10, 10))),
    )
