"""Nonlinear curves: decay, dose and response, a change point, a sinusoid, a Gaussian process."""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
from integrals import (
    LOG_2PI,
    Integral,
    Quadrature,
    case,
    log_flat_fraction,
    log_linear_data,
    log_normal,
    place,
)
from scipy import special

LINEAR_OUT = "linear coefficients in closed form, trapezoid rule over the rest"


@case
def exp1_sigma_d3() -> Integral:
    rng = np.random.default_rng(16)
    t = np.linspace(0.1, 6.0, 20)
    y = 2.0 * np.exp(-0.6 * t) + 0.2 * rng.normal(size=20)

    def prior(log_rate, log_sd):
        return log_normal(log_rate, 0.0, 1.5) + log_normal(log_sd, -1.0, 1.0)

    def log_density(z):
        curve = z[0] * jnp.exp(-jnp.exp(z[1]) * t)
        fit = jnp.sum(log_normal(y, curve, jnp.exp(z[2])))
        return fit + log_normal(z[0], 0.0, 5.0) + prior(z[1], z[2])

    def without_amplitude(w):
        basis = jnp.exp(-jnp.exp(w[0]) * t)[:, None]
        return log_linear_data(y, basis, 5.0, jnp.exp(w[1])) + prior(w[0], w[1])

    return Integral(
        "exp1_sigma_d3",
        log_density,
        **place(3, [0.0, 0.0, -1.0], [5.0, 1.5, 1.0]),
        how=LINEAR_OUT,
        quadrature=Quadrature(without_amplitude, (-13.0, -6.0), (13.0, 8.0), (1600, 600)),
    )


def _exponentials(name, rates, amplitudes, rows, noise, seed, **grid) -> Integral:
    """A sum of decaying exponentials: exchanging two terms changes nothing."""
    rng = np.random.default_rng(seed)
    terms = len(rates)
    t = np.linspace(0.1, 8.0, rows)
    y = sum(a * np.exp(-k * t) for a, k in zip(amplitudes, rates, strict=True))
    y = y + noise * rng.normal(size=rows)

    def basis(log_rates):
        return jnp.exp(-jnp.exp(log_rates)[None, :] * t[:, None])

    def log_density(z):
        amplitude, log_rate = z[:terms], z[terms:]
        fit = jnp.sum(log_normal(y, basis(log_rate) @ amplitude, noise))
        prior = jnp.sum(log_normal(amplitude, 0.0, 5.0)) + jnp.sum(log_normal(log_rate, -0.5, 1.2))
        return fit + prior

    def without_amplitudes(log_rate):
        prior = jnp.sum(log_normal(log_rate, -0.5, 1.2))
        return log_linear_data(y, basis(log_rate), 5.0, noise) + prior

    centre = np.r_[np.zeros(terms), np.full(terms, -0.5)]
    spread = np.r_[np.full(terms, 5.0), np.full(terms, 1.2)]
    return Integral(
        name,
        log_density,
        **place(2 * terms, centre, spread),
        how=LINEAR_OUT,
        quadrature=Quadrature(without_amplitudes, **grid),
    )


@case
def exp2_labels_d4() -> Integral:
    grid = {"low": (-10.1,) * 2, "high": (9.1,) * 2, "points": (1400,) * 2}
    return _exponentials("exp2_labels_d4", (0.3, 2.5), (3, 4), 60, 0.05, 17, **grid)


@case
def exp3_labels_d6() -> Integral:
    rates = (0.12, 0.8, 5.0)
    # six narrow peaks far apart: one ordering is integrated
    grid = {"low": (-9.0,) * 3, "high": (9.0,) * 3, "points": (64,) * 3}
    grid |= {"whiten_from": tuple(np.log(rates)), "copies": 6}
    return _exponentials("exp3_labels_d6", rates, (3, 3, 4), 120, 0.01, 18, **grid)


def _dose_response(name: str, doses, seed: int, noise: float) -> Integral:
    """Baseline, largest effect and log ED50 of a saturating curve."""
    rng = np.random.default_rng(seed)
    dose = np.repeat(doses, 3)
    y = 0.5 + 4.0 * dose / (dose + 3.0) + noise * rng.normal(size=len(dose))
    prior_sd = np.array([2.0, 5.0])

    def effect(log_half):
        return dose / (dose + jnp.exp(log_half))

    def log_density(z):
        fit = jnp.sum(log_normal(y, z[0] + z[1] * effect(z[2]), noise))
        prior = jnp.sum(log_normal(z[:2], 0.0, prior_sd)) + log_normal(z[2], 0.0, 1.5)
        return fit + prior

    def without_linear(w):
        basis = jnp.stack([jnp.ones(len(dose)), effect(w[0])], axis=1)
        return log_linear_data(y, basis, prior_sd, noise) + log_normal(w[0], 0.0, 1.5)

    return Integral(
        name,
        log_density,
        **place(3, 0.0, [2.0, 5.0, 1.5]),
        how=LINEAR_OUT,
        quadrature=Quadrature(without_linear, (-14.0,), (14.0,), (4001,)),
    )


@case
def emax_good_d3() -> Integral:
    doses = np.array([0.0, 0.3, 1.0, 3.0, 10.0, 30.0, 100.0])
    return _dose_response("emax_good_d3", doses, 20, 0.2)


