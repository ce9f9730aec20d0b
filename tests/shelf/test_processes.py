"""Gaussian processes against scikit-learn: log marginal likelihood and mean."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from sklearn.gaussian_process import GaussianProcessRegressor, kernels

import evidence as ev
from evidence import shelf
from tests.shelf.parts import BY_NAME, PROCESS, ROWS, X, evaluate, likelihood

KERNELS = {
    "smooth": lambda p: kernels.RBF(p["length"]),
    "rough": lambda p: kernels.Matern(p["length"], nu=1.5),
    "smoother": lambda p: kernels.Matern(p["length"], nu=2.5),
    "periodic": lambda p: kernels.ExpSineSquared(p["length"], 7.3),
}
FRESH = np.linspace(-3.0, 40.0, 23)


def theirs(name: str, x: np.ndarray, y: np.ndarray) -> GaussianProcessRegressor:
    """scikit-learn's process at the truth of a part; it has no level."""
    p = BY_NAME[name].truth
    kernel = p["amplitude"] ** 2 * KERNELS[name](p) + kernels.WhiteKernel(p["noise"] ** 2)
    process = GaussianProcessRegressor(kernel, alpha=0.0, optimizer=None)
    return process.fit(x, y - p["level"])


@pytest.mark.parametrize("name", KERNELS)
def test_log_marginal_likelihood_of_scikit_learn(name):
    part = BY_NAME[name]
    data = part.data()
    known = theirs(name, X[:, None], data["y"]).log_marginal_likelihood_value_
    assert likelihood(part.model, part.truth, data) == pytest.approx(known, abs=1e-8)


@pytest.mark.parametrize("name", KERNELS)
def test_mean_of_scikit_learn(name):
    part = BY_NAME[name]
    data = part.data()
    process, level = theirs(name, X[:, None], data["y"]), part.truth["level"]
    kernel = {"smooth": "squared exponential", "rough": "matern 3/2", "smoother": "matern 5/2"}
    options = {"period": 7.3} if name == "periodic" else {"length": 4.0}
    model = shelf.gaussian_process(
        "at other x", kernel=kernel.get(name, "periodic"), observed=data, **options, **PROCESS
    )
    for predict, x in ((part.model.predict, X), (model.predict, FRESH)):
        given = {"x": x, "y": data["y"]} if x is X else {"x": x}
        found = evaluate(predict, part.values, given)["y"]
        np.testing.assert_allclose(found, level + process.predict(x[:, None]), atol=1e-8)


def test_without_observations_the_prediction_is_the_level():
    part = BY_NAME["smooth"]
    found = evaluate(part.model.predict, part.values, {"x": FRESH})["y"]
    np.testing.assert_allclose(found, part.truth["level"])


def test_distance_over_two_columns():
    part, rng = BY_NAME["rough"], np.random.default_rng(4)
    place = rng.uniform(0.0, 10.0, (ROWS, 2))
    place[1] = place[0]  # two rows at one place
    data = {"east": place[:, 0], "north": place[:, 1], "y": part.data()["y"]}
    model = shelf.gaussian_process(
        "field", **{**PROCESS, "x": ["east", "north"]}, kernel="matern 3/2", length=4.0
    )
    known = theirs("rough", place, data["y"]).log_marginal_likelihood_value_
    assert likelihood(model, part.truth, data) == pytest.approx(known, abs=1e-8)


def test_terms_are_those_of_each_row_given_the_rows_before():
    part = BY_NAME["smoother"]
    data = part.data()
    terms = evaluate(part.model.log_likelihood, part.values, data)
    first = {k: v[:20] for k, v in data.items()}
    np.testing.assert_allclose(
        evaluate(part.model.log_likelihood, part.values, first), terms[:20], atol=1e-10
    )


def test_the_evidence_with_an_unknown_level_is_exact():
    """All else held, the level adds its prior variance to every covariance: scipy's density."""
    part = BY_NAME["rough"]
    data, p = part.data(), part.truth
    held = {k: v for k, v in p.items() if k != "level"}
    model = shelf.gaussian_process(
        "level alone", kernel="matern 3/2", length=4.0, fixed=held, **PROCESS
    )
    found = ev.approximate(model, data, depth="none")
    kernel = p["amplitude"] ** 2 * KERNELS["rough"](p) + kernels.WhiteKernel(p["noise"] ** 2)
    covariance = kernel(X[:, None]) + 0.5**2
    exact = stats.multivariate_normal(np.ones(ROWS), covariance).logpdf(data["y"])
    assert found.laplace == pytest.approx(exact, abs=1e-8)


def test_nothing_is_added_to_the_diagonal():
    """Where the covariance is singular the density has no number, and none is made up."""
    part = BY_NAME["smooth"]
    assert np.isnan(likelihood(part.model, {**part.truth, "noise": 1e-12}, part.data()))
