"""What goes wrong in a user's function, in words that say what to type."""

from __future__ import annotations

import math

import jax
import jax.numpy as jnp
import numpy as np
import pytest

import evidence as ev
from evidence.distributions import Normal
from evidence.problem import Problem

DATA = {"y": np.array([0.3, 1.1, 0.8]), "group": np.array([0, 1, 0])}
PRIORS = {"mean": Normal(0.0, 2.0), "width": Normal(0.0, 1.0)}


def join(log_likelihood, data=DATA, **options):
    return Problem(ev.Model("level", PRIORS, log_likelihood, **options), data)


def mean_terms(mean, data):
    return Normal(mean, 1.0).log_prob(data["y"])


BRANCHES = "branches, loops, indexes or computes in Python on a traced value.*jnp.where"


@pytest.mark.parametrize(
    ("log_likelihood", "words"),
    [
        (lambda p, data: p["maen"], r"'level' asks for 'maen'.*There are: mean, width.*'mean'\?"),
        (lambda p, data: p["zeta"], r"asks for 'zeta'.*There are: mean, width\.$"),
        (lambda p, data: p["mean"] * data["yy"], r"asks for 'yy', which is not in the data.*'y'\?"),
        (lambda p, data: np.exp(p["mean"]), "passes a traced value to NumPy.*jnp.exp.*np.exp"),
        (lambda p, data: np.sum(np.asarray(p["mean"])), "passes a traced value to NumPy"),
        (lambda p, data: p["mean"] if p["mean"] > 0 else 0.0, BRANCHES),
        (lambda p, data: math.exp(p["mean"]), rf"{BRANCHES}.*jnp.exp\(x\) instead of math.exp"),
        (lambda p, data: float(p["mean"]) + 0.0, BRANCHES),
        (lambda p, data: data["y"][data["y"] > p["mean"]], BRANCHES),
        (lambda p, data: [1.0, 2.0][p["mean"].astype(int)], BRANCHES),
        (lambda p, data: 1 / 0, "could not be traced; got ZeroDivisionError: division by zero"),
        (lambda p, data: jnp.zeros(3) + jnp.zeros(2), "could not be traced; got TypeError: "),
        (lambda p, data: None, "must return a number or an array.*got NoneType.*log_prob"),
        (lambda p, data: [p["mean"]], "must return a number or an array.*got list"),
        (lambda p, data: 3, "must return float64 values; got int64"),
        (lambda p, data: p["mean"].astype(jnp.float32), "float64 values; got float32.*astype"),
        (lambda p, data: p["mean"] > 0, "float64 values; got bool"),
        (
            lambda p, data: mean_terms(p["mean"], {"y": data["y"][:, None]}) + data["y"],
            r"shape \(n,\); got shape \(3, 3\).*\(n, 1\) array against an \(n,\) array",
        ),
        (lambda p, data: mean_terms(p["mean"], data)[None], r"got shape \(1, 3\)"),
    ],
)
def test_mistakes_in_a_log_likelihood(log_likelihood, words):
    with pytest.raises(ev.DeclarationError, match=words):
        join(log_likelihood)
    assert not jax.config.jax_enable_x64


@pytest.mark.parametrize(
    ("prior", "words"),
    [
        (lambda p: 3.0, "prior function of 'width' in 'level' must return a distr.*got float"),
        (lambda p: Normal, "prior of 'width' in 'level' must be a distribution"),
        (lambda p: Normal(p["maen"], 1.0), "asks for 'maen'.*Did you mean 'mean'"),
        (lambda p: Normal(p["width"], 1.0), "asks for 'width', which is not declared"),
        (lambda p, data: Normal(data["yy"], 1.0), "asks for 'yy', which is not in the data"),
        (lambda p: Normal(np.exp(p["mean"]), 1.0), "prior of 'width' in 'level' passes.*NumPy"),
        (lambda p: Normal(0, 1) if p["mean"] > 0 else None, f"prior of 'width'.*{BRANCHES}"),
        (lambda p: ev.distributions.Poisson(jnp.exp(p["mean"])), "must be continuous"),
    ],
)
def test_mistakes_in_a_dependent_prior(prior, words):
    model = ev.Model(
        "level", {"mean": Normal(0, 1), "width": prior}, lambda p, d: mean_terms(p["mean"], d)
    )
    with pytest.raises(ev.DeclarationError, match=words):
        Problem(model, DATA)


def test_the_users_own_error_is_the_cause():
    with pytest.raises(ev.DeclarationError, match="ZeroDivisionError") as caught:
        join(lambda p, data: 1 / 0)
    assert isinstance(caught.value.__cause__, ZeroDivisionError)


@pytest.mark.parametrize(
    ("log_likelihood", "terms"),
    [
        (lambda p, data: mean_terms(p["mean"], data), 3),
        (lambda p, data: mean_terms(p["mean"], data).sum(), None),
        (lambda p, data: p["mean"] * jnp.ones((1,)), 1),
        (lambda p, data: 0.0, None),
        (lambda p: -(p["mean"] ** 2), None),
    ],
)
def test_the_number_of_terms(log_likelihood, terms):
    assert join(log_likelihood).terms == terms


@pytest.mark.parametrize(
    "log_likelihood",
    [
        lambda p, data: mean_terms(p["mean"].astype(jnp.float32), data),
        lambda p, data: jax.jit(lambda m: mean_terms(m.astype(jnp.float32), data))(p["mean"]),
        lambda p, data: jax.lax.cond(
            p["mean"] > 0, lambda m: m.astype(jnp.float32).astype(float), lambda m: m, p["mean"]
        ),
    ],
)
def test_casts_down_inside_are_found(log_likelihood):
    """Also those inside a jitted function or a branch."""
    assert join(log_likelihood).float32 == ("a cast to float32 inside the function",)


def test_closed_over_float32_is_named_in_a_warning():
    weights = jnp.asarray([0.1, 0.2, 0.3])
    assert weights.dtype == np.float32
    model = ev.Model("level", PRIORS, lambda p, data: mean_terms(p["mean"] * weights, data))
    with pytest.warns(ev.EvidenceWarning, match="weights is float32, which keeps 7 of 16 digits"):
        ev.approximate(model, DATA, depth="none")


def test_whole_numbers_of_the_data_may_index():
    offsets = np.array([0.0, 1.0])
    problem = join(lambda p, d: mean_terms(p["mean"] + jnp.asarray(offsets)[d["group"]], d))
    found = problem.evaluate(np.zeros(2)).log_density
    expected = -0.5 * np.sum((DATA["y"] - offsets[DATA["group"]]) ** 2)
    constant = -1.5 * np.log(2 * np.pi) - np.log(2 * np.pi) - np.log(2.0)
    assert found == pytest.approx(expected + constant, abs=1e-12)


@pytest.mark.parametrize(
    ("data", "words"),
    [
        ({"y": [0.1, np.nan]}, "nan"),
        ({"y": ["a", "b"]}, "text|words|number"),
    ],
)
def test_data_with_nan_or_text(data, words):
    with pytest.raises(ev.DataError, match=words):
        join(lambda p, d: mean_terms(p["mean"], d), data)
