"""Laplace's method itself: integrals whose series is known. Values: ``make_values.py``."""

from __future__ import annotations

import functools

import jax.numpy as jnp
import numpy as np
import pytest
from references import assert_series, best_with_term, fit, values

import evidence as ev
from evidence.distributions import positive, simplex


@functools.cache
def bare(log_posterior, start, spread, support=None):
    """One model, and so one compiled program, for every data set of a family."""
    return ev.Model.from_log_posterior(
        log_posterior.__name__,
        log_posterior,
        start={"x": start},
        spread={"x": spread},
        support=None if support is None else {"x": support},
    )


def gamma_in_t(p, data):
    t = p["x"]
    inside = jnp.where(t > 0.0, t, 1.0)
    return jnp.where(t > 0.0, data["n"][0] * jnp.log(inside) - inside, -jnp.inf)


def gamma_in_log_t(p, data):
    """The same integrand by its support: the package adds the log Jacobian."""
    return (data["n"][0] - 1.0) * jnp.log(p["x"]) - p["x"]


def period(p, data):
    return jnp.where(jnp.abs(p["x"]) <= np.pi, data["x"][0] * jnp.cos(p["x"]), -jnp.inf)


def beta_in_logit(p, data):
    z = p["x"]
    return -data["a"][0] * jnp.logaddexp(0.0, -z) - data["b"][0] * jnp.logaddexp(0.0, z)


def beta_in_fraction(p, data):
    x = p["x"]
    inside = (x > 0.0) & (x < 1.0)
    x = jnp.where(inside, x, 0.5)
    return jnp.where(inside, data["a"][0] * jnp.log(x) + data["b"][0] * jnp.log1p(-x), -jnp.inf)


def dirichlet(p, data):
    return jnp.sum((data["a"] - 1.0) * jnp.log(p["x"]))


def quartic(p, data):
    return -0.5 * p["x"] ** 2 - data["size"][0] * p["x"] ** 4


def hilbert(p, data):
    return -0.5 * p["x"] @ data["precision"] @ p["x"]


@pytest.mark.parametrize("known", values("gamma_in_t"), ids=lambda k: f"n={k['n']:g}")
def test_factorial_in_t(known):
    """DLMF 5.11.3: c = 1/(12 n)."""
    found = fit(bare(gamma_in_t, 3.0, 5.0), {"n": np.array([known["n"]])})
    # at n = 1 the sixth derivative is 20 times the fourth, and the differences feel it
    assert_series(found, known, term=3e-4 if known["n"] == 1.0 else 1e-4)
    assert found.mode["x"] == pytest.approx(known["n"], rel=1e-7)


@pytest.mark.parametrize("known", values("gamma_in_log_t"), ids=lambda k: f"n={k['n']:g}")
def test_gamma_function_in_log_t(known):
    """A different integral in another coordinate, and the same c = 1/(12 n)."""
    n = known["n"]
    found = fit(bare(gamma_in_log_t, 3.0, 2.0, positive), {"n": np.array([n])})
    assert_series(found, known)
    # what is left is the next term of Stirling's series (DLMF 5.11.1), bounded by the one after
    left = known["log_integral"] - best_with_term(found) + 1.0 / (360.0 * n**3)
    assert abs(left) <= 1.0 / (1260.0 * n**5) + 1e-5 / n


@pytest.mark.parametrize("known", values("bessel"), ids=lambda k: f"x={k['x']:g}")
def test_bessel_function(known):
    """DLMF 10.40.1: c = 1/(8 x); a bounded interval."""
    found = fit(bare(period, 0.5, 1.5), {"x": np.array([known["x"]])})
    assert_series(found, known)


@pytest.mark.parametrize("family", ["beta_symmetric", "beta_in_logit"])
def test_beta_function_in_the_logit(family):
    """c = (1/a + 1/b - 1/(a + b))/12; 1/(8 n) where both are n."""
    for known in values(family):
        a, b = known["a"], known["b"]
        found = fit(bare(beta_in_logit, 0.1, 2.0), {"a": np.array([a]), "b": np.array([b])})
        assert_series(found, known)
        assert known["second_order_term"] == pytest.approx((1 / a + 1 / b - 1 / (a + b)) / 12)


@pytest.mark.parametrize("known", values("beta_in_fraction"), ids=lambda k: f"{k['a']:g}")
def test_beta_function_in_the_fraction(known):
    """The coordinate changes size and sign of c: (1/a + 1/b - 13/(a + b))/12 for B(a+1, b+1)."""
    a, b = known["a"], known["b"]
    found = fit(bare(beta_in_fraction, 0.4, 0.2), {"a": np.array([a]), "b": np.array([b])})
    assert_series(found, known)
    assert found.second_order_term < 0.0
    assert known["second_order_term"] == pytest.approx((1 / a + 1 / b - 13 / (a + b)) / 12)


@pytest.mark.parametrize("known", values("dirichlet"), ids=lambda k: f"K={len(k['a'])}")
def test_dirichlet_normaliser(known):
    """The first test of cubic terms in several dimensions; error of Laplace + c below 2 c^2."""
    a = np.array(known["a"])
    start = tuple(np.full(len(a), 1.0 / len(a)))
    found = fit(bare(dirichlet, start, 1.5, simplex), {"a": a})
    assert_series(found, known)
    error = known["log_integral"] - best_with_term(found)
    assert abs(error) < 2.0 * known["second_order_term"] ** 2


@pytest.mark.parametrize("known", values("quartic"), ids=lambda k: f"size={k['size']:g}")
def test_quartic_term_alone(known):
    """exp(1/32 l) K_{1/4}(1/32 l) / (2 sqrt(2 l)): c = -3 l."""
    found = fit(bare(quartic, 0.2, 1.0), {"size": np.array([known["size"]])})
    assert_series(found, known)
    assert found.cubic_part == pytest.approx(0.0, abs=1e-8)


@pytest.mark.parametrize("known", values("hilbert"), ids=lambda k: f"n={k['n']:g}")
def test_hilbert_precision(known):
    """OEIS A005249: exact for Laplace, at condition numbers up to 1.5e7."""
    n = int(known["n"])
    row = np.arange(1, n + 1)
    precision = 1.0 / (row[:, None] + row[None, :] - 1.0)
    found = fit(bare(hilbert, tuple(np.ones(n)), 1.0), {"precision": precision})
    assert found.laplace == pytest.approx(known["log_integral"], abs=1e-6)
    assert found.second_order_term == pytest.approx(0.0, abs=1e-6)
