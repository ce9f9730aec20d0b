"""Empirical Bayes, against scikit-learn's two models that do the same."""

from __future__ import annotations

import warnings

import jax.numpy as jnp
import numpy as np
import pytest

import evidence as ev
from evidence.distributions import Normal, Poisson


def ridge():
    rng = np.random.default_rng(1)
    x = rng.normal(size=(40, 4))
    y = x @ np.array([1.0, -0.5, 0.0, 2.0]) + 0.7 * rng.normal(size=40)
    model = ev.Model(
        "ridge",
        {"w": lambda p: Normal(jnp.zeros(4), p["lambda"] ** -0.5)},
        lambda p, data: Normal(data["x"] @ p["w"], p["alpha"] ** -0.5).log_prob(data["y"]),
        constants={"lambda": 1.0, "alpha": 1.0},
    )
    return model, {"x": x, "y": y}


def test_ridge_agrees_with_scikit_learn():
    """BayesianRidge maximises log evidence plus the logs of two gamma hyperpriors on the
    precisions; with these switched off it maximises the evidence itself, as we do."""
    from sklearn.linear_model import BayesianRidge

    model, data = ridge()
    found = ev.fit_hyperparameters(model, data, over=["lambda", "alpha"])
    theirs = BayesianRidge(
        fit_intercept=False, alpha_1=0, alpha_2=0, lambda_1=0, lambda_2=0, tol=1e-14,
        max_iter=10_000, compute_score=True,
    ).fit(data["x"], data["y"])  # fmt: skip
    assert found.converged
    assert float(found.fitted["lambda"]) == pytest.approx(theirs.lambda_, rel=1e-6)
    assert float(found.fitted["alpha"]) == pytest.approx(theirs.alpha_, rel=1e-6)
    assert found.log_evidence == pytest.approx(theirs.scores_[-1], abs=1e-8)
    assert np.all(np.diff(found.path) >= 0)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        again = ev.approximate(found.model, data, depth="none")
    assert again.laplace == pytest.approx(found.log_evidence, abs=1e-9)


def test_gaussian_process_agrees_with_scikit_learn():
    """GaussianProcessRegressor maximises the same log evidence over the logs of its kernel's
    numbers. Ours keeps the function's values as parameters and integrates them by Laplace's
    method, which is exact for a Gaussian."""
    from sklearn.gaussian_process import GaussianProcessRegressor
    from sklearn.gaussian_process.kernels import ConstantKernel, Matern, WhiteKernel

    rng = np.random.default_rng(3)
    t = np.sort(rng.uniform(0, 6, size=15))
    y = np.sin(t) + 0.3 * rng.normal(size=15)

    def log_likelihood(p, data):
        gap = jnp.abs(data["t"][:, None] - data["t"][None, :])
        kernel = p["height"] * jnp.exp(-gap / p["length"])
        values = jnp.linalg.cholesky(kernel) @ p["u"]
        return Normal(values, p["noise"] ** 0.5).log_prob(data["y"])

    model = ev.Model(
        "process", {"u": Normal(0.0, 1.0, shape=(15,))}, log_likelihood,
        constants={"height": 1.0, "length": 2.0, "noise": 0.2},
    )  # fmt: skip
    found = ev.fit_hyperparameters(model, {"t": t, "y": y}, over=["height", "length", "noise"])
    kernel = ConstantKernel(1.0) * Matern(2.0, nu=0.5) + WhiteKernel(0.2)
    theirs = GaussianProcessRegressor(kernel, alpha=0.0).fit(t[:, None], y)
    ours = np.log([float(found.fitted[k]) for k in ("height", "length", "noise")])
    assert found.log_evidence == pytest.approx(theirs.log_marginal_likelihood_value_, abs=1e-6)
    np.testing.assert_allclose(ours, theirs.kernel_.theta, atol=2e-3)
    at_theirs = theirs.log_marginal_likelihood(ours)
    assert found.log_evidence == pytest.approx(at_theirs, abs=1e-9)


def counts(sd):
    return ev.Model(
        "counts",
        {"rates": Normal(0.5, sd, shape=(6,))},
        lambda p, data: Poisson(log_rate=p["rates"]).log_prob(data["count"]),
    )


def test_the_slope_vanishes_for_counts_and_arrays_move_entry_by_entry():
    data = {"count": np.array([1.0, 9.0, 2.0, 0.0, 4.0, 7.0])}
    found = ev.fit_hyperparameters(counts(1.0), data, over=["rates.mean", "rates.sd"])
    assert found.converged
    f = ev.evidence_function(counts(1.0), data)

    def at(mean, sd):
        return f({"priors": {"rates": Normal(mean, sd, shape=(6,))}})

    mean, sd = (float(found.fitted[k]) for k in ("rates.mean", "rates.sd"))
    for other in ((mean + 0.05, sd), (mean - 0.05, sd), (mean, 1.1 * sd), (mean, sd / 1.1)):
        assert at(*other) < found.log_evidence
    assert found.log_evidence > found.declared_log_evidence
    assert found.model.priors["rates"].sd == pytest.approx(sd)


def test_table_text_and_picture():
    model, data = ridge()
    found = ev.fit_hyperparameters(model, data, over="alpha")
    table = found.table()
    assert list(table.columns) == list(table.attrs["columns"])
    assert table.hyperparameter.tolist() == ["alpha"]
    assert repr(found).startswith("ridge: log evidence ")
    assert len(repr(found).splitlines()) <= 12
    assert found.plot().axes[0].get_ylabel() == "log evidence [nats]"


def test_what_cannot_be_fitted_is_named():
    model, data = ridge()
    with pytest.raises(ev.DeclarationError, match=r"'alhpa' is no .* Did you mean 'alpha'"):
        ev.fit_hyperparameters(model, data, over=["alhpa"])
    with pytest.raises(ev.DeclarationError, match="over must name what is fitted"):
        ev.fit_hyperparameters(model, data, over=[])
