"""Densities in z, centre and spread, samples, shapes."""

import math

import jax
import mpmath
import numpy as np
import pytest
import scipy.integrate
import scipy.stats as st

from evidence.distributions import (
    Beta,
    Binomial,
    Cauchy,
    Dirichlet,
    Gamma,
    InverseGamma,
    MultivariateNormal,
    NegativeBinomial,
    Normal,
    Poisson,
    StudentT,
    discrete,
)
from tests.distribution_cases import COVARIANCE, DISCRETE, SCALAR, VECTOR, strict_float64


@pytest.fixture(autouse=True)
def _strict():
    with strict_float64():
        yield


@jax.jit
def log_prob(distribution, x):
    return distribution.log_prob(x)


@jax.jit
def density_in_z(ours, z):
    """The log density of z by its parts, and as written in z."""
    support = ours.support
    by_parts = ours.log_prob(support.forward(z)) + support.log_jacobian(z)
    return by_parts, ours.log_prob_z(z)


@pytest.mark.parametrize("case", SCALAR, ids=str)
def test_density_in_z_integrates_to_one(case):
    ours = case.ours
    centre, spread = ours.centre_and_spread()
    # substituting z = centre + spread sinh(t) reaches the heavy tails
    t = np.linspace(-90.0, 90.0, 24001)
    z = centre + spread * np.sinh(t)
    by_parts, in_z = density_in_z(ours, z)
    weight = spread * np.cosh(t)
    total = scipy.integrate.simpson(np.exp(in_z) * weight, x=t)
    assert total == pytest.approx(1.0, abs=1e-9)
    near = np.abs(z - centre) < 6 * spread
    near &= np.abs(z) < 16  # beyond, the logistic function rounds to its edge
    np.testing.assert_allclose(by_parts[near], in_z[near], rtol=1e-8, atol=1e-9)
    total = scipy.integrate.simpson(np.exp(by_parts[near]) * weight[near], x=t[near])
    assert total == pytest.approx(
        scipy.integrate.simpson(np.exp(in_z[near]) * weight[near], x=t[near]), rel=1e-8
    )


def test_dirichlet_in_z_integrates_to_one():
    ours = Dirichlet([1.5, 2.0, 3.0])
    t = np.linspace(-14.0, 10.0, 401)
    grid = np.stack(np.meshgrid(t, t, indexing="ij"), axis=-1)
    for log_density in density_in_z(ours, grid):
        inner = scipy.integrate.simpson(np.exp(log_density), x=t, axis=-1)
        assert scipy.integrate.simpson(inner, x=t) == pytest.approx(1.0, abs=1e-7)


def test_multivariate_normal_in_z_is_the_density_itself():
    ours = MultivariateNormal([0.1, -0.2, 0.3], COVARIANCE)
    z = np.array([[0.3, 0.2, 0.1], [1.0, 2.0, 3.0]])
    np.testing.assert_array_equal(jax.jit(ours.log_prob_z)(z), log_prob(ours, z))


def test_density_in_z_is_exact_where_forward_has_rounded():
    # a quarter of this prior lies where the logistic function is 0 or 1 to the last digit
    z = 300.0
    exact = -0.01 * z - float(mpmath.log(mpmath.beta(0.01, 0.01)))
    assert jax.jit(Beta(0.01, 0.01).log_prob_z)(z) == pytest.approx(exact, rel=1e-12)
    assert jax.jit(Gamma(0.01, 1.0).log_prob_z)(-1e4) == pytest.approx(
        -100.0 - math.lgamma(0.01), rel=1e-12
    )
    assert jax.jit(Dirichlet([0.01, 1.0]).log_prob_z)(np.array([-1e4])) == pytest.approx(
        -100.0 - float(mpmath.log(mpmath.beta(0.01, 1.0))), rel=1e-12
    )


# scipy's draws, transformed here by plain NumPy
def to_z(case, draws):
    word = case.ours.support.label("x")
    if word.startswith("scaled logit"):
        return np.log(draws - case.ours.low) - np.log(case.ours.high - draws)
    if word.startswith("logit"):
        return np.log(draws) - np.log1p(-draws)
    return np.log(draws) if word.startswith("log") else draws


@pytest.mark.parametrize("case", SCALAR, ids=str)
def test_centre_and_spread_against_draws(case):
    draws = case.scipy.rvs(size=200_000, random_state=np.random.default_rng(7))
    z = to_z(case, draws)
    centre, spread = case.ours.centre_and_spread()
    assert centre.dtype == spread.dtype == np.float64
    if isinstance(case.ours, Cauchy | StudentT):
        assert centre == pytest.approx(np.median(z), abs=0.02 * spread)
        assert np.mean(np.abs(z - centre) <= spread) == pytest.approx(0.6827, abs=0.005)
    else:
        assert centre == pytest.approx(z.mean(), abs=0.02 * spread)
        assert spread == pytest.approx(z.std(), rel=0.02)


