"""The Gaussian posterior in natural units: against exact ones, by draws, and for arviz."""

from __future__ import annotations

import warnings

import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats as st
from scipy.integrate import quad

import evidence as ev
from evidence.distributions import Dirichlet, LogNormal, MultivariateNormal, Normal
from evidence.posterior import COLUMNS, RecordedPosterior, WeightedDraws

ERROR = 4.0 / np.sqrt(20_000)  # four standard errors of a mean of the table's draws, in sd


def approximate(model, data=None, **options):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(model, data, depth="none", **options)


Y = np.array([1.2, 0.7, 2.1])
COVARIANCE = np.array([[2.0, 0.6], [0.6, 0.5]])
PAIR = ev.Model(
    "pair",
    {"x": MultivariateNormal(np.zeros(2), COVARIANCE), "rate": LogNormal(0.5, 0.4)},
    lambda p, data: Normal(p["x"][0] + p["x"][1], 0.8).log_prob(data["y"]),
    units={"rate": "1/day"},
    notes={"rate": "of decay"},
)


@pytest.fixture(scope="module")
def pair():
    return approximate(PAIR, {"y": Y}).posterior


def exact_pair():
    """Mean and covariance of x given the three sums, by the normal equations."""
    design = np.ones((3, 2))
    precision = np.linalg.inv(COVARIANCE) + design.T @ design / 0.8**2
    covariance = np.linalg.inv(precision)
    return covariance @ design.T @ Y / 0.8**2, covariance


def test_moments_and_intervals_of_an_exact_gaussian(pair):
    mean, covariance = exact_pair()
    sd = np.sqrt(np.diagonal(covariance))
    assert pair.mean_z[:2] == pytest.approx(mean, abs=1e-9)
    assert pair.covariance_z[:2, :2] == pytest.approx(covariance, abs=1e-10)
    assert (pair.mean["x"] - mean) / sd == pytest.approx([0, 0], abs=ERROR)
    assert pair.sd["x"] / sd == pytest.approx([1, 1], abs=ERROR)
    for index, row in enumerate(pair.rows()[:2]):
        assert row["parameter"] == f"x[{index}]"
        assert row["mode"] == pytest.approx(mean[index], abs=1e-9)
        ends = (np.array([row["low"], row["high"]]) - mean[index]) / sd[index]
        assert ends == pytest.approx(st.norm.ppf([0.025, 0.975]), abs=0.08)
    expected = covariance[0, 1] / np.prod(sd)
    correlations = pair.correlations()
    assert list(correlations) == ["x[0]", "x[1]", "rate"]
    assert correlations.loc["x[0]", "x[1]"] == pytest.approx(expected, abs=0.02)
    assert abs(correlations.loc["x[0]", "rate"]) < 0.03


def test_a_lognormal_through_the_transform(pair):
    """The likelihood does not read the rate: its posterior is its prior, mean included."""
    exact = st.lognorm(0.4, scale=np.exp(0.5))
    (row,) = [r for r in pair.rows() if r["parameter"] == "rate"]
    assert row["mode"] == pytest.approx(np.exp(0.5), abs=1e-9)  # of log rate, not of rate
    assert row["mean"] == pytest.approx(exact.mean(), abs=ERROR * exact.std())
    assert row["sd"] == pytest.approx(exact.std(), rel=0.06)
    assert [row["low"], row["high"]] == pytest.approx(exact.ppf([0.025, 0.975]), rel=0.04)
    assert (row["unit"], row["note"]) == ("1/day", "of decay")


def test_the_table_explains_its_columns(pair):
    table = pair.table()
    assert list(table) == list(COLUMNS) == list(table.attrs["columns"])
    assert all(len(text) > 10 for text in COLUMNS.values())
    assert table["parameter"].tolist() == ["x[0]", "x[1]", "rate"]


def test_draws_follow_the_seed(pair):
    first, again, other = pair.draws(50), pair.draws(50), pair.draws(50, seed=1)
    assert {k: v.shape for k, v in first.items()} == {"x": (50, 2), "rate": (50,)}
    assert all(np.array_equal(first[k], again[k]) for k in first)
    assert not np.array_equal(first["x"], other["x"])
    assert all(v.dtype == np.float64 for v in first.values())
    refit = approximate(PAIR, {"y": Y}, seed=1).posterior
    assert refit.draws(50)["rate"] == pytest.approx(other["rate"], abs=1e-9)


@pytest.mark.parametrize("number", [0, -3, 2.5, "many", None])
def test_the_number_of_draws_is_checked(pair, number):
    with pytest.raises(ev.DeclarationError, match="number of draws must be a positive whole"):
        pair.draws(number)


def test_log_density_is_the_exact_one_in_natural_units(pair):
    mean, covariance = exact_pair()
    exact = st.multivariate_normal(mean, covariance).logpdf([0.3, 0.4])
    exact += st.lognorm(0.4, scale=np.exp(0.5)).logpdf(1.7)
    assert pair.log_density({"x": [0.3, 0.4], "rate": 1.7}) == pytest.approx(exact, abs=1e-9)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"x": [0.0, 0.0]}, "log_density needs the parameters x, rate; 'rate' is missing"),
        ({"x": [0.0, 0.0], "rat": 1.0}, "'rat' is unknown.*Did you mean 'rate'"),
        ({"x": [0.0, 0.0], "rate": -1.0}, "value of 'rate' in 'pair' must lie inside"),
        ({"x": [0.0], "rate": [1.0, 2.0]}, r"value of 'rate'.*must have the shape \(\)"),
    ],
)
def test_values_that_have_no_density(pair, values, words):
    with pytest.raises(ev.DeclarationError, match=words):
        pair.log_density(values)


