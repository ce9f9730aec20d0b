"""The numbers of a declaration: names, units, kinds, and what a move does."""

from __future__ import annotations

import jax.numpy as jnp
import numpy as np
import pytest

import evidence as ev
from evidence.distributions import (
    Beta,
    Cauchy,
    Dirichlet,
    Exponential,
    Gamma,
    HalfNormal,
    LogNormal,
    MultivariateNormal,
    Normal,
    StudentT,
    Uniform,
)
from evidence.stress.levers import find_levers


def levers_of(prior, **options):
    model = ev.Model("m", {"x": prior}, lambda p, data: 0.0 * jnp.sum(p["x"]), **options)
    found, refused = find_levers(model)
    return {lever.field: lever for lever in found}, refused, model


PRIORS = [
    (Normal(2.0, 0.5), {"mean": "location", "sd": "scale"}),
    (HalfNormal(0.5), {"sd": "scale"}),
    (LogNormal(-5.0, 1.0), {"log_mean": "location", "log_sd": "scale"}),
    (StudentT(4.0, 1.0, 2.0), {"df": "scale", "location": "location", "scale": "scale"}),
    (Cauchy(0.0, 1.0), {"location": "location", "scale": "scale"}),
    (Uniform(1.0, 3.0), {"centre": "location", "width": "scale"}),
    (Beta(2.0, 3.0), {"a": "scale", "b": "scale"}),
    (Gamma(2.0, 3.0), {"alpha": "scale", "rate": "scale"}),
    (Exponential(2.0), {"rate": "scale"}),
    (Dirichlet([1.0, 2.0]), {"concentration": "scale"}),
    (MultivariateNormal([0.0, 1.0], np.eye(2)), {"mean": "location", "covariance": "scale"}),
]


@pytest.mark.parametrize(("prior", "kinds"), PRIORS, ids=lambda x: type(x).__name__)
def test_every_number_is_found_with_its_kind(prior, kinds):
    found, refused, _ = levers_of(prior)
    assert {name: lever.kind for name, lever in found.items()} == kinds
    assert refused == ()


@pytest.mark.parametrize(("prior", "kinds"), PRIORS, ids=lambda x: type(x).__name__)
def test_a_moved_prior_is_what_its_declaration_would_be(prior, kinds):
    found, _, model = levers_of(prior)
    hyper = model.hyperparameters()
    for lever in found.values():
        assert type(lever.moved(hyper, 0.3)["priors"]["x"]) is type(prior)
        still = lever.moved(hyper, 0.0)["priors"]["x"]
        for field, _ in prior.hyperparameters:
            np.testing.assert_allclose(getattr(still, field), getattr(prior, field), rtol=1e-15)


def test_moves_are_factors_and_prior_sd():
    found, _, model = levers_of(Normal(2.0, 0.5))
    hyper = model.hyperparameters()
    assert found["sd"].moved(hyper, np.log(3.0))["priors"]["x"].sd == pytest.approx(1.5)
    assert found["mean"].moved(hyper, -2.0)["priors"]["x"].mean == pytest.approx(1.0)
    assert found["mean"].value_at(-2.0) == pytest.approx(1.0)
    assert found["sd"].per_unit(1.0) == pytest.approx(2.0)
    assert hyper["priors"]["x"].sd == 0.5
    found, _, model = levers_of(Uniform(1.0, 3.0))
    wide = found["width"].moved(model.hyperparameters(), np.log(2.0))["priors"]["x"]
    assert (wide.low, wide.high) == pytest.approx((0.0, 4.0))
    moved = found["centre"].moved(model.hyperparameters(), 1.0)["priors"]["x"]
    assert moved.low == pytest.approx(1.0 + 2.0 / np.sqrt(12.0))
    found, _, model = levers_of(MultivariateNormal([0.0, 1.0], [[4.0, 0.0], [0.0, 1.0]]))
    hyper = model.hyperparameters()
    wide = found["covariance"].moved(hyper, np.log(2.0))["priors"]["x"]
    np.testing.assert_allclose(wide.covariance, [[16.0, 0.0], [0.0, 4.0]])
    np.testing.assert_allclose(found["mean"].moved(hyper, 1.0)["priors"]["x"].mean, [2.0, 2.0])


def test_labels_are_the_trades_words_with_units():
    found, _, _ = levers_of(LogNormal(-5.0, 1.0), units={"x": "1/d"})
    assert found["log_sd"].label == "log sd of the prior on x"
    assert found["log_sd"].unit == "log 1/d"
    found, _, _ = levers_of(Gamma(2.0, 3.0), units={"x": "g"})
    assert (found["alpha"].label, found["alpha"].unit) == ("shape of the prior on x", "")
    assert (found["rate"].label, found["rate"].unit) == ("rate of the prior on x", "1/(g)")
    assert found["rate"].width == -1
    assert levers_of(Beta(2.0, 3.0))[0]["a"].label == "shape a of the prior on x"


def test_arrays_move_as_a_whole():
    found, _, model = levers_of(Normal([0.0, 1.0], [1.0, 2.0]))
    assert found["sd"].entries == 2
    assert np.isnan(found["sd"].value)
    moved = found["mean"].moved(model.hyperparameters(), 1.0)["priors"]["x"]
    np.testing.assert_allclose(moved.mean, [1.0, 3.0])


def test_constants_are_named_as_such():
    found, refused, model = levers_of(Normal(0.0, 1.0), constants={"g": 3.0, "zero": 0.0})
    lever = found["constant"]
    assert (lever.label, lever.name, lever.kind) == ("constant g", "g", "constant")
    assert lever.moved(model.hyperparameters(), np.log(2.0))["constants"]["g"] == pytest.approx(6.0)
    assert refused == ("constant zero of m is zero and has no scale to move by",)


def test_what_cannot_be_moved_is_said():
    found, refused, _ = levers_of(lambda p: Normal(0.0, 1.0))
    assert found == {}
    assert "is a function: write its numbers as constants=" in refused[0]
    bare = ev.Model.from_log_posterior("bare", lambda p: -(p["x"] ** 2), {"x": 0.0})
    assert "bare log posterior" in find_levers(bare)[1][0]


def test_foreign_priors():
    dist = pytest.importorskip("numpyro.distributions")
    found, refused, model = levers_of(dist.Normal(1.0, 2.0))
    assert {name: lever.kind for name, lever in found.items()} == {
        "loc": "location", "scale": "scale",
    }  # fmt: skip
    moved = found["scale"].moved(model.hyperparameters(), np.log(2.0))["priors"]["x"]
    assert float(moved.distribution.scale) == pytest.approx(4.0)
    shifted = found["loc"].moved(model.hyperparameters(), 1.0)["priors"]["x"]
    assert float(shifted.distribution.loc) == pytest.approx(3.0, rel=0.2)
    found, refused, _ = levers_of(dist.TruncatedNormal(0.0, 1.0, low=0.5))
    assert found == {} or "low" not in found
    assert refused