def test_centre_and_spread_of_vectors():
    draws = st.dirichlet([0.7, 2.0, 3.0]).rvs(200_000, random_state=np.random.default_rng(3))
    z = np.log(draws[:, :-1] / draws[:, -1:])
    centre, spread = Dirichlet([0.7, 2.0, 3.0]).centre_and_spread()
    np.testing.assert_allclose(centre, z.mean(0), atol=0.02)
    np.testing.assert_allclose(spread, z.std(0), rtol=0.02)
    centre, spread = MultivariateNormal([0.1, -0.2, 0.3], COVARIANCE).centre_and_spread()
    np.testing.assert_array_equal(centre, [0.1, -0.2, 0.3])
    np.testing.assert_array_equal(spread, np.sqrt(np.diag(COVARIANCE)))


# ---------------------------------------------------------------- samples


@jax.jit
def draw(distribution, key):
    return distribution.sample(key, (40_000,))


@pytest.mark.slow
@pytest.mark.parametrize("case", [*SCALAR, *DISCRETE], ids=str)
def test_samples_follow_the_distribution(case):
    draws = np.asarray(draw(case.ours, jax.random.key(5)))
    assert draws.shape == (40_000,)
    if case.ours.support is discrete:
        assert draws.dtype == np.int64
        points = np.array([0, 1, 3, 5])
    else:
        points = case.scipy.ppf([0.01, 0.1, 0.3, 0.5, 0.7, 0.9, 0.99])
    seen = np.mean(draws[:, None] <= points, axis=0)
    # five standard errors of a proportion
    np.testing.assert_allclose(seen, case.scipy.cdf(points), atol=5 * 0.5 / math.sqrt(40_000))


@pytest.mark.parametrize("case", VECTOR, ids=str)
def test_vector_samples_have_the_right_moments(case):
    draws = np.asarray(draw(case.ours, jax.random.key(6)))
    mean = case.scipy.mean if isinstance(case.ours, MultivariateNormal) else case.scipy.mean()
    cov = case.scipy.cov_object.covariance if hasattr(case.scipy, "cov_object") else None
    cov = case.scipy.cov() if cov is None else cov
    np.testing.assert_allclose(draws.mean(0), mean, atol=0.03)
    np.testing.assert_allclose(np.cov(draws.T), cov, atol=0.05)


@pytest.mark.parametrize(
    ("distribution", "event"),
    [
        (Normal([0, 1, 2], 1), ()),
        (Gamma(2, 1, shape=3), ()),
        (Beta([[1], [2]], [1, 2, 3]), ()),
        (StudentT([3, 4, 5], 0, 1), ()),
        (InverseGamma(3, [1, 2, 3]), ()),
        (Binomial([3, 4, 5], 0.5), ()),
        (NegativeBinomial([3, 4, 5], 0.5), ()),
        (Poisson(log_rate=[0, 1, 2]), ()),
        (Dirichlet([1, 2, 3], shape=4), (3,)),
        (Dirichlet([[1, 2, 3], [4, 5, 6]]), (3,)),
        (MultivariateNormal([0, 1, 2], COVARIANCE, shape=(2,)), (3,)),
        (MultivariateNormal([0, 1, 2], np.stack([COVARIANCE, 2 * COVARIANCE])), (3,)),
        (MultivariateNormal(np.zeros((4, 1, 3)), np.stack([COVARIANCE, 2 * COVARIANCE])), (3,)),
    ],
    ids=repr,
)
def test_shapes_of_arrays(distribution, event):
    batch = distribution.batch_shape
    assert distribution.event_shape == event
    sampled = jax.eval_shape(lambda key: distribution.sample(key, (5,)), jax.random.key(1))
    assert sampled.shape == (5, *batch, *event)
    low = 0.05 * np.ones(sampled.shape)
    draws = np.round(low) if distribution.support is discrete else low
    if isinstance(distribution, Dirichlet):
        draws[..., -1] = 0.9
    assert log_prob(distribution, draws).shape == (5, *batch)
    one = log_prob(distribution, draws[0])
    assert one.shape == batch
    np.testing.assert_allclose(one, log_prob(distribution, draws)[0], rtol=1e-12, atol=1e-13)
    assert np.all(np.isfinite(one))
    if distribution.support is not discrete:
        z_shape = distribution.support.z_shape(batch + event)
        assert {a.shape for a in distribution.centre_and_spread()} == {z_shape}


def test_log_density_of_one_value_fills_the_shape():
    assert log_prob(Normal(0, 1, shape=(2, 3)), 0.5).shape == (2, 3)
    assert log_prob(Dirichlet([1, 1], shape=3), np.array([0.5, 0.5])).shape == (3,)


def test_batched_covariances_equal_scipy():
    covariances = np.stack([COVARIANCE, 2 * COVARIANCE])
    x = np.array([0.5, -0.2, 0.1])
    ours = log_prob(MultivariateNormal(np.zeros(3), covariances), x)
    theirs = [st.multivariate_normal(np.zeros(3), c).logpdf(x) for c in covariances]
    np.testing.assert_allclose(ours, theirs, rtol=1e-13)
