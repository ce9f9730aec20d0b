"""Identities every log evidence must obey, on examples drawn by hypothesis.

What varies travels as data, so that each model is compiled once.
"""

from __future__ import annotations

import functools
import warnings

import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import evidence as ev
from evidence.distributions import Normal, Poisson

FEW = settings(max_examples=6, deadline=None, derandomize=True)
SEEDS = st.integers(0, 2**31 - 1)
ROWS = 15


@functools.cache
def counts_model(order: tuple[str, ...] = ("level", "slope")) -> ev.Model:
    """A Poisson regression whose log-likelihood carries a constant from the data."""
    priors = {"level": Normal(1.0, 1.0), "slope": Normal(0.0, 1.0)}

    def log_likelihood(p, data):
        rate = jnp.exp(p["level"] + p["slope"] * data["x"])
        return Poisson(rate).log_prob(data["count"]) + data["shift"] / ROWS

    return ev.Model("counts", {name: priors[name] for name in order}, log_likelihood)


def counts(seed: int, shift: float = 0.0) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    x = rng.normal(size=ROWS)
    count = rng.poisson(np.exp(1.0 + 0.5 * x)).astype(float)
    return {"x": x, "count": count, "shift": np.full(ROWS, shift)}


def approximate(model, data):
    """Without an audit; a rotated Gaussian may rightly be called flatter than its spread."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(model, data, depth="none")


@FEW
@given(SEEDS, st.floats(-1e4, 1e4))
def test_a_constant_in_the_log_likelihood_is_added(seed, shift):
    """And with it every Bayes factor between candidates that carry it stays."""
    plain = approximate(counts_model(), counts(seed))
    moved = approximate(counts_model(), counts(seed, shift))
    tolerance = 1e-9 + 1e-13 * abs(shift)
    assert moved.log_evidence - plain.log_evidence == pytest.approx(shift, abs=tolerance)
    assert moved.second_order_term == pytest.approx(plain.second_order_term, abs=1e-6)


@FEW
@given(SEEDS)
def test_the_order_of_observations_does_not_matter(seed):
    data = counts(seed)
    order = np.random.default_rng(seed).permutation(ROWS)
    plain = approximate(counts_model(), data)
    mixed = approximate(counts_model(), {name: column[order] for name, column in data.items()})
    assert mixed.log_evidence == pytest.approx(plain.log_evidence, abs=1e-9)


@FEW
@given(SEEDS)
def test_the_order_of_parameters_does_not_matter(seed):
    plain = approximate(counts_model(), counts(seed))
    turned = approximate(counts_model(("slope", "level")), counts(seed))
    assert turned.log_evidence == pytest.approx(plain.log_evidence, abs=1e-9)
    assert turned.mode["slope"] == pytest.approx(plain.mode["slope"], abs=1e-7)


def _mean_in_unit(p, data):
    return Normal(0.0, 3.0 * data["unit"][0])


MEASUREMENTS = ev.Model(
    "measurements",
    {"mean": _mean_in_unit, "log_ratio": Normal(0.0, 1.0)},
    lambda p, data: Normal(p["mean"], data["unit"][0] * jnp.exp(p["log_ratio"])).log_prob(
        data["y"]
    ),
)


@FEW
@given(SEEDS, st.floats(-3.0, 3.0))
def test_a_change_of_units_shifts_by_the_log_jacobian(seed, power):
    """Grams to kilograms: densities of y grow by the factor per observation, priors follow."""
    y = np.random.default_rng(seed).normal(size=ROWS)
    unit = 10.0**power
    plain = approximate(MEASUREMENTS, {"y": y, "unit": np.ones(1)})
    other = approximate(MEASUREMENTS, {"y": y * unit, "unit": np.full(1, unit)})
    shift = -ROWS * np.log(unit)
    assert other.log_evidence - plain.log_evidence == pytest.approx(shift, abs=1e-8)


def _log_gamma(z, shape):
    return shape * z - jnp.exp(z)


def _logit_beta(z, a, b):
    return -a * jnp.logaddexp(0.0, -z) - b * jnp.logaddexp(0.0, z)


def _bare(name, log_posterior, *names) -> ev.Model:
    one = dict.fromkeys(names, 1.0)
    return ev.Model.from_log_posterior(name, log_posterior, one, spread=one)


RATE = _bare("rate", lambda p, data: _log_gamma(p["rate"], data["rate"][0]), "rate")
CHANCE = _bare("chance", lambda p, data: _logit_beta(p["chance"], *data["chance"]), "chance")
BOTH = _bare(
    "both",
    lambda p, data: (
        _log_gamma(p["rate"], data["rate"][0]) + _logit_beta(p["chance"], *data["chance"])
    ),
    "rate",
    "chance",
)


@FEW
@given(SEEDS)
def test_independent_pieces_add(seed):
    """Log evidence and second-order term alike (the term is additive, its log1p is not)."""
    drawn = np.random.default_rng(seed).uniform(0.5, 5.0, size=3)
    data = {"rate": drawn[:1], "chance": drawn[1:]}
    pieces = [approximate(RATE, data), approximate(CHANCE, data)]
    both = approximate(BOTH, data)
    assert both.log_evidence == pytest.approx(sum(a.log_evidence for a in pieces), abs=1e-8)
    terms = sum(a.second_order_term for a in pieces)
    assert both.second_order_term == pytest.approx(terms, abs=1e-5)


def _gaussian(p, data):
    z = data["map"] @ p["x"] - data["mean"]
    return -0.5 * z @ data["precision"] @ z


@functools.cache
def gaussian_model(dimension: int) -> ev.Model:
    return ev.Model.from_log_posterior(
        "Gaussian", _gaussian, {"x": np.zeros(dimension)}, spread={"x": np.full(dimension, 3.0)}
    )


def gaussian_data(seed: int, dimension: int) -> tuple[dict[str, np.ndarray], float]:
    """A random Gaussian and its log integral in closed form."""
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(dimension, dimension))
    precision = root @ root.T / dimension + 0.2 * np.eye(dimension)
    log_integral = 0.5 * (dimension * np.log(2.0 * np.pi) - np.linalg.slogdet(precision)[1])
    mean = rng.normal(size=dimension)
    return {"map": np.eye(dimension), "mean": mean, "precision": precision}, log_integral


@pytest.mark.parametrize("dimension", [1, 3, 12])
@FEW
@given(seed=SEEDS)
def test_gaussians_are_exact(dimension, seed):
    data, truth = gaussian_data(seed, dimension)
    found = approximate(gaussian_model(dimension), data)
    assert found.log_evidence == pytest.approx(truth, abs=1e-10)


@FEW
@given(SEEDS)
def test_a_linear_change_of_coordinates_keeps_a_gaussian_exact(seed):
    data, truth = gaussian_data(seed, 3)
    rng = np.random.default_rng(seed)
    turn = np.linalg.qr(rng.normal(size=(3, 3)))[0]
    change = turn @ np.diag(10.0 ** rng.uniform(-2.0, 2.0, size=3))
    found = approximate(gaussian_model(3), data | {"map": change})
    truth -= np.linalg.slogdet(change)[1]
    assert found.log_evidence == pytest.approx(truth, abs=1e-9)
