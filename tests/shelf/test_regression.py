"""Regressions against statsmodels at the maximum of the likelihood, and exact evidence by scipy."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

import evidence as ev
from evidence import shelf
from evidence.complaints import DataError
from tests.shelf.parts import BY_NAME, PREDICTORS, ROWS, evaluate, likelihood

NAMES = ["intercept", "slope_x", "slope_depth"]


def design(data) -> np.ndarray:
    """Intercept and scaled predictors: [rows, 3]."""
    scaled = [(data[name] - at) / step for name, (at, step) in PREDICTORS.items()]
    return np.stack([np.ones(ROWS), *scaled], axis=1)


def ordinary(data):
    found = sm.OLS(data["y"], design(data)).fit()
    # the maximum of the likelihood divides by n, not by the degrees of freedom
    return [*found.params, np.sqrt(found.ssr / ROWS)], found.llf


def logit(data):
    found = sm.Logit(data["y"], design(data)).fit(disp=False, tol=1e-12)
    return list(found.params), found.llf


def binomial(data):
    counts = np.stack([data["y"], data["trials"] - data["y"]], axis=1)
    found = sm.GLM(counts, design(data), family=sm.families.Binomial()).fit(tol=1e-12)
    return list(found.params), found.llf


def poisson(data):
    found = sm.Poisson(data["y"], design(data), exposure=data["hours"]).fit(disp=False, tol=1e-12)
    return list(found.params), found.llf


def clustered(data):
    model = sm.NegativeBinomial(data["y"], design(data), loglike_method="nb2")
    found = model.fit(disp=False, method="bfgs", gtol=1e-8, maxiter=1000)
    return [*found.params[:-1], 1.0 / found.params[-1]], found.llf


CASES = {
    "linear": (ordinary, [*NAMES, "noise"]),
    "yes or no": (logit, NAMES),
    "successes": (binomial, NAMES),
    "poisson": (poisson, NAMES),
    "clustered": (clustered, [*NAMES, "size"]),
}


@pytest.mark.parametrize("name", CASES)
def test_likelihood_at_the_maximum_of_statsmodels(name):
    part, (other, names) = BY_NAME[name], CASES[name]
    data = part.data()
    best, maximum = other(data)
    at = dict(zip(names, best, strict=True))
    assert likelihood(part.model, at, data) == pytest.approx(maximum, abs=1e-8)
    # and it is the maximum: a step along any parameter loses
    for key in names:
        for step in (0.98, 1.02):
            assert likelihood(part.model, {**at, key: at[key] * step}, data) < maximum


@pytest.mark.parametrize(
    "name", ["linear", *(pytest.param(n, marks=pytest.mark.slow) for n in list(CASES)[1:])]
)
def test_bic_leads_to_the_maximum_of_statsmodels(name):
    """Schwarz (1978): k log n - 2 log L, with our own search for the maximum."""
    part, (other, names) = BY_NAME[name], CASES[name]
    data = part.data()
    found = ev.approximate(part.model, data, depth="none")
    maximum = 0.5 * (len(names) * np.log(ROWS) - found.bic)
    assert maximum == pytest.approx(other(data)[1], abs=1e-6)


def test_the_evidence_of_a_linear_regression_is_exact():
    """Known noise makes the response normal with a known covariance: scipy's density of it."""
    data, noise, scale = BY_NAME["linear"].data(), 0.7, 2.0
    model = shelf.linear_regression(
        "linear", "y", PREDICTORS, scale=scale, centre=1.0, slope_sd=0.5, fixed={"noise": noise}
    )
    found = ev.approximate(model, data, depth="none")
    x = design(data)
    covariance = x @ np.diag([scale**2, 0.25, 0.25]) @ x.T + noise**2 * np.eye(ROWS)
    exact = stats.multivariate_normal(np.ones(ROWS), covariance).logpdf(data["y"])
    assert found.laplace == pytest.approx(exact, abs=1e-8)


def test_a_change_of_unit_changes_nothing_but_a_constant():
    """Metres to centimetres: every log evidence falls by n log 100."""
    data = BY_NAME["level"].data()
    metres, centimetres = (
        ev.approximate(
            shelf.linear_regression("level", "y", scale=2.0 * unit, centre=1.0 * unit),
            {**data, "y": data["y"] * unit},
            depth="none",
        )
        for unit in (1.0, 100.0)
    )
    shift = metres.laplace - centimetres.laplace
    assert shift == pytest.approx(ROWS * np.log(100.0), abs=1e-8)


def test_standardised_predictors():
    data = BY_NAME["linear"].data()
    found = shelf.standardise(data, ["x", "depth"])
    for name, (mean, sd) in found.items():
        assert (mean, sd) == pytest.approx((data[name].mean(), data[name].std()))
    # the numbers are fixed: other rows are read on the same scale
    model = shelf.linear_regression("linear", "y", found, scale=2.0)
    p = {"intercept": 1.0, "slope_x": 1.0, "slope_depth": 0.0, "noise": 1.0}
    mean, sd = found["x"]
    fresh = {"x": np.array([mean, mean + sd]), "depth": np.zeros(2)}
    np.testing.assert_allclose(evaluate(model.predict, p, fresh)["y"], [1.0, 2.0])


def test_predictors_by_name_are_taken_as_they_are():
    data = BY_NAME["linear"].data()
    p = {"intercept": 1.0, "slope_x": 0.3, "noise": 0.5}
    plain = shelf.linear_regression("plain", "y", ["x"], scale=2.0)
    expected = stats.norm(1.0 + 0.3 * data["x"], 0.5).logpdf(data["y"]).sum()
    assert likelihood(plain, p, data) == pytest.approx(expected, rel=1e-12)


def test_a_column_that_cannot_be_standardised(tmp_path):
    with pytest.raises(DataError, match="'flat' does not vary"):
        shelf.standardise({"flat": np.full(5, 0.1)}, ["flat"])
    with pytest.raises(DataError, match=r"no column 'deph'.*Did you mean 'depth'"):
        shelf.standardise(BY_NAME["linear"].data(), ["deph"])
    path = tmp_path / "islands.csv"
    path.write_text("island,nests\nnorth,3\nsouth,4\nnorth,5\n")
    data = ev.read_data(path, categories=["island"])
    with pytest.raises(DataError, match="'island' holds codes of categories"):
        shelf.standardise(data, ["island"])
