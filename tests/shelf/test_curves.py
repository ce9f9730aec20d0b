"""Curves against the same written in NumPy with scipy's density, and scipy's least squares."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

import evidence as ev
from evidence import shelf
from tests.shelf.parts import BY_NAME, LEVEL, ROWS, X, evaluate, likelihood

TWO_PI = 2.0 * np.pi


def two_exponentials(x, amount, rate, excess, share, offset):
    slow, fast = share * np.exp(-rate * x), (1 - share) * np.exp(-rate * (1 + excess) * x)
    return offset + amount * (slow + fast)


def broken_line(x, level, slope, bend, where):
    return level + (slope * x + bend * np.maximum(x - where, 0.0)) / 30.0


CURVES = {
    "one exponential": lambda x, amount, rate: amount * np.exp(-rate * x),
    "two exponentials": two_exponentials,
    "hyperbola": lambda x, height, half: height * x / (half + x),
    "exponential": lambda x, height, half: height * (1 - 0.5 ** (x / half)),
    "tanh": lambda x, height, half: height * np.tanh(0.5493061443340548 * x / half),
    "hill": lambda x, height, half, baseline, power: (
        baseline + height * x**power / (half**power + x**power)
    ),
    "jump": lambda x, level, jump, where: level + jump * (x > where),
    "bend": broken_line,
    "sinusoid": lambda x, level, cosine, sine, frequency: (
        level
        + cosine * np.cos(TWO_PI * frequency * (x - 15))
        + sine * np.sin(TWO_PI * frequency * (x - 15))
    ),
}
# narrow enough that a jump is a step and a bend a corner at every row
SHARP = {
    kind: shelf.change_point(
        kind, "y", "x", kind, between=(0.0, 30.0), scale=1.0, centre=1.0, width=1e-9
    )
    for kind in ("jump", "bend")
}


def plain(name: str) -> dict[str, float]:
    """The truth of a part as plain numbers, without the noise."""
    return {k: float(np.ravel(v)[0]) for k, v in BY_NAME[name].truth.items() if k != "noise"}


@pytest.mark.parametrize("name", CURVES)
def test_density_against_scipy(name):
    part = BY_NAME[name]
    model, data = SHARP.get(name, part.model), part.data()
    expected = CURVES[name](X, **plain(name))
    known = stats.norm(expected, part.truth["noise"]).logpdf(data["y"]).sum()
    assert likelihood(model, part.truth, data) == pytest.approx(known, rel=1e-9)
    np.testing.assert_allclose(
        evaluate(model.predict, part.values, data)["y"], expected, rtol=1e-9, atol=1e-9
    )


@pytest.mark.parametrize(
    "name",
    [
        "hyperbola",
        *(pytest.param(n, marks=pytest.mark.slow) for n in ("one exponential", "tanh", "hill")),
        pytest.param("two exponentials", marks=pytest.mark.slow),
        pytest.param("sinusoid", marks=pytest.mark.slow),
    ],
)
def test_bic_leads_to_the_least_squares_of_scipy(name):
    part, start = BY_NAME[name], plain(name)
    data = part.data()
    best, _ = optimize.curve_fit(CURVES[name], X, data["y"], p0=list(start.values()), xtol=1e-12)
    squares = np.sum((data["y"] - CURVES[name](X, *best)) ** 2)
    maximum = -0.5 * ROWS * (np.log(TWO_PI * squares / ROWS) + 1.0)
    found = ev.approximate(part.model, data, depth="none")
    k = len(start) + 1
    assert 0.5 * (k * np.log(ROWS) - found.bic) == pytest.approx(maximum, abs=1e-6)


def test_the_evidence_of_a_sinusoid_of_known_period_is_exact():
    """Known period and noise leave a linear model: scipy's density of the response."""
    data, noise, scale = BY_NAME["harmonics"].data(), 0.1, 0.5
    model = shelf.sinusoid(
        "tide", time="x", periods=7.3, harmonics=2, fixed={"noise": noise}, **LEVEL
    )
    found = ev.approximate(model, data, depth="none")
    angle = TWO_PI * X / 7.3
    parts = [np.ones(ROWS), *(f(h * angle) for h in (1, 2) for f in (np.cos, np.sin))]
    x = np.stack(parts, axis=1)
    covariance = scale**2 * x @ x.T + noise**2 * np.eye(ROWS)
    exact = stats.multivariate_normal(np.ones(ROWS), covariance).logpdf(data["y"])
    assert found.laplace == pytest.approx(exact, abs=1e-7)


def test_half_of_the_height_is_reached_at_half():
    for kind in ("hyperbola", "exponential", "tanh", "hill"):
        model = shelf.saturation(kind, "y", "x", kind, scale=1.0, dose_scale=1.0)
        p = {"height": 8.0, "half": 5.0, "power": 3.0, "noise": 1.0}
        risen = evaluate(model.predict, p, {"x": np.array([0.0, 5.0, 1e4])})["y"]
        np.testing.assert_allclose(risen, [0.0, 4.0, 8.0], rtol=1e-3)


def test_amount_and_slowest_rate_mean_the_same_for_any_number_of_terms():
    options = {"scale": 10.0, "time_scale": 20.0}
    models = [shelf.exponentials("sum", "y", "x", k, **options) for k in (1, 2, 4)]
    for model in models:
        for name in ("amount", "rate", "noise"):
            assert model.priors[name] == models[0].priors[name]
    p = {"amount": 9.0, "rate": 0.1, "noise": 1.0, "excess": [1.0, 2.0, 3.0],
         "share": [0.4, 0.3, 0.2, 0.1]}  # fmt: skip
    p = {k: np.asarray(v) for k, v in p.items()}
    found = evaluate(models[2].predict, p, {"x": X})["y"]
    rates, share = 0.1 * np.array([1.0, 2.0, 6.0, 24.0]), p["share"]
    np.testing.assert_allclose(found, 9.0 * np.exp(-np.outer(X, rates)) @ share, rtol=1e-12)


def test_a_dose_of_zero_has_finite_derivatives():
    """u^power has an infinite slope at zero where the power is below 1."""
    part = BY_NAME["hill"]
    assert X[0] == 0.0
    found = ev.approximate(part.model, part.data(), depth="none")
    z = found.problem.unconstrained({**part.truth, "power": 0.4})
    at = found.problem.evaluate(z)
    assert np.isfinite(at.gradient).all()
    assert np.isfinite(at.hessian).all()
