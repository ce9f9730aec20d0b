"""Densities against scipy, mpmath and numpyro; derivatives at the edges."""

import functools
import math

import jax
import jax.numpy as jnp
import mpmath
import numpy as np
import numpyro.distributions as nd
import pytest
import scipy.stats as st

from evidence.distributions import (
    Bernoulli,
    Beta,
    Binomial,
    Cauchy,
    Dirichlet,
    Exponential,
    Gamma,
    HalfCauchy,
    HalfNormal,
    InverseGamma,
    LogNormal,
    MultivariateNormal,
    NegativeBinomial,
    Normal,
    Poisson,
    StudentT,
    Uniform,
)
from evidence.distributions.special import log_beta, log_binomial, log_gamma, log_rising, power_log
from tests.distribution_cases import COVARIANCE, DISCRETE, SCALAR, VECTOR, strict_float64


@pytest.fixture(autouse=True)
def _strict():
    with strict_float64():
        yield


@jax.jit
def log_prob(distribution, x):
    return distribution.log_prob(x)


@jax.jit
def derivatives(distribution, x):
    """Value, slope and curvature in x, and all slopes in the hyperparameters."""
    value = distribution.log_prob(x)
    slope = jax.grad(lambda v: distribution.log_prob(v).sum())(x)
    bend = jax.hessian(lambda v: distribution.log_prob(v).sum())(x)
    hyper = jax.grad(lambda d: d.log_prob(x).sum())(distribution)
    return value, slope, bend, jnp.stack(jax.tree.leaves(hyper))


def with_arrays(distribution):
    return jax.tree.map(lambda leaf: jnp.asarray(leaf, dtype=float), distribution)


# ---------------------------------------------------------------- the value


