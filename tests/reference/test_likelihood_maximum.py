"""Maximum likelihood fits of textbooks, statsmodels and scikit-learn.

With unit density the mode is the maximum of the likelihood and the curvature its observed
information; with priors, BIC leads to the maximum all the same. Sources in ``published.json``.
"""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.scipy.special import log_ndtr
from references import dataset, fit, published

import evidence as ev
from evidence.distributions import Binomial, HalfNormal, LogNormal, Normal, Poisson


def flat(name, log_likelihood, start, spread):
    """Unit density over ``b``."""
    return ev.Model.from_log_posterior(
        name,
        lambda p, data: jnp.sum(log_likelihood(p, data)),
        {"b": np.asarray(start, float)},
        spread={"b": np.asarray(spread, float)},
    )


def sd_of(found) -> np.ndarray:
    return np.sqrt(np.diag(found.posterior.covariance_z))


def maximum_from_bic(found, parameters: int, terms: int) -> float:
    """Schwarz (1978): k log n - 2 log L, solved for log L."""
    return 0.5 * (parameters * np.log(terms) - found.bic)


def logit(p, data):
    eta = data["design"] @ p["b"]
    return data["y"] * eta - jnp.logaddexp(0.0, eta)


def probit(p, data):
    return log_ndtr((2.0 * data["y"] - 1.0) * (data["design"] @ p["b"]))


@pytest.fixture(scope="module")
def spector():
    from statsmodels.datasets import spector as source

    frame = source.load_pandas().data
    design = np.c_[frame[["GPA", "TUCE", "PSI"]].to_numpy(float), np.ones(len(frame))]
    return {"design": design, "y": frame["GRADE"].to_numpy(float)}


@pytest.mark.parametrize("link", ["logit", "probit"])
def test_spector_grades(spector, link):
    """Greene, Econometric Analysis, and statsmodels: estimates, errors, log-likelihood."""
    import statsmodels.api as sm

    function = {"logit": logit, "probit": probit}[link]
    kind = {"logit": sm.Logit, "probit": sm.Probit}[link]
    known = published("spector")[link]
    other = kind(spector["y"], spector["design"]).fit(disp=False, tol=1e-12, maxiter=100)
    found = fit(flat(link, function, np.zeros(4), [3.0, 0.3, 3.0, 10.0]), spector)
    np.testing.assert_allclose(found.mode["b"], known["mode"], atol=6e-4)
    np.testing.assert_allclose(found.mode["b"], other.params, rtol=1e-6)
    np.testing.assert_allclose(sd_of(found), other.bse, rtol=1e-6)
    assert found.log_posterior_at_mode == pytest.approx(known["log_likelihood"], abs=6e-5)
    assert found.log_posterior_at_mode == pytest.approx(other.llf, abs=1e-9)


def test_bic_of_spector_grades(spector):
    """With priors the mode moves, and BIC does not."""
    import statsmodels.api as sm

    known = published("spector")["logit"]
    found = fit(ev.Model("grades", {"b": Normal(0.0, 5.0, shape=(4,))}, logit), spector)
    other = sm.Logit(spector["y"], spector["design"]).fit(disp=False)
    assert found.bic == pytest.approx(known["bic"], abs=1e-5)
    assert found.bic == pytest.approx(other.bic, abs=1e-6)
    assert maximum_from_bic(found, 4, 32) > found.log_likelihood_at_mode


def test_menarche():
    """Venables & Ripley (2002): a logistic curve, binomial coefficients included."""
    known, data = published("menarche"), dataset("menarche")

    def log_likelihood(p, data):
        chance = jax.nn.sigmoid(p["b"][0] + p["b"][1] * data["age"])
        return Binomial(data["total"], chance).log_prob(data["menarche"])

    found = fit(flat("menarche", log_likelihood, [-20.0, 1.5], [5.0, 0.5]), data)
    np.testing.assert_allclose(found.mode["b"], known["mode"], atol=1e-5)
    np.testing.assert_allclose(sd_of(found), known["sd"], atol=1e-5)
    assert 4.0 - 2.0 * found.log_posterior_at_mode == pytest.approx(known["aic"], abs=5e-3)


def poisson(p, data):
    return Poisson(jnp.exp(data["design"] @ p["b"])).log_prob(data["count"])


