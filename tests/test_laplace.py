"""Laplace's method where the answer is known: Gaussians, and the second-order term of series."""

from __future__ import annotations

import warnings

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import gammaln

import evidence as ev
from evidence.distributions import Beta, Dirichlet, Normal
from evidence.laplace import expand, sum_modes
from evidence.mode import find_modes
from evidence.outcome import Outcome
from evidence.problem import Problem


def approximate(function, start, spread=None, data=None, support=None):
    model = ev.Model.from_log_posterior("case", function, start, spread=spread, support=support)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(model, data, depth="none")


UNIT = {"a": 1.0, "b": 1.0}


@pytest.mark.parametrize("d", [1, 3, 12])
def test_gaussians_are_exact(d):
    rng = np.random.default_rng(d)
    root = rng.normal(size=(d, d))
    precision = root @ root.T + np.eye(d)
    data = {"precision": precision, "mean": rng.normal(size=d)}

    def function(p, data):
        step = p["x"] - data["mean"]
        return 7.0 - 0.5 * step @ data["precision"] @ step

    result = approximate(function, {"x": np.zeros(d)}, {"x": np.full(d, 3.0)}, data)
    exact = 7.0 + 0.5 * d * np.log(2 * np.pi) - 0.5 * np.linalg.slogdet(precision)[1]
    assert result.laplace == pytest.approx(exact, abs=1e-10)
    assert result.second_order_term == pytest.approx(0.0, abs=1e-8)
    assert result.log_posterior_at_mode == pytest.approx(7.0, abs=1e-12)


GAMMA = ev.Model.from_log_posterior(
    "gamma", lambda p, data: data["n"] * p["z"] - jnp.exp(p["z"]), {"z": 0.0}, spread={"z": 1.0}
)


@pytest.mark.parametrize("n", [2.0, 5.0, 30.0])
def test_stirling(n):
    """Gamma(n) in the log coordinate: Laplace is Stirling's formula, and c = 1 / (12 n)."""
    result = ev.approximate(GAMMA, {"n": np.float64(n)}, depth="none")
    stirling = n * np.log(n) - n + 0.5 * np.log(2 * np.pi / n)
    assert result.laplace == pytest.approx(stirling, abs=1e-10)
    # differences of 0.01 sd: relative error of some 1e-4 / n
    assert result.second_order_term == pytest.approx(1 / (12 * n), abs=5e-6)
    # next term of the series is -1 / (360 n^3)
    rest = gammaln(n) - result.laplace - result.second_order_term
    assert rest == pytest.approx(-1 / (360 * n**3), rel=0.15, abs=2e-6)


def test_dirichlet_in_the_log_ratio_coordinate():
    """log B(a) by Stirling for each Gamma: c = sum 1 / (12 a_i) - 1 / (12 sum a)."""
    a = np.array([3.0, 5.0, 9.0])
    model = ev.Model("shares", {"p": Dirichlet(np.ones(3))}, lambda p: jnp.sum(2 * jnp.log(p["p"])))
    other = ev.Model(
        "shares", {"p": Dirichlet(np.ones(3))}, lambda p: jnp.sum((a - 1) * jnp.log(p["p"]))
    )
    for declared, b in ((model, np.full(3, 3.0)), (other, a)):
        result = ev.approximate(declared, depth="none")
        exact = gammaln(b).sum() - gammaln(b.sum()) + gammaln(3.0)
        c = np.sum(1 / (12 * b)) - 1 / (12 * b.sum())
        assert result.second_order_term == pytest.approx(c, abs=1e-6)
        assert result.laplace + c == pytest.approx(exact, abs=2e-3)
        assert abs(result.laplace - exact) > 0.03


