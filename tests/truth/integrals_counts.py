"""Counts and yes-no data: logistic, Poisson and binomial cases."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
from integrals import Integral, Quadrature, case, log_normal, place, rotation
from scipy import special

WHITENED = "trapezoid rule in coordinates whitened at the peak, two ranges and resolutions"


def _logistic(name: str, design, y, prior_sd: float, reach: float, points: int) -> Integral:
    dimension = design.shape[1]

    def log_density(z):
        eta = design @ z
        return jnp.sum(y * eta - jnp.logaddexp(0.0, eta)) + jnp.sum(log_normal(z, 0.0, prior_sd))

    quadrature = Quadrature(
        log_density,
        (-reach,) * dimension,
        (reach,) * dimension,
        (points,) * dimension,
        whiten_from=(0.0,) * dimension,
    )
    where = place(dimension, 0.0, min(prior_sd, 5.0))
    return Integral(name, log_density, **where, how=WHITENED, quadrature=quadrature)


def _drawn_logistic(name: str, rows: int, seed: int, reach: float, points: int) -> Integral:
    rng = np.random.default_rng(seed)
    design = np.c_[np.ones(rows), rng.normal(size=(rows, 2))]
    chance = special.expit(design @ np.array([0.3, 1.0, -0.7]))
    y = (rng.random(rows) < chance).astype(float)
    return _logistic(name, design, y, 2.5, reach, points)


@case
def logit_n200_d3() -> Integral:
    return _drawn_logistic("logit_n200_d3", 200, 8, 9.0, 90)


@case
def logit_n12_d3() -> Integral:
    return _drawn_logistic("logit_n12_d3", 12, 9, 12.0, 150)


@case
def logit_separated_d2() -> Integral:
    """A line separates the two outcomes: only the prior stops the slope."""
    dose = np.array([-2.1, -1.7, -1.3, -1.0, -0.6, -0.2, 0.1, 0.5, 0.9, 1.2, 1.6, 2.2])
    design = np.c_[np.ones(12), dose]
    y = (np.arange(12) >= 6).astype(float)
    return _logistic("logit_separated_d2", design, y, 10.0, 22.0, 700)


@case
def poisson_glm_d3() -> Integral:
    rng = np.random.default_rng(11)
    design = np.c_[np.ones(100), rng.normal(size=(100, 2))]
    y = rng.poisson(np.exp(design @ np.array([1.0, 0.4, -0.3])))
    log_factorials = special.gammaln(y + 1.0)

    def log_density(z):
        eta = design @ z
        return jnp.sum(y * eta - jnp.exp(eta) - log_factorials) + jnp.sum(log_normal(z, 0.0, 2.0))

    quadrature = Quadrature(
        log_density, (-9.0,) * 3, (9.0,) * 3, (90,) * 3, whiten_from=(0.0, 0.0, 0.0)
    )
    return Integral(
        "poisson_glm_d3", log_density, **place(3, 0.0, 1.0), how=WHITENED, quadrature=quadrature
    )


@case
def poisgamma_d100() -> Integral:
    """A hundred gamma-Poisson pairs in log rates, rotated: skew in every direction."""
    rng = np.random.default_rng(15)
    y = rng.poisson(4.0, size=100)
    shape, rate = 1.5, 0.5
    turn = rotation(100, 2)
    constant = special.gammaln(y + 1.0) + special.gammaln(shape) - shape * np.log(rate)

    def log_density(z):
        log_rate = turn @ z + 1.0
        return jnp.sum((y + shape) * log_rate - (1.0 + rate) * jnp.exp(log_rate) - constant)

    pairs = special.gammaln(shape + y) - (shape + y) * np.log(rate + 1.0) - constant
    return Integral(
        "poisgamma_d100",
        log_density,
        **place(100, 0.0, 1.0),
        how="gamma-Poisson, closed form",
        closed_form=float(np.sum(pairs)),
    )


def _binomial(name: str, successes: float, trials: float, prior: float) -> Integral:
    """One fraction with prior Beta(prior, prior), in its logit; without the coefficient."""
    constant = float(special.betaln(prior, prior))
    a, b = successes + prior, trials - successes + prior

    def log_density(z):
        return -a * jnp.logaddexp(0.0, -z[0]) - b * jnp.logaddexp(0.0, z[0]) - constant

    return Integral(
        name,
        log_density,
        **place(1, 0.0, 2.5),
        how="beta function",
        closed_form=float(special.betaln(a, b)) - constant,
    )


@case
def binom_zero_d1() -> Integral:
    return _binomial("binom_zero_d1", 0.0, 20.0, 1.0)


@case
def binom_jeffreys_d1() -> Integral:
    return _binomial("binom_jeffreys_d1", 0.0, 10.0, 0.5)