@case
def emax_weak_d3() -> Integral:
    """Doses far below the ED50: effect and ED50 trade places along a bent ridge."""
    return _dose_response("emax_weak_d3", np.array([0.0, 0.1, 0.3, 0.6]), 21, 0.6)


@case
def student_outliers_d2() -> Integral:
    rng = np.random.default_rng(23)
    y = np.r_[1.0 + 0.5 * rng.normal(size=14), 6.5, 8.0, -7.0]
    df = 4.0
    constant = special.gammaln((df + 1.0) / 2.0) - special.gammaln(df / 2.0)
    constant = float(constant - 0.5 * np.log(df * np.pi))

    def log_density(z):
        residual = (y - z[0]) * jnp.exp(-z[1])
        fit = jnp.sum(constant - (df + 1.0) / 2.0 * jnp.log1p(residual**2 / df) - z[1])
        return fit + log_normal(z[0], 0.0, 10.0) + log_normal(z[1], 0.0, 1.5)

    return Integral(
        "student_outliers_d2",
        log_density,
        **place(2, 0.0, [5.0, 1.0]),
        how="trapezoid rule in coordinates whitened at the peak",
        quadrature=Quadrature(
            log_density, (-25.0,) * 2, (25.0,) * 2, (1500,) * 2, whiten_from=(1.0, -0.5)
        ),
    )


@case
def changepoint_smooth_d3() -> Integral:
    rng = np.random.default_rng(25)
    rows, noise, width = 40, 0.8, 0.04
    x = (np.arange(rows) + 0.5) / rows
    y = np.where(x < 0.62, 0.0, 1.3) + noise * rng.normal(size=rows)

    def share_after(z):
        return jax.nn.sigmoid((x - jax.nn.sigmoid(z)) / width)

    def log_density(z):
        after = share_after(z[2])
        fit = jnp.sum(log_normal(y, z[0] * (1.0 - after) + z[1] * after, noise))
        return fit + jnp.sum(log_normal(z[:2], 0.0, 3.0)) + log_flat_fraction(z[2])

    def without_levels(w):
        after = share_after(w[0])
        basis = jnp.stack([1.0 - after, after], axis=1)
        return log_linear_data(y, basis, 3.0, noise) + log_flat_fraction(w[0])

    return Integral(
        "changepoint_smooth_d3",
        log_density,
        **place(3, 0.0, [3.0, 3.0, 1.6]),
        how=LINEAR_OUT,
        quadrature=Quadrature(without_levels, (-45.0,), (45.0,), (60_001,)),
    )


@case
def sinusoid_strong_d3() -> Integral:
    """A periodogram's worth of small peaks beside one that matters."""
    rng = np.random.default_rng(33)
    rows, lowest, highest = 50, 0.1, 2.5
    t = np.sort(rng.uniform(0.0, 10.0, rows))
    y = 1.5 * np.sin(2.0 * np.pi * 1.1 * t + 0.4) + rng.normal(size=rows)

    def basis(z):
        frequency = lowest + (highest - lowest) * jax.nn.sigmoid(z)
        angle = 2.0 * np.pi * frequency * t
        return jnp.stack([jnp.cos(angle), jnp.sin(angle)], axis=1)

    def log_density(z):
        fit = jnp.sum(log_normal(y, basis(z[2]) @ z[:2], 1.0))
        return fit + jnp.sum(log_normal(z[:2], 0.0, 2.0)) + log_flat_fraction(z[2])

    def without_amplitudes(w):
        return log_linear_data(y, basis(w[0]), 2.0, 1.0) + log_flat_fraction(w[0])

    return Integral(
        "sinusoid_strong_d3",
        log_density,
        **place(3, 0.0, [2.0, 2.0, 1.6]),
        how=LINEAR_OUT,
        quadrature=Quadrature(without_amplitudes, (-45.0,), (45.0,), (60_001,)),
    )


@case
def gp_d3() -> Integral:
    """Log length, log amplitude and log noise of a Gaussian process with 15 points."""
    rng = np.random.default_rng(35)
    x = np.linspace(0.0, 5.0, 15)
    y = np.sin(1.3 * x) + 0.3 * rng.normal(size=15)
    squared = (x[:, None] - x[None, :]) ** 2
    centre = np.array([0.0, 0.0, -1.0])

    def log_density(z):
        covariance = jnp.exp(2.0 * z[1] - 0.5 * squared * jnp.exp(-2.0 * z[0]))
        covariance = covariance + (jnp.exp(2.0 * z[2]) + 1e-8) * jnp.eye(15)
        factor = jnp.linalg.cholesky(covariance)
        white = jax.scipy.linalg.solve_triangular(factor, y, lower=True)
        fit = -0.5 * white @ white - jnp.sum(jnp.log(jnp.diag(factor))) - 7.5 * LOG_2PI
        return fit + jnp.sum(log_normal(z, centre, 1.0))

    return Integral(
        "gp_d3",
        log_density,
        **place(3, centre, 1.0),
        how="trapezoid rule, two ranges and resolutions",
        quadrature=Quadrature(log_density, (-8.0, -8.0, -9.0), (8.0, 7.0, 4.5), (140, 120, 140)),
    )
