"""Marginals of one parameter, and what the posterior says where the Gaussian is off."""

from __future__ import annotations

import dataclasses
import warnings

import numpy as np
import pytest
import scipy.stats as st
from matplotlib.figure import Figure

import evidence as ev
from evidence.distributions import Gamma, HalfNormal, Normal
from evidence.marginals import END_DENSITY, interval_shift, marginal
from evidence.posterior import WeightedDraws


def test_histograms_are_the_densities():
    rng = np.random.default_rng(1)
    gaussian, refined = rng.normal(2.0, 0.5, 40_000), rng.gamma(4.0, 0.5, 40_000)
    found = marginal(gaussian, refined)
    edges = np.array(found["edges"])
    middle, width = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)
    for name, law in (("gaussian", st.norm(2.0, 0.5)), ("refined", st.gamma(4.0, scale=0.5))):
        height = np.array(found[name])
        error = 5 * np.sqrt(law.pdf(middle) / (40_000 * width)) + 0.02 * law.pdf(2.0)
        assert np.all(np.abs(height - law.pdf(middle)) < error)
        assert np.sum(height * width) == pytest.approx(1.0, abs=0.005)


def test_fewer_draws_are_smoothed_more_and_keep_their_mass():
    draws = np.random.default_rng(2).normal(size=20_000)
    few = np.random.default_rng(3).choice(draws[:300], 20_000)
    rough, smooth = (marginal(draws, few, effective=n)["refined"] for n in (1e5, 300.0))
    jumps = [np.sum(np.abs(np.diff(x, n=2))) for x in (rough, smooth)]
    assert jumps[1] < 0.3 * jumps[0]
    assert np.sum(smooth) == pytest.approx(np.sum(rough), rel=0.01)


def test_a_parameter_that_does_not_vary_has_no_histogram():
    assert marginal(np.ones(100), None) == {"edges": [], "gaussian": [], "refined": None}
    assert marginal(np.arange(100.0), None)["refined"] is None


def test_the_shift_of_an_interval():
    assert interval_shift((-1.0, 1.0), (-1.1, 1.5), 0.5) == pytest.approx(1.0)
    assert interval_shift((-1.0, 1.0), (-1.0, 1.0), 0.0) == 0.0
    # the standard normal density at its own 2.5 % quantile (scipy)
    assert pytest.approx(st.norm.pdf(st.norm.ppf(0.025)), abs=1e-4) == END_DENSITY


@pytest.fixture(scope="module")
def gaussian():
    model = ev.Model(
        "line",
        {"level": Normal(0.0, 3.0), "noise": HalfNormal(2.0)},
        lambda p, data: Normal(p["level"], p["noise"]).log_prob(data["y"]),
        units={"level": "cm"},
    )
    y = np.random.default_rng(5).normal(1.0, 1.0, 30)
    return ev.approximate(model, {"y": y}, depth="none").posterior


def with_draws(posterior, shift, number=4000):
    """The posterior with 'audited' draws that are its own, moved by so many sd along level."""
    z = posterior.draws_z(number, seed=11)
    z[:, 0] += shift * np.sqrt(posterior.covariance_z[0, 0])
    weighted = WeightedDraws(z=z, log_weights=np.zeros(number))
    return dataclasses.replace(posterior, weighted=weighted)


@pytest.mark.parametrize(
    ("shift", "told"), [(0.0, False), (0.12, False), (0.5, True), (-2.0, True)]
)
def test_the_summary_tells_of_intervals_that_are_off(gaussian, shift, told):
    posterior = with_draws(gaussian, shift)
    words = "The refined intervals differ from the Gaussian ones: level ("
    assert (words in posterior.summary) == told
    assert set(posterior.shifted()) == ({"level"} if told else set())
    if told:
        assert posterior.shifted()["level"] == pytest.approx(abs(shift), abs=0.15)
    assert "differ" not in posterior.refined.summary
    assert "differ" not in gaussian.summary


def test_few_draws_make_no_alarm(gaussian):
    """Of 40 draws the ends of an interval are known to half an sd: a shift of 0.5 is no news."""
    assert with_draws(gaussian, 0.5, number=40).shifted() == {}


def test_a_skewed_posterior_says_so_by_itself():
    # Poisson rate with one count and a gamma prior: exact posterior Gamma(1.2, 1.1), in log rate
    # skewed to the left; conjugacy as in Gelman et al., Bayesian Data Analysis (2013), 2.6
    model = ev.Model(
        "rate",
        {"rate": Gamma(0.2, 0.1)},
        lambda p, data: data["n"] * np.log(1.0) + _poisson(data["n"], p["rate"]),
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        posterior = ev.approximate(model, {"n": np.array([1.0])}, depth="standard").posterior
    assert "The refined intervals differ from the Gaussian ones: rate (" in posterior.summary
    exact = st.gamma(1.2, scale=1.0 / 1.1).ppf([0.025, 0.975])
    row = posterior.refined.rows()[0]
    assert [row["low"], row["high"]] == pytest.approx(exact, rel=0.12)


def _poisson(n, rate):
    import jax.numpy as jnp

    return n * jnp.log(rate) - rate


def test_marginals_by_name_and_their_picture(gaussian):
    posterior = with_draws(gaussian, 0.5)
    first, second = posterior.marginals()
    assert [(x["parameter"], x["unit"]) for x in (first, second)] == [
        ("level", "cm"),
        ("noise", ""),
    ]
    assert len(first["edges"]) == 49
    assert first["refined"] is not None
    assert gaussian.marginals()[0]["refined"] is None
    figure = posterior.plot()
    assert isinstance(figure, Figure)
    assert [axes.get_title(loc="left") for axes in figure.axes] == ["level [cm]", "noise"]
    assert len(posterior.refined.plot().axes) == 2