@pytest.mark.parametrize("strength", [0.001, 0.02])
def test_quartic(strength):
    """h = u^2 / 2 + lambda u^4: c = -3 lambda, from -1/8 h'''' with h'''' = 24 lambda."""
    result = approximate(
        lambda p, data: -0.5 * p["u"] ** 2 - data["k"] * p["u"] ** 4,
        {"u": 0.5},
        {"u": 1.0},
        {"k": np.float64(strength)},
    )
    assert result.laplace == pytest.approx(0.5 * np.log(2 * np.pi), abs=1e-12)
    # the difference of the Hessian is exact for a quartic up to rounding
    assert result.second_order_term == pytest.approx(-3 * strength, abs=1e-6)
    assert result.cubic_part == pytest.approx(0.0, abs=1e-9)
    exact = np.log(quad(lambda u: np.exp(-0.5 * u**2 - strength * u**4), -20, 20)[0])
    assert result.laplace + result.second_order_term == pytest.approx(exact, abs=50 * strength**2)


def test_cubic():
    """h = u^2 / 2 + a u^3 locally: c = a^2 (36 / 8 + 36 / 12) = 7.5 a^2, with a quartic wall."""
    a = 0.02
    result = approximate(
        lambda p: -0.5 * p["u"] ** 2 - a * p["u"] ** 3 - a**2 * p["u"] ** 4, {"u": 0.1}, {"u": 1.0}
    )
    assert result.cubic_part == pytest.approx(7.5 * a**2, abs=1e-6)
    assert result.quartic_part == pytest.approx(-3 * a**2, abs=1e-6)
    assert result.second_order_term == pytest.approx(4.5 * a**2, abs=1e-6)


def _skewed(p, data):
    """Skewed and correlated: Poisson counts on a design."""
    line = data["design"] @ p["x"]
    return jnp.sum(data["y"] * line - jnp.exp(line)) - 0.5 * jnp.sum(p["x"] ** 2)


SKEWED = ev.Model.from_log_posterior(
    "skewed", _skewed, {"x": np.zeros(3)}, spread={"x": np.ones(3)}
)


@pytest.mark.parametrize("seed", range(3))
def test_the_term_does_not_depend_on_the_axes(seed):
    rng = np.random.default_rng(seed)
    design = rng.normal(size=(9, 3))
    problem = Problem(SKEWED, {"design": design, "y": rng.poisson(1.0, size=9).astype(float)})
    peak = find_modes(problem).peaks[0]
    given = (problem.hessian, peak.z, peak.hessian, problem.spread)
    plain = expand(*given)
    turned = expand(*given, rotation=np.linalg.qr(rng.normal(size=(3, 3)))[0])
    assert abs(plain.total) > 1e-3
    # differences of 0.01 sd err by some 1e-4 of the fourth derivatives
    assert turned.total == pytest.approx(plain.total, abs=3e-5)
    assert turned.cubic == pytest.approx(plain.cubic, abs=3e-5)
    assert turned.quartic == pytest.approx(plain.quartic, abs=3e-5)


def test_the_term_adds_over_independent_pieces():
    """100 pieces: what is needed is 100 times that of one; log(1 + c) would be far off."""
    d, n = 20, 2.0
    result = approximate(
        lambda p: jnp.sum(n * p["z"] - jnp.exp(p["z"])), {"z": np.zeros(d)}, {"z": np.ones(d)}
    )
    assert result.second_order_term == pytest.approx(d / (12 * n), abs=1e-4)
    exact = d * gammaln(n)
    assert result.laplace + result.second_order_term == pytest.approx(exact, abs=d * 4e-4)
    assert abs(result.laplace + np.log1p(result.second_order_term) - exact) > 0.2


def test_no_term_where_there_is_no_peak():
    for hessian in (np.diag([1.0, 0.0]), np.diag([1.0, -1.0])):
        found = expand(lambda z, h=hessian: h, np.zeros(2), hessian, np.ones(2))
        assert np.isnan([found.total, found.cubic, found.quartic]).all()
    empty = expand(lambda z: np.zeros((0, 0)), np.zeros(0), np.zeros((0, 0)), np.zeros(0))
    assert empty.total == 0.0


