"""Shapes built to deceive: walls, kinks, hidden and nested peaks, bananas, heavy tails."""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
from integrals import (
    LOG_2PI,
    Integral,
    case,
    log_cauchy,
    log_flat_fraction,
    log_normal,
    place,
    rotation,
)
from scipy import special, stats


@case
def bound_edge_logit_d1() -> Integral:
    """A fraction measured as exactly one, in its logit."""

    def log_density(z):
        return log_normal(1.0, jax.nn.sigmoid(z[0]), 0.1) + log_flat_fraction(z[0])

    truth = float(np.log(stats.norm.cdf(0.0) - stats.norm.cdf(-10.0)))
    where = place(1, 0.0, 1.8)
    return Integral(
        "bound_edge_logit_d1", log_density, **where, how="truncated normal", closed_form=truth
    )


def _walled(name: str, distance: float) -> Integral:
    """A Gaussian cut by a wall at z[0] = 0, its peak at the given distance inside."""
    rng = np.random.default_rng(29)
    root = rng.normal(size=(3, 3))
    covariance = root @ root.T / 3.0 + 0.3 * np.eye(3)
    covariance /= covariance[0, 0]
    precision = np.linalg.inv(covariance)
    mean = np.array([distance, 0.0, 0.0])
    constant = 0.5 * float(np.linalg.slogdet(covariance)[1]) + 1.5 * LOG_2PI

    def log_density(z):
        inside = -0.5 * (z - mean) @ precision @ (z - mean) - constant
        return jnp.where(z[0] >= 0.0, inside, -jnp.inf)

    return Integral(
        name,
        log_density,
        **place(3, [1.5, 0.0, 0.0], 1.5),
        how="probability of a half space",
        closed_form=float(stats.norm.logcdf(distance)),
    )


@case
def hard_edge_d3() -> Integral:
    return _walled("hard_edge_d3", 0.0)


@case
def hard_near_d3() -> Integral:
    return _walled("hard_near_d3", 1.0)


def _mixture(name: str, means, covariances, shares, spread: float) -> Integral:
    """A Gaussian mixture, exp(3) times a density."""
    dimension = len(means[0])
    parts = []
    for mean, covariance, share in zip(means, covariances, shares, strict=True):
        log_det = float(np.linalg.slogdet(covariance)[1])
        height = np.log(share) - 0.5 * log_det - 0.5 * dimension * LOG_2PI
        parts.append((np.asarray(mean, float), np.linalg.inv(covariance), height))

    def log_density(z):
        logs = [h - 0.5 * (z - m) @ precision @ (z - m) for m, precision, h in parts]
        return jax.nn.logsumexp(jnp.stack(logs)) + 3.0

    where = place(dimension, 0.0, spread)
    truth = 3.0 + float(np.log(sum(shares)))
    return Integral(name, log_density, **where, how="Gaussian mixture", closed_form=truth)


@case
def bimodal_equal_d2() -> Integral:
    covariances = [np.eye(2), np.array([[1.0, 0.6], [0.6, 1.0]])]
    return _mixture("bimodal_equal_d2", [[-5, 0], [5, 1]], covariances, [0.5, 0.5], 5.0)


@case
def spike_slab_d5() -> Integral:
    """A tenth of the mass in a spike of sd 0.02: out of reach of any start in five dimensions."""
    covariances = [np.eye(5), 0.02**2 * np.eye(5)]
    return _mixture("spike_slab_d5", [np.zeros(5), np.ones(5)], covariances, [0.9, 0.1], 2.0)


@case
def hidden_mode_d3() -> Integral:
    """Most of the mass 43 sd away from the centre, where the spread says two."""
    covariances = [np.eye(3), 0.5 * np.eye(3)]
    means = [np.zeros(3), np.full(3, 25.0)]
    return _mixture("hidden_mode_d3", means, covariances, [0.3, 0.7], 2.0)


def _banana(name: str, bend: float, width: float) -> Integral:
    def log_density(z):
        bent = z[1] + bend * (z[0] ** 2 - width**2)
        return log_normal(z[0], 0.0, width) + log_normal(bent, 0.0, 1.0)

    return Integral(
        name,
        log_density,
        **place(2, 0.0, [width, 2.0 * bend * width**2 + 1.0]),
        how="a Gaussian bent without changing volumes",
        closed_form=0.0,
    )


@case
def banana_mild_d2() -> Integral:
    return _banana("banana_mild_d2", 0.1, 1.5)


@case
def banana_strong_d2() -> Integral:
    return _banana("banana_strong_d2", 0.5, 3.0)


@case
def cauchy_prior_d3() -> Integral:
    """Cauchy priors of scale one against data with an error of eight."""
    turn, y, error = rotation(3, 7), np.array([1.0, -2.0, 0.5]), 8.0

    def log_density(z):
        w = turn @ z
        return jnp.sum(log_cauchy(w, 1.0) + log_normal(y, w, error))

    return Integral(
        "cauchy_prior_d3",
        log_density,
        **place(3, 0.0, 4.0),
        how="Voigt profile",
        closed_form=float(np.sum(np.log(special.voigt_profile(y, error, 1.0)))),
    )


@case
def lasso_kink_d2() -> Integral:
    """A double-exponential prior: one of the two peaks sits on its kink."""
    y, rate = np.array([0.3, 2.0]), 2.0

    def log_density(z):
        return jnp.sum(np.log(rate / 2.0) - rate * jnp.abs(z) + log_normal(y, z, 1.0))

    right = stats.norm.logcdf(y - rate) - rate * y
    left = stats.norm.logcdf(-y - rate) + rate * y
    pieces = np.log(rate / 2.0) + rate**2 / 2.0 + np.logaddexp(right, left)
    return Integral(
        "lasso_kink_d2",
        log_density,
        **place(2, 0.0, 1.0),
        how="double exponential against normal, closed form",
        closed_form=float(np.sum(pieces)),
    )


@case
def loggamma_d1() -> Integral:
    shape = 0.3

    def log_density(z):
        return shape * z[0] - jnp.exp(z[0])

    truth = float(special.gammaln(shape))
    where = place(1, 0.0, 3.0)
    return Integral("loggamma_d1", log_density, **where, how="gamma function", closed_form=truth)


@case
def gumbel_d30() -> Integral:
    """Thirty logarithms of Gamma(2) variables, rotated."""
    turn, shape = rotation(30, 9), 2.0
    constant = float(special.gammaln(shape))

    def log_density(z):
        w = turn @ z
        return jnp.sum(shape * w - jnp.exp(w) - constant)

    where = place(30, 0.0, 1.5)
    return Integral("gumbel_d30", log_density, **where, how="a density", closed_form=0.0)


@case
def quartic_d1() -> Integral:
    """Flat to third order at its peak: the curvature there is zero."""

    def log_density(z):
        return -(z[0] ** 4)

    return Integral(
        "quartic_d1",
        log_density,
        **place(1, 0.3, 1.0),
        how="gamma function",
        closed_form=float(np.log(2.0 * special.gamma(1.25))),
    )
