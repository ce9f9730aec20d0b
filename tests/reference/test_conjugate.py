"""Evidences in closed form. Values: ``make_values.py``; formulas from Bernardo & Smith (1994)."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest
from jax.scipy.special import gammaln
from references import assert_covered, assert_series, best_with_term, dataset, values
from references import fit as fit_to_depth

import evidence as ev
from evidence.distributions import (
    Beta,
    Binomial,
    Dirichlet,
    Exponential,
    Gamma,
    InverseGamma,
    Normal,
    Poisson,
)

DATA_SETS = {"x1,x2": ["x1", "x2"], "x1-x4": ["x1", "x2", "x3", "x4"], "x4": ["x4"]}


def fit(model, data):
    """Audited: the audit leaves mode, Laplace value and second-order term as they are."""
    return fit_to_depth(model, data, depth="standard")


def one(*numbers: float) -> list[np.ndarray]:
    return [np.array([x]) for x in numbers]


def assert_closed_form(found, known) -> None:
    """Laplace and c as known, and what the two leave is of the order of the next term."""
    assert_series(found, known)
    error = known["log_integral"] - best_with_term(found)
    assert abs(error) <= 1e-9 + 2.0 * known["second_order_term"] ** 2
    assert_covered(found, known["log_integral"])


def beta_prior(p, data):
    return Beta(data["a"][0], data["b"][0])


def gamma_prior(p, data):
    return Gamma(data["a"][0], data["b"][0])


BINOMIAL = ev.Model(
    "binomial",
    {"chance": beta_prior},
    lambda p, data: Binomial(data["n"], p["chance"]).log_prob(data["y"]),
)


@pytest.mark.parametrize("known", values("binomial_beta"), ids=lambda k: f"{k['y']:g}")
def test_binomial_with_beta_prior(known):
    y, n, a, b = one(known["y"], known["n"], known["a"], known["b"])
    found = fit(BINOMIAL, {"y": y, "n": n, "a": a, "b": b})
    assert_closed_form(found, known)
    assert np.log(found.mode["chance"] / (1 - found.mode["chance"])) == pytest.approx(
        known["mode"], abs=1e-6
    )


POISSON = ev.Model(
    "Poisson",
    {"rate": gamma_prior},
    lambda p, data: data["times"] * Poisson(p["rate"]).log_prob(data["count"]),
)


@pytest.mark.parametrize("known", values("poisson_gamma"), ids=lambda k: f"a={k['a']:g}")
def test_poisson_with_gamma_prior(known):
    """Horse kicks (Bortkiewicz 1898), digits of pi, and three zeros, where c = 1/6."""
    counts = np.zeros((5, 2))
    counts[: len(known["counts"])] = known["counts"]
    a, b = one(known["a"], known["b"])
    found = fit(POISSON, {"count": counts[:, 0], "times": counts[:, 1], "a": a, "b": b})
    assert_closed_form(found, known)
    assert np.log(found.mode["rate"]) == pytest.approx(known["mode"], abs=1e-6)


def multinomial(p, data):
    y = data["y"]
    coefficient = gammaln(jnp.sum(y) + 1.0) - jnp.sum(gammaln(y + 1.0))
    return jnp.sum(y * jnp.log(p["share"])) + coefficient


@pytest.mark.parametrize("known", values("multinomial_dirichlet"), ids=lambda k: f"K={len(k['y'])}")
def test_multinomial_with_dirichlet_prior(known):
    prior = Dirichlet(np.array(known["a"]))
    found = fit(ev.Model("shares", {"share": prior}, multinomial), {"y": np.array(known["y"])})
    assert_closed_form(found, known)


@pytest.mark.parametrize("known", values("normal_mean"), ids=lambda k: f"m0={k['m0']:g}")
def test_normal_mean_is_exact(known):
    """Sleep differences (Student 1908), and a single observation of 2."""
    y = np.array([2.0]) if known["t2"] == 9.0 else dataset("sleep_differences")["difference"]
    model = ev.Model(
        "mean",
        {"mean": Normal(known["m0"], np.sqrt(known["t2"]))},
        lambda p, data: Normal(p["mean"], p["sd"]).log_prob(data["y"]),
        constants={"sd": np.sqrt(known["s2"])},
    )
    found = fit(model, {"y": y})
    assert found.laplace == pytest.approx(known["log_integral"], abs=1e-9)
    assert_covered(found, known["log_integral"])
    assert found.second_order_term == pytest.approx(0.0, abs=1e-9)


def test_normal_mean_and_variance():
    """Normal inverse gamma; the marginal is Student t (checked against scipy elsewhere)."""
    known = values("normal_inverse_gamma")[0]
    model = ev.Model(
        "mean and variance",
        {
            "variance": InverseGamma(known["a0"], known["b0"]),
            "mean": lambda p: Normal(0.0, jnp.sqrt(known["v0"] * p["variance"])),
        },
        lambda p, data: Normal(p["mean"], jnp.sqrt(p["variance"])).log_prob(data["difference"]),
    )
    assert_closed_form(fit(model, dataset("sleep_differences")), known)


@pytest.mark.parametrize("known", values("regression"), ids=lambda k: k["data"])
def test_regression_on_raw_covariates(known):
    """Hald cement: the normal matrix of the raw covariates is badly conditioned."""
    data = dataset("cement")
    design = np.stack([np.ones(13), *(data[c] for c in DATA_SETS[known["data"]])], axis=1)
    terms = design.shape[1]
    model = ev.Model(
        "regression",
        {
            "variance": InverseGamma(known["a0"], known["b0"]),
            "slope": lambda p: Normal(0.0, jnp.sqrt(known["v0"] * p["variance"]), shape=(terms,)),
        },
        lambda p, data: Normal(data["design"] @ p["slope"], jnp.sqrt(p["variance"])).log_prob(
            data["y"]
        ),
    )
    found = fit(model, {"design": design, "y": data["y"]})
    assert found.laplace == pytest.approx(known["laplace"], abs=1e-7)
    assert found.second_order_term == pytest.approx(known["second_order_term"], abs=1e-4)
    assert_covered(found, known["log_integral"])


def g_prior_posterior(p, data):
    """Flat intercept, density 1/variance, Zellner's g-prior; log variance has no Jacobian left."""
    x, y, terms = data["x"], data["y"], data["x"].shape[1]
    sd = jnp.exp(0.5 * p["log_variance"])
    fitted = p["intercept"] + x @ p["slope"]
    spread = jnp.sqrt(data["g"][0]) * sd
    # (X'X)^-1 in the prior covariance: X slope / spread is standard in the span of X
    log_det = jnp.linalg.slogdet(x.T @ x)[1]
    prior = -0.5 * jnp.sum((x @ p["slope"] / spread) ** 2) + 0.5 * log_det
    prior = prior - terms * (jnp.log(spread) + 0.5 * jnp.log(2.0 * jnp.pi))
    return jnp.sum(Normal(fitted, sd).log_prob(y)) + prior