def test_a_wall_beside_the_mode_shows_as_nan():
    """Differences across a wall see it; automatic derivatives would not."""

    def hessian_at(z):
        return np.full((1, 1), np.nan) if z[0] > 0.005 else np.eye(1)

    assert np.isnan(expand(hessian_at, np.zeros(1), np.eye(1), np.ones(1)).total)


def test_an_exact_quartic_is_told_with_its_parameter():
    """It shows as an axis longer than three prior sd, and not as a failure."""
    model = ev.Model.from_log_posterior(
        "quartic", lambda p: -(p["a"] ** 4) - p["b"] ** 2, {"a": 1.0, "b": 1.0}, spread=UNIT
    )
    words = r"flatter than three prior sd: a\. .*second-order term is \+.*by an unknown amount"
    with pytest.warns(ev.EvidenceWarning, match=words):
        result = ev.approximate(model, depth="none")
    assert result.status is Outcome.OK
    assert result.trust == "unchecked"
    assert result.modes[0].capped.sum() == 1


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        ([0.0, 0.0], np.log(2.0)),
        ([-1e4, -1e4 + np.log(3.0)], -1e4 + np.log(4.0)),
        ([5.0, np.nan], 5.0),
        ([1e5], 1e5),
        ([0.0, -800.0], 0.0),
    ],
)
def test_modes_are_summed_in_logs(values, expected):
    assert sum_modes(values) == pytest.approx(expected, abs=1e-12)


def test_no_mode_no_sum():
    assert np.isnan(sum_modes([]))
    assert np.isnan(sum_modes([np.nan, np.nan]))


def test_two_equal_modes_hold_twice_the_evidence():
    result = approximate(
        lambda p: jnp.logaddexp(-0.5 * (p["a"] - 20) ** 2, -0.5 * (p["a"] + 20) ** 2),
        {"a": 1.0},
        {"a": 20.0},
    )
    half = 0.5 * np.log(2 * np.pi)
    assert [m.laplace for m in result.modes] == pytest.approx([half, half], abs=1e-10)
    assert result.log_evidence == pytest.approx(half + np.log(2.0), abs=1e-10)
    assert result.laplace == pytest.approx(half, abs=1e-10)


def test_the_parts_add_up():
    """peak + volume = Laplace; fit + Occam factor = log evidence; BIC at the likelihood's peak."""
    success = np.array([1.0, 1.0, 0.0, 1.0, 1.0, 0.0, 1.0, 1.0])
    model = ev.Model(
        "nests",
        {"chance": Beta(2.0, 2.0)},
        lambda p, data: jnp.where(data["y"] > 0, jnp.log(p["chance"]), jnp.log1p(-p["chance"])),
    )
    result = ev.approximate(model, {"y": success}, depth="none")
    # in the logit the peak of Beta(2 + 6, 2 + 2) is at 8 / 12, and H = 12 p (1 - p)
    peak = 2 / 3
    assert result.mode["chance"] == pytest.approx(peak, abs=1e-10)
    volume = 0.5 * np.log(2 * np.pi / (12 * peak * (1 - peak)))
    assert result.laplace - result.log_posterior_at_mode == pytest.approx(volume, abs=1e-10)
    fit = 6 * np.log(peak) + 2 * np.log(1 - peak)
    assert result.log_likelihood_at_mode == pytest.approx(fit, abs=1e-10)
    assert result.log_occam_factor == pytest.approx(result.log_evidence - fit, abs=1e-12)
    best = 6 * np.log(0.75) + 2 * np.log(0.25)
    assert result.bic == pytest.approx(np.log(8) - 2 * best, abs=1e-8)


def test_bic_needs_terms_and_a_peak_of_the_likelihood():
    model = ev.Model("scalar", {"a": Normal(0.0, 1.0)}, lambda p: -(p["a"] ** 2))
    assert np.isnan(ev.approximate(model, depth="none").bic)
    rising = ev.Model("rising", {"a": Normal(0.0, 1.0)}, lambda p: p["a"] * jnp.ones(2))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        assert np.isnan(ev.approximate(rising, depth="none").bic)
