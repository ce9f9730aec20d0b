"""Groups whose means share a distribution: the funnel in its several forms."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
from integrals import LOG_2PI, Integral, Quadrature, case, log_normal, place

# Rubin (1981), Journal of Educational Statistics 6: effects and standard errors, rounded
SCHOOLS = np.array([28.0, 8.0, -3.0, 7.0, -1.0, 1.0, 18.0, 12.0])
SCHOOL_ERRORS = np.array([15.0, 10.0, 16.0, 11.0, 9.0, 11.0, 10.0, 18.0])
HOW = "group effects and their mean in closed form, trapezoid rule over log sd"


def _groups(name, y, error, *, centred, log_sd_prior, mean_sd, log_sd_place) -> Integral:
    """z holds the common mean, the log sd between groups, and the effects (raw or standardised)."""
    count = len(y)

    def log_density(z):
        mean, log_sd, effect = z[0], z[1], z[2:]
        sd = jnp.exp(log_sd)
        top = log_normal(mean, 0.0, mean_sd) + log_sd_prior(log_sd)
        if centred:
            groups = log_normal(effect, mean, sd) + log_normal(y, effect, error)
        else:
            groups = log_normal(effect, 0.0, 1.0) + log_normal(y, mean + sd * effect, error)
        return top + jnp.sum(groups)

    def log_sd_alone(w):
        variance = error**2 + jnp.exp(2.0 * w[0])
        precision = jnp.sum(1.0 / variance) + 1.0 / mean_sd**2
        weighted = jnp.sum(y / variance)
        quadratic = jnp.sum(y**2 / variance) - weighted**2 / precision
        log_det = jnp.sum(jnp.log(variance)) + jnp.log(precision) + 2.0 * np.log(mean_sd)
        return -0.5 * (quadratic + log_det + count * LOG_2PI) + log_sd_prior(w[0])

    effect_spread = mean_sd / 2.0 if centred else 1.0
    centre = np.r_[0.0, log_sd_place[0], np.zeros(count)]
    spread = np.r_[mean_sd / 2.0, log_sd_place[1], np.full(count, effect_spread)]
    quadrature = Quadrature(log_sd_alone, (-45.0,), (25.0,), (20_001,))
    where = place(count + 2, centre, spread)
    return Integral(name, log_density, **where, how=HOW, quadrature=quadrature)


def _half_cauchy_5(log_sd):
    """Half-Cauchy(5) for the sd, as a density of its log."""
    scaled = log_sd - np.log(5.0)
    return np.log(2.0 / np.pi) + scaled - jnp.log1p(jnp.exp(2.0 * scaled))


def _schools(name: str, *, centred: bool) -> Integral:
    return _groups(
        name,
        SCHOOLS,
        SCHOOL_ERRORS,
        centred=centred,
        log_sd_prior=_half_cauchy_5,
        mean_sd=20.0,
        log_sd_place=(1.5, 1.5),
    )


def _five(name: str, *, centred: bool) -> Integral:
    rng = np.random.default_rng(26)
    effects = 1.0 + 0.8 * rng.normal(size=5)
    return _groups(
        name,
        effects + 0.4 * rng.normal(size=5),
        np.full(5, 0.4),
        centred=centred,
        log_sd_prior=lambda log_sd: log_normal(log_sd, 0.0, 1.0),
        mean_sd=5.0,
        log_sd_place=(0.0, 1.0),
    )


@case
def eight_centred_d10() -> Integral:
    """Unbounded above as the sd between groups goes to zero: there is no peak to find."""
    return _schools("eight_centred_d10", centred=True)


@case
def eight_noncentred_d10() -> Integral:
    return _schools("eight_noncentred_d10", centred=False)


@case
def ri5_centred_d7() -> Integral:
    return _five("ri5_centred_d7", centred=True)


@case
def ri5_noncentred_d7() -> Integral:
    return _five("ri5_noncentred_d7", centred=False)


@case
def funnel_d10() -> Integral:
    """Neal (2003), Annals of Statistics 31: a funnel, normalised by construction."""

    def log_density(z):
        mouth = log_normal(z[0], 0.0, 3.0)
        return mouth + jnp.sum(log_normal(z[1:], 0.0, jnp.exp(0.5 * z[0])))

    return Integral(
        "funnel_d10",
        log_density,
        **place(10, 0.0, 3.0),
        how="a density",
        closed_form=0.0,
    )