# several modes


TWO = ev.Model.from_log_posterior(
    "two",
    lambda p: jnp.logaddexp(
        jnp.log(0.7) - 0.5 * (p["a"] - 1.0) ** 2 / 0.1**2,
        jnp.log(0.3) - 0.5 * (p["a"] - 3.0) ** 2 / 0.2**2,
    ),
    {"a": 2.0},
    spread={"a": 2.0},
    support={"a": ev.distributions.positive},
)


def test_a_mixture_over_modes():
    """In log a the two pieces are nearly Gaussian; shares by their Laplace values."""
    result = approximate(TWO)
    posterior = result.posterior
    assert len(posterior.modes) == 2
    shares = np.array([0.7 * 0.1, 0.3 * 0.2])
    shares /= shares.sum()
    assert np.sort(posterior.mode_weights) == pytest.approx(np.sort(shares), abs=0.01)
    draws = posterior.draws(20_000)["a"]
    assert np.mean(draws < 2.0) == pytest.approx(shares[0], abs=0.02)
    assert draws[draws > 2.0].mean() == pytest.approx(3.0, abs=0.03)
    assert draws[draws < 2.0].std() == pytest.approx(0.1, rel=0.1)
    assert posterior.mean["a"] == pytest.approx(shares @ [1.0, 3.0], abs=0.05)


def test_the_density_of_a_mixture_integrates_to_one():
    posterior = approximate(TWO).posterior
    total, _ = quad(
        lambda a: np.exp(posterior.log_density({"a": a})), 0.3, 6.0, points=[1.0, 3.0], limit=60
    )
    assert total == pytest.approx(1.0, abs=1e-6)


def test_the_density_on_a_simplex_integrates_to_one():
    """Per unit of all shares but the last, as a Dirichlet's density."""
    model = ev.Model("shares", {"w": Dirichlet([4.0, 6.0])}, lambda p: 0.0 * p["w"][0])
    posterior = approximate(model).posterior
    total, _ = quad(lambda w: np.exp(posterior.log_density({"w": [w, 1 - w]})), 1e-9, 1 - 1e-9)
    assert total == pytest.approx(1.0, abs=1e-6)


# what the audit accepted


def test_resampling_follows_the_weights():
    weighted = WeightedDraws(z=np.arange(4.0)[:, None], log_weights=np.log([1.0, 2.0, 5.0, 0.0001]))
    drawn = weighted.resample(8000, seed=0)[:, 0]
    counts = np.bincount(drawn.astype(int), minlength=4)
    # systematic: each count is within one of what is expected
    assert counts == pytest.approx(8000 * np.array([1, 2, 5, 0.0001]) / 8.0001, abs=1.0)
    assert abs(np.corrcoef(drawn[:-1], drawn[1:])[0, 1]) < 0.05  # not in order
    assert np.array_equal(drawn, weighted.resample(8000, seed=0)[:, 0])
    assert not np.array_equal(drawn, weighted.resample(8000, seed=1)[:, 0])


def test_the_refined_posterior_uses_them(pair):
    import dataclasses

    assert pair.refined is None
    weighted = WeightedDraws(z=np.full((3, 3), [1.0, 2.0, 0.0]), log_weights=np.zeros(3))
    refined = dataclasses.replace(pair, weighted=weighted).refined
    assert refined.source == "refined"
    assert refined.draws(5)["x"].tolist() == [[1.0, 2.0]] * 5
    assert refined.draws(5)["rate"].tolist() == [1.0] * 5
    assert refined.summary.startswith("refined posterior: x[0] 1")
    assert pair.summary.startswith("Gaussian posterior: x[0] ")


# arviz, and texts


def test_arviz_takes_the_draws(pair):
    """InferenceData below arviz 1, DataTree from 1 on."""
    import arviz

    exported = pair.to_arviz(2000)
    old = arviz.__version__.startswith("0.")
    assert type(exported).__name__ == ("InferenceData" if old else "DataTree")
    assert exported.posterior["x"].shape == (1, 2000, 2)
    # arviz rounds what it shows and, from 1 on, writes it as text
    summary = arviz.summary(exported).astype(float)
    assert summary.index.tolist() == ["x[0]", "x[1]", "rate"]
    assert summary["mean"].tolist() == pytest.approx([*pair.mean["x"], pair.mean["rate"]], abs=0.15)


def test_texts(pair):
    text = repr(pair)
    assert text.startswith("Posterior (gaussian): mean, sd, 95 % interval")
    assert "1/day" in text
    many = ev.Model("many", {"a": Normal(0, 1, shape=(40,))}, lambda p: 0.0 * p["a"][0])
    shown = approximate(many).posterior
    assert len(repr(shown).splitlines()) <= 12
    assert "and 30 more" in repr(shown)
    odd = ev.Model("odd", {"<b>&": Normal(0, 1)}, lambda p: 0.0, units={"<b>&": "<i>"})
    html = approximate(odd).posterior._repr_html_()
    assert "&lt;b&gt;&amp;" in html
    assert "<i>" not in html


def test_a_recorded_posterior_has_a_table_and_no_draws(pair):
    recorded = RecordedPosterior(pair.rows())
    assert recorded.table().equals(pair.table())
    assert "Posterior (recorded)" in repr(recorded)
    with pytest.raises(ev.DeclarationError, match="cannot be made from a saved result"):
        recorded.draws(3)