def null_posterior(p, data):
    sd = jnp.exp(0.5 * p["log_variance"])
    return jnp.sum(Normal(p["intercept"], sd).log_prob(data["y"]))


@pytest.mark.parametrize("known", values("g_prior"), ids=lambda k: k["data"])
def test_g_prior_bayes_factor(known):
    """Liang, Paulo, Molina, Clyde & Berger (2008), JASA 103: log Bayes factor to the null."""
    data = dataset("cement")
    x = np.stack([data[c] for c in DATA_SETS[known["data"]]], axis=1)
    columns = {"x": x - x.mean(axis=0), "y": data["y"], "g": np.array([known["g"]])}
    start = {"intercept": 95.0, "log_variance": 4.0}
    spread = {"intercept": 20.0, "log_variance": 2.0}
    slopes = {"slope": np.zeros(x.shape[1])}
    with_slopes = fit(
        ev.Model.from_log_posterior(
            "slopes", g_prior_posterior, start | slopes, spread=spread | {"slope": 2.0}
        ),
        columns,
    )
    null = fit(ev.Model.from_log_posterior("null", null_posterior, start, spread=spread), columns)
    assert with_slopes.laplace - null.laplace == pytest.approx(known["laplace"], abs=1e-8)
    assert with_slopes.second_order_term == pytest.approx(known["second_order_term"], rel=1e-3)
    assert null.second_order_term == pytest.approx(known["second_order_term_null"], rel=1e-3)
    joint = np.hypot(with_slopes.standard_error, null.standard_error)
    factor = with_slopes.log_evidence - null.log_evidence
    assert abs(factor - known["log_bayes_factor"]) <= 3.0 * joint
    assert joint < 0.05


def test_exponential_with_gamma_prior():
    known = values("exponential_gamma")[0]
    model = ev.Model(
        "exponential",
        {"rate": Gamma(known["a"], known["b"])},
        lambda p, data: Exponential(p["rate"]).log_prob(data["y"]),
    )
    assert_closed_form(fit(model, {"y": np.array([1.2, 0.4, 3.1, 0.9])}), known)


def test_variance_with_inverse_gamma_prior():
    known = values("inverse_gamma_variance")[0]
    model = ev.Model(
        "variance",
        {"variance": InverseGamma(known["a"], known["b"])},
        lambda p, data: Normal(0.0, jnp.sqrt(p["variance"])).log_prob(data["difference"]),
    )
    assert_closed_form(fit(model, dataset("sleep_differences")), known)