def test_two_way_counts():
    """Dobson (1990), and statsmodels: Poisson counts by outcome and treatment."""
    import statsmodels.api as sm

    known, data = published("two_way_counts"), dataset("two_way_counts")
    outcome, treatment = (data[c][:, None] == [1.0, 2.0] for c in ("outcome", "treatment"))
    design = np.concatenate([np.ones((9, 1)), outcome, treatment], axis=1).astype(float)
    columns = {"design": design, "count": data["count"]}
    found = fit(ev.Model("counts", {"b": Normal(0.0, 3.0, shape=(5,))}, poisson), columns)
    best = maximum_from_bic(found, 5, 9)
    assert 10.0 - 2.0 * best == pytest.approx(known["aic"], abs=5e-3)
    other = sm.Poisson(data["count"], design).fit(disp=False, tol=1e-12)
    assert best == pytest.approx(other.llf, abs=1e-8)
    at_peak = fit(flat("flat counts", poisson, [3.0, 0, 0, 0, 0], np.ones(5)), columns)
    np.testing.assert_allclose(at_peak.mode["b"], other.params, atol=1e-7)
    np.testing.assert_allclose(sd_of(at_peak), other.bse, rtol=1e-6)
    assert at_peak.mode["b"][0] == pytest.approx(known["intercept"], abs=5e-5)


def saturating(b, x):
    return b[0] * x / (b[1] + x)


def approaching(b, x):
    return b[0] * (1.0 - jnp.exp(-b[1] * x))


@pytest.mark.parametrize(
    ("name", "curve", "x", "y"),
    [
        ("puromycin", saturating, "concentration", "rate"),
        ("oxygen_demand", approaching, "time", "demand"),
    ],
)
def test_residual_sum_of_squares(name, curve, x, y):
    """Bates & Watts (1988): BIC of a curve with unknown noise gives the least sum of squares."""
    known, data = published(name), dataset(name)
    first, second = known["mode"]
    model = ev.Model(
        name,
        {
            "top": LogNormal(np.log(first), 1.0),
            "shape": LogNormal(np.log(second), 1.0),
            "noise": HalfNormal(10.0),
        },
        lambda p, data: Normal(curve((p["top"], p["shape"]), data[x]), p["noise"]).log_prob(
            data[y]
        ),
    )
    found = fit(model, data)
    n = len(data[y])
    squares = n / (2.0 * np.pi) * np.exp(-2.0 * maximum_from_bic(found, 3, n) / n - 1.0)
    assert squares == pytest.approx(known["residual_sum_of_squares"], rel=7e-4)


def test_bayesian_ridge():
    """scikit-learn's log marginal likelihood at its own hyperparameters, exact for Laplace."""
    from sklearn.linear_model import BayesianRidge

    data = dataset("cement")
    x = np.stack([data[c] for c in ("x1", "x2", "x3", "x4")], axis=1)
    x, y = x - x.mean(axis=0), data["y"] - data["y"].mean()
    ridge = BayesianRidge(fit_intercept=False, compute_score=True, tol=1e-12, max_iter=1000)
    ridge.fit(x, y)
    noise, slope = ridge.alpha_, ridge.lambda_
    # the score adds the hyperpriors Gamma(1e-6, 1e-6), without their constants
    score = ridge.scores_[-1] - 1e-6 * (np.log(slope) - slope + np.log(noise) - noise)
    model = ev.Model(
        "ridge",
        {"slope": Normal(0.0, slope**-0.5, shape=(4,))},
        lambda p, data: Normal(data["x"] @ p["slope"], p["noise"]).log_prob(data["y"]),
        constants={"noise": noise**-0.5},
    )
    found = fit(model, {"x": x, "y": y})
    assert found.laplace == pytest.approx(score, abs=1e-6)
    np.testing.assert_allclose(found.mode["slope"], ridge.coef_, rtol=1e-5)


def test_gaussian_process():
    """scikit-learn's log marginal likelihood of the Nile flow, and the value to 12 digits.

    The process is written by its principal directions; those of variance below 1e-12 are left
    out. Own reference: -129.759388642975 by the multivariate normal density.
    """
    from sklearn.gaussian_process import GaussianProcessRegressor
    from sklearn.gaussian_process.kernels import RBF, WhiteKernel
    from statsmodels.datasets import nile

    flow = nile.load_pandas().data["volume"].to_numpy(float)
    y, year = (flow - flow.mean()) / flow.std(), np.arange(100.0)
    kernel = 1.0 * RBF(10.0) + WhiteKernel(0.5)
    process = GaussianProcessRegressor(kernel, alpha=0.0, optimizer=None).fit(year[:, None], y)
    variance, direction = np.linalg.eigh(np.exp(-0.5 * ((year[:, None] - year) / 10.0) ** 2))
    kept = variance > 1e-12
    model = ev.Model(
        "smooth flow",
        {"weight": Normal(0.0, 1.0, shape=(int(kept.sum()),))},
        lambda p, data: Normal(data["basis"] @ p["weight"], np.sqrt(0.5)).log_prob(data["y"]),
    )
    found = fit(model, {"basis": direction[:, kept] * np.sqrt(variance[kept]), "y": y})
    assert found.laplace == pytest.approx(process.log_marginal_likelihood_value_, abs=1e-7)
    assert found.laplace == pytest.approx(-129.759388642975, abs=1e-7)