@pytest.mark.parametrize("case", SCALAR, ids=str)
def test_log_density_equals_scipy(case):
    points = np.array(case.points)
    ours = log_prob(case.ours, points)
    np.testing.assert_allclose(ours, case.scipy.logpdf(points), rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize("case", VECTOR, ids=str)
def test_vector_density_equals_scipy(case):
    points = np.array(case.points)
    theirs = [case.scipy.logpdf(point) for point in points]
    np.testing.assert_allclose(log_prob(case.ours, points), theirs, rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(log_prob(case.ours, points[0]), theirs[0], rtol=1e-12)


@pytest.mark.parametrize("case", DISCRETE, ids=str)
def test_log_probability_of_counts_equals_scipy(case):
    points = np.array(case.points)
    np.testing.assert_allclose(
        log_prob(case.ours, points), case.scipy.logpmf(points), rtol=1e-12, atol=1e-13
    )


NUMPYRO = [
    (Normal(0.3, 1.7), nd.Normal(0.3, 1.7), 0.9),
    (HalfNormal(1.7), nd.HalfNormal(1.7), 0.9),
    (LogNormal(0.3, 1.7), nd.LogNormal(0.3, 1.7), 0.9),
    (Uniform(0.3, 1.7), nd.Uniform(0.3, 1.7), 0.9),
    (Beta(0.3, 1.7), nd.Beta(0.3, 1.7), 0.9),
    (Gamma(0.3, 1.7), nd.Gamma(0.3, 1.7), 0.9),
    (InverseGamma(0.3, 1.7), nd.InverseGamma(0.3, 1.7), 0.9),
    (Exponential(1.7), nd.Exponential(1.7), 0.9),
    (StudentT(3.0, 0.3, 1.7), nd.StudentT(3.0, 0.3, 1.7), 0.9),
    (Cauchy(0.3, 1.7), nd.Cauchy(0.3, 1.7), 0.9),
    (HalfCauchy(1.7), nd.HalfCauchy(1.7), 0.9),
    (Dirichlet([0.3, 1.7, 2.0]), nd.Dirichlet(np.array([0.3, 1.7, 2.0])), [0.2, 0.3, 0.5]),
    (
        MultivariateNormal([0.3, 1.7, 2.0], COVARIANCE),
        nd.MultivariateNormal(np.array([0.3, 1.7, 2.0]), COVARIANCE),
        [0.2, 0.3, 0.5],
    ),
    (Bernoulli(0.3), nd.BernoulliProbs(0.3), 1.0),
    (Bernoulli(logit=0.3), nd.BernoulliLogits(0.3), 1.0),
    (Binomial(9, 0.3), nd.BinomialProbs(0.3, 9), 4.0),
    (Binomial(9, logit=0.3), nd.BinomialLogits(0.3, 9), 4.0),
    (Poisson(1.7), nd.Poisson(1.7), 4.0),
    (NegativeBinomial(0.3, 1.7), nd.NegativeBinomial2(0.3, 1.7), 4.0),
]


@pytest.mark.parametrize(("ours", "theirs", "x"), NUMPYRO, ids=lambda v: f"{v!r:.30}")
def test_log_density_equals_numpyro(ours, theirs, x):
    with jax.numpy_rank_promotion("allow"), jax.numpy_dtype_promotion("standard"):
        # built again inside the float64 context; some of numpyro's terms carry float32 rounding
        theirs = jax.tree.map(lambda leaf: np.asarray(leaf, np.float64), theirs)
        expected = jax.jit(lambda d, v: d.log_prob(v))(theirs, np.array(x))
    np.testing.assert_allclose(log_prob(ours, np.array(x)), expected, rtol=2e-7, atol=1e-12)


def test_special_functions_against_high_precision():
    # mpmath at 40 digits; the plain sums of log gammas are off by 1e-8 to 1e-5 at the large ones
    pairs = [(2, 3), (0.3, 0.2), (12, 15), (9.9, 10.1), (0.5, 40), (1e6, 2e6), (3, 1e8)]
    a, b = np.array(pairs, dtype=float).T
    with mpmath.workdps(40):
        betas = [float(mpmath.log(mpmath.beta(p, q))) for p, q in pairs]
        steps = [float(mpmath.loggamma(mpmath.mpf(p) + q) - mpmath.loggamma(p)) for q, p in pairs]
        ways = [float(mpmath.log(mpmath.binomial(n, k))) for n, k in [(10, 3), (1e7, 12), (50, 50)]]
        singles = [float(mpmath.loggamma(q)) for _, q in pairs]
    np.testing.assert_allclose(jax.jit(log_gamma)(b), singles, rtol=1e-14, atol=2e-14)
    np.testing.assert_allclose(jax.jit(log_beta)(a, b), betas, rtol=1e-13, atol=3e-14)
    np.testing.assert_allclose(jax.jit(log_rising)(b, a), steps, rtol=1e-14, atol=1e-14)
    n, k = np.array([10.0, 1e7, 50.0]), np.array([3.0, 12.0, 50.0])
    np.testing.assert_allclose(jax.jit(log_binomial)(n, k), ways, rtol=1e-13, atol=2e-14)


@pytest.mark.slow
def test_second_derivatives_of_log_beta_where_both_are_equal():
    # d2 log B = trigamma - trigamma(sum) on the diagonal; minimum/maximum would mix the two
    for a in (2.0, 25.0):
        hessian = jax.jit(jax.hessian(lambda v: log_beta(v[0], v[1])))(np.array([a, a]))
        with mpmath.workdps(30):
            own, total = float(mpmath.polygamma(1, a)), float(mpmath.polygamma(1, 2 * a))
        np.testing.assert_allclose(hessian, own * np.eye(2) - total, rtol=1e-9)


def test_large_degrees_of_freedom_and_sizes_reach_their_limits():
    normal, student = st.norm.logpdf(2.0), log_prob(StudentT(1e12, 0.0, 1.0), 2.0)
    assert abs(student - normal) < 1e-10
    counts = np.array([0, 4, 30])
    clustered = log_prob(NegativeBinomial(4.0, 1e13), counts)
    np.testing.assert_allclose(clustered, st.poisson(4.0).logpmf(counts), rtol=1e-10)


@pytest.mark.parametrize("size", [1e200, 1e300])
def test_heavy_tails_do_not_overflow(size):
    # log of the tail, scale / (pi x^2), whose square no float holds
    tail = -math.log(math.pi) - 2 * math.log(size)
    assert log_prob(Cauchy(0.0, 1.0), -size) == pytest.approx(tail, rel=1e-14)
    assert log_prob(HalfCauchy(1.0), size) == pytest.approx(tail + math.log(2), rel=1e-14)


def test_logits_and_log_rates_do_not_overflow():
    for logit in (-1e4, 1e4):
        lost = log_prob(Bernoulli(logit=logit), np.array([0.0, 1.0]))
        np.testing.assert_array_equal(np.sort(lost), [-1e4, 0.0])
        many = log_prob(Binomial(7, logit=logit), np.array([0.0, 7.0]))
        np.testing.assert_allclose(np.sort(many), [-7e4, 0.0], rtol=1e-14, atol=1e-14)
    assert log_prob(Poisson(log_rate=-1e4), 3) == pytest.approx(-3e4 - math.log(6))
    assert log_prob(Poisson(log_rate=1e4), 3) == -np.inf


@pytest.mark.parametrize(
    ("distribution", "sure", "never"),
    [
        (Bernoulli(0), 0, 1),
        (Bernoulli(1), 1, 0),
        (Bernoulli(logit=-np.inf), 0, 1),
        (Binomial(5, 0), 0, 2),
        (Binomial(5, 1), 5, 4),
        (Poisson(0), 0, 1),
        (Poisson(log_rate=-np.inf), 0, 1),
        (NegativeBinomial(0, 2), 0, 1),
    ],
    ids=repr,
)
def test_certain_outcomes(distribution, sure, never):
    assert abs(log_prob(distribution, sure)) < 1e-14
    assert log_prob(distribution, never) == -np.inf


OUTSIDE = [
    (HalfNormal(1), -0.1),
    (LogNormal(0, 1), 0.0),
    (LogNormal(0, 1), -1.0),
    (Uniform(0, 1), 1.1),
    (Beta(2, 2), -0.1),
    (Beta(2, 2), 1.0),
    (Beta(2, 2), 0.0),
    (Gamma(2, 2), -1.0),
    (Gamma(2, 2), 0.0),
    (InverseGamma(2, 2), 0.0),
    (InverseGamma(2, 2), -1.0),
    (Exponential(2), -1.0),
    (HalfCauchy(2), -1.0),
    (Bernoulli(0.5), 0.5),
    (Bernoulli(logit=0.5), 2.0),
    (Binomial(3, 0.5), 4.0),
    (Binomial(3, 0.5), -1.0),
    (Binomial(3, logit=0.5), 1.5),
    (Poisson(2.0), -1.0),
    (Poisson(log_rate=2.0), 1.5),
    (NegativeBinomial(2.0, 1.0), -2.0),
]


@pytest.mark.slow
@pytest.mark.parametrize(("distribution", "x"), OUTSIDE, ids=repr)
def test_outside_the_support_is_minus_infinity_without_slope(distribution, x):
    value, slope, bend, hyper = derivatives(with_arrays(distribution), x)
    assert value == -np.inf
    assert slope == 0.0
    assert bend == 0.0
    assert not np.any(hyper)


@pytest.mark.parametrize(
    ("x", "inside"), [([0.2, 0.3, 0.4], False), ([-0.1, 0.6, 0.5], False), ([0.0, 0.5, 0.5], False)]
)
def test_outside_the_simplex(x, inside):
    value, slope, bend, _ = derivatives(with_arrays(Dirichlet([2, 3, 0.5])), np.array(x))
    assert (value > -np.inf) == inside
    assert not np.any(slope)
    assert not np.any(bend)


# d log p / dx at an edge where the density is finite, worked out by hand
EDGES = [
    (HalfNormal(2), 0.0, 0.0, -0.25),
    (Exponential(3), 0.0, -3.0, 0.0),
    (Gamma(1, 3), 0.0, -3.0, 0.0),
    (HalfCauchy(2), 0.0, 0.0, -0.5),
    (Beta(1, 3), 0.0, -2.0, -2.0),
    (Beta(3, 1), 1.0, 2.0, -2.0),
    (Beta(1, 1), 0.0, 0.0, 0.0),
    (Uniform(0, 2), 2.0, 0.0, 0.0),
    (Cauchy(0, 1), 0.0, 0.0, -2.0),
    (StudentT(3, 0, 1), 0.0, 0.0, -4 / 3),
]


@pytest.mark.parametrize(("distribution", "x", "slope", "bend"), EDGES, ids=repr)
def test_derivatives_at_edges_and_centres(distribution, x, slope, bend):
    value, found_slope, found_bend, hyper = derivatives(with_arrays(distribution), x)
    assert np.isfinite(value)
    assert found_slope == pytest.approx(slope)
    assert found_bend == pytest.approx(bend)
    assert np.all(np.isfinite(hyper))


@functools.partial(jax.jit, static_argnums=0)
def hyper_derivatives(tree, leaves, x):
    """Slope and curvature of the log density in its hyperparameters."""

    def of_leaves(vector):
        return jax.tree.unflatten(tree, list(vector)).log_prob(x)

    return jax.grad(of_leaves)(leaves), jax.hessian(of_leaves)(leaves)


# differences at a probability of 1e-18 would leave the interval
SMOOTH = [case for case in (*SCALAR, *DISCRETE) if case.ours != Bernoulli(1e-18)]


@pytest.mark.slow
@pytest.mark.parametrize("case", SMOOTH, ids=str)
def test_hessian_in_the_hyperparameters_equals_differences(case):
    x = float(np.sort(case.points)[len(case.points) // 2])
    leaves, tree = jax.tree.flatten(case.ours)
    leaves = np.array(leaves)
    _, hessian = hyper_derivatives(tree, leaves, x)
    assert np.all(np.isfinite(hessian))
    for i, leaf in enumerate(leaves):
        step = np.where(np.arange(len(leaves)) == i, 1e-4 * max(abs(leaf), 1e-3), 0.0)
        above, below = (hyper_derivatives(tree, leaves + s, x)[0] for s in (step, -step))
        difference = (above - below) / (2 * step[i])
        np.testing.assert_allclose(hessian[i], difference, rtol=1e-5, atol=1e-6)


def test_far_logits_have_finite_hessians():
    for logit in (-800.0, 0.0, 800.0):
        for y in (0.0, 1.0):
            _, _, _, hyper = derivatives(with_arrays(Bernoulli(logit=logit)), y)
            assert np.all(np.isfinite(hyper))
            hessian = jax.jit(jax.hessian(lambda v, y=y: Bernoulli(logit=v).log_prob(y)))(logit)
            assert hessian == pytest.approx(-0.25 if logit == 0 else 0.0)


def test_power_of_zero():
    assert power_log(0.0, 0.0) == 0.0
    assert power_log(2.0, jnp.zeros(())) == -np.inf
    assert power_log(-2.0, jnp.zeros(())) == np.inf
    assert np.isnan(power_log(1.0, jnp.asarray(-1.0)))


def test_invalid_traced_hyperparameters_give_nan():
    assert np.isnan(log_prob(with_arrays(Normal(0, 1)).__class__(0.0, jnp.asarray(-1.0)), 0.0))
    assert np.isnan(log_prob(Bernoulli(jnp.asarray(1.2)), 1.0))
    assert np.isnan(log_prob(Bernoulli(jnp.asarray(1.2)), 0.0))
    assert np.isnan(log_prob(Poisson(jnp.asarray(-1.2)), 1.0))
    assert np.isnan(log_prob(Normal(0, 1), np.nan))
