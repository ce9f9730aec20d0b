"""Declaring distributions: checks, shapes, pytrees, repr, and no work at construction."""

import copy
import math
import pickle

import jax
import jax.numpy as jnp
import numpy as np
import pandas as pd
import pytest

import evidence.distributions
from evidence.complaints import DeclarationError
from evidence.distributions import (
    Bernoulli,
    Beta,
    Binomial,
    Dirichlet,
    Gamma,
    HalfNormal,
    InverseGamma,
    MultivariateNormal,
    NegativeBinomial,
    Normal,
    Poisson,
    StudentT,
    Uniform,
    discrete,
)
from tests.distribution_cases import DISCRETE, SCALAR, VECTOR, strict_float64

EVERY = [case.ours for case in (*SCALAR, *VECTOR, *DISCRETE)]

NAMES = (
    "Bernoulli Beta Binomial Cauchy Dirichlet Distribution Exponential Gamma HalfCauchy "
    "HalfNormal InverseGamma LogNormal MultivariateNormal NegativeBinomial Normal Poisson "
    "StudentT Support Uniform above below between discrete fraction ordered positive real simplex"
)


def test_public_names():
    assert sorted(evidence.distributions.__all__) == NAMES.split()
    assert all(hasattr(evidence.distributions, name) for name in NAMES.split())


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Normal("a", 1), "Normal: mean must be a finite number; got 'a'. Type a finite"),
        (lambda: Normal(0, None), "Normal: sd must be a finite number above zero; got None"),
        (lambda: Normal(0, 0), "Normal: sd must be a finite number above zero; got 0. Type"),
        (lambda: Normal(0, [1, -2]), r"Normal: sd must be .* above zero; got \[1, -2\]"),
        (lambda: Normal(math.nan, 1), "Normal: mean must be a finite number; got nan"),
        (lambda: Normal(0, math.inf), "Normal: sd must be a finite number above zero; got inf"),
        (lambda: Normal(True, 1), "Normal: mean must be a finite number; got True"),
        (lambda: Normal(1j, 1), "Normal: mean must be a finite number; got 1j"),
        (lambda: Normal([[1, 2], [3]], 1), r"Normal: mean must be .*got \[\[1, 2\], \[3\]\]"),
        (lambda: Normal({}, 1), r"Normal: mean must be a finite number; got \{\}"),
        (lambda: Normal(Normal(0, 1), 1), r"got Normal\(mean=0\.0.*lambda p: Normal\("),
        (lambda: Normal(abs, 1), r"Normal: mean must be .*lambda p: Normal\(\.\.\. p\['name'\]"),
        (lambda: Normal(0, 1, shape="a"), r"Normal: shape must be a tuple .*got 'a'.*shape=\(3,\)"),
        (lambda: Normal(0, 1, shape=(2, -1)), r"shape must be a tuple.*got \(2, -1\)"),
        (lambda: Normal(0, 1, shape=2.0), "shape must be a tuple of whole numbers; got 2.0"),
        (lambda: Normal(0, 1, shape=(True,)), r"shape must be a tuple.*got \(True,\)"),
        (lambda: Normal([0, 1], 1, shape=3), r"broadcasts .* got shape=\(3,\) beside \{'mean'"),
        (lambda: Normal([0, 1], [1, 2, 3]), "Normal: shape must be one that broadcasts"),
        (lambda: Uniform(2, 1), r"Uniform: low must be below high.*got Uniform\(low=2\.0, high=1"),
        (lambda: Uniform(0, 0), "Uniform: low must be below high"),
        (lambda: Beta(-1, 1), "Beta: a must be a finite number above zero; got -1"),
        (lambda: Gamma(0, 1), "Gamma: alpha must be a finite number above zero; got 0"),
        (lambda: InverseGamma(1, 0), "InverseGamma: scale must be a finite number above zero"),
        (lambda: StudentT(0, 0, 1), "StudentT: df must be a finite number above zero; got 0"),
        (lambda: HalfNormal(-0.5), "HalfNormal: sd must be a finite number above zero; got -0.5"),
        (lambda: Dirichlet(1.0), r"concentration must be an array with at least 1 axis; got 1\.0"),
        (lambda: Dirichlet([1.0]), "concentration must be an array of two numbers or more"),
        (lambda: Dirichlet([1, 0]), r"concentration must be a finite number above zero; got \[1"),
        (lambda: MultivariateNormal(0, np.eye(2)), "mean must be an array with at least 1 axis"),
        (lambda: MultivariateNormal([0, 0], 1), "covariance must be an array with at least 2 axes"),
        (lambda: MultivariateNormal([0], np.eye(2)), r"of shape \[1, 1\].*got mean \(1,\) and cov"),
        (lambda: MultivariateNormal([0, 0], [[1, 0.5], [0.2, 1]]), r"must be symmetric; got \[\[1"),
        (lambda: MultivariateNormal([0, 0], [[1, 2], [2, 1]]), "positive definite; got smallest e"),
        (lambda: Bernoulli(), "Bernoulli: give exactly one of probability and logit; got neither"),
        (lambda: Bernoulli(0.5, logit=0.0), "exactly one of probability and logit; got both"),
        (lambda: Bernoulli(1.5), "probability must be a number from 0 to 1; got 1.5.*logit= inst"),
        (lambda: Binomial(2.5, 0.5), "Binomial: trials must be a whole number, zero or above"),
        (lambda: Binomial(2), "Binomial: give exactly one of probability and logit; got neither"),
        (lambda: Poisson(-1), "Poisson: rate must be a finite number, zero or above; got -1"),
        (lambda: Poisson(log_rate="a"), "Poisson: log_rate must be a number; got 'a'"),
        (lambda: NegativeBinomial(1, 0), "NegativeBinomial: size must be a finite number above"),
        (
            lambda: Dirichlet([jnp.ones(()), 1.0]),
            r"one array, not a list.*jnp\.stack\(\[\.\.\.\]\)",
        ),
    ],
)
def test_wrong_numbers_are_named(make, message):
    with pytest.raises(DeclarationError, match=message):
        make()


def test_a_missing_or_misspelt_hyperparameter_is_a_type_error():
    with pytest.raises(TypeError, match="missing 1 required positional argument: 'sd'"):
        Normal(0)
    with pytest.raises(TypeError, match="unexpected keyword argument 'sigma'"):
        Normal(0, sigma=1)


def test_numbers_of_every_kind_become_float64():
    for given in (2, 2.0, np.float32(2), np.int8(2), np.array(2)):
        assert type(HalfNormal(given).sd) is float
    for given in ([1, 2], (1, 2), np.array([1, 2], np.int16), pd.Series([1, 2])):
        held = HalfNormal(given).sd
        assert held.dtype == np.float64
        assert held.tolist() == [1.0, 2.0]


def test_integers_give_float_results_in_either_precision():
    for on, wanted in ((True, np.float64), (False, np.float32)):
        with jax.enable_x64(on), jax.numpy_dtype_promotion("strict"):
            for distribution in (Normal(0, 1), HalfNormal(1), Gamma(2, 1), Poisson(3)):
                for x in (np.array([1, 2]), 1):
                    assert jax.eval_shape(distribution.log_prob, x).dtype == wanted


def test_arrays_are_copied_and_cannot_be_changed():
    given = np.array([1.0, 2.0])
    prior = HalfNormal(given)
    given[0] = -5.0
    assert prior.sd[0] == 1.0
    with pytest.raises(ValueError, match="read-only"):
        prior.sd[0] = 3.0
    with pytest.raises(AttributeError, match="cannot assign"):
        prior.sd = 3.0


# ---------------------------------------------------------------- repr, equality, copies


@pytest.mark.parametrize("distribution", [*EVERY, Gamma(2, [1, 2], shape=(3, 2))], ids=repr)
def test_repr_evaluates_back_and_copies_are_equal(distribution):
    back = eval(repr(distribution), vars(evidence.distributions).copy())
    assert back == distribution
    assert hash(back) == hash(distribution)
    assert pickle.loads(pickle.dumps(distribution)) == distribution
    assert copy.deepcopy(distribution) == distribution


def test_repr_is_short():
    assert repr(Normal(0, 1)) == "Normal(mean=0.0, sd=1.0)"
    assert repr(Bernoulli(logit=0.5)) == "Bernoulli(logit=0.5)"
    assert repr(Normal(np.zeros(1000), 1)) == "Normal(mean=<array [1000]>, sd=1.0)"
    assert repr(jax.ShapeDtypeStruct((2,), np.float32)) in repr(
        Normal(jax.ShapeDtypeStruct((2,), np.float32), 1)
    )
    seen = []
    jax.jit(lambda m: seen.append(repr(Normal(m, 1))))(np.zeros(3))
    assert seen == ["Normal(mean=<traced [3]>, sd=1.0)"]


@pytest.mark.parametrize(
    "other", [Normal(0, 2), Normal([0], 1), Normal(0, 1, shape=2), HalfNormal(1), 1.0, None]
)
def test_different_distributions_are_not_equal(other):
    assert Normal(0, 1) != other
    assert Normal([0, 1], 1) == Normal(np.array([0.0, 1.0]), 1)
    assert Normal([0, 1], 1) != Normal([0, 2], 1)
    assert Normal(0.0, 1) == Normal(-0.0, 1)
    assert hash(Normal([0.0], 1)) == hash(Normal([-0.0], 1))


# ---------------------------------------------------------------- pytrees


@pytest.mark.parametrize("distribution", EVERY, ids=repr)
def test_leaves_are_the_hyperparameters_in_order(distribution):
    paths, tree = jax.tree_util.tree_flatten_with_path(distribution)
    names = [jax.tree_util.keystr(path) for path, _ in paths]
    assert names == [f".{field}" for field, _ in distribution.hyperparameters]
    assert jax.tree.unflatten(tree, [leaf for _, leaf in paths]) == distribution


def test_anything_may_stand_for_a_leaf():
    for odd in (object(), "text", None, -1.0, float):
        mapped = jax.tree.map(lambda _, odd=odd: odd, Normal(0, 1, shape=(2,)))
        assert mapped.sd is odd
        assert mapped.shape == (2,)
    axes = jax.tree.map(lambda _: 0, Normal([0, 1], [1, 2]))
    values = jax.vmap(lambda d: d.log_prob(0.0), in_axes=(axes,))(Normal([0, 1], [1, 2]))
    assert values.shape == (2,)


def test_the_trades_words_for_hyperparameters():
    assert Gamma(2, 1).hyperparameters == (("alpha", "shape"), ("rate", "rate"))
    assert Normal(0, 1).hyperparameters == (("mean", "mean"), ("sd", "sd"))
    assert Bernoulli(logit=1).hyperparameters == (("logit", "logit"),)
    assert Binomial(3, 0.5).hyperparameters[1] == ("probability", "probability")


def test_single_precision_leaves_are_named():
    prior = Normal(np.float32(0.1), jnp.ones((), jnp.float32))
    assert prior.float32_leaves == ("sd",)
    assert Normal(0, 1).float32_leaves == ()


# ---------------------------------------------------------------- tracing


@pytest.mark.parametrize("distribution", [d for d in EVERY if d.event_shape == ()], ids=repr)
def test_construction_and_density_inside_a_trace(distribution):
    kind, fields = type(distribution), [f for f, _ in distribution.hyperparameters]

    def inside(leaves, x):
        return kind(**dict(zip(fields, leaves, strict=True))).log_prob(x)

    with strict_float64():
        leaves = jax.tree.leaves(distribution)
        x = 1.0 if distribution.support is discrete else 0.9
        plain = jax.jit(lambda d, x: d.log_prob(x))(distribution, x)
        assert jax.jit(inside)(leaves, x) == pytest.approx(float(plain), rel=1e-12)
        rows = [np.array([leaf, leaf]) for leaf in leaves]
        many = jax.jit(jax.vmap(inside, in_axes=(0, None)))(rows, x)
        assert many.shape == (2,)
        assert many[0] == many[1]


def test_vector_construction_inside_a_trace():
    def inside(a, c):
        return Dirichlet(a).log_prob(c[0] / c[0].sum()) + MultivariateNormal(a, c).log_prob(a)

    with strict_float64():
        covariance = np.array([[2.0, 0.5], [0.5, 1.0]])
        value = jax.jit(inside)(np.array([1.0, 1.0]), covariance)
        # uniform on the simplex of two: 0; the normal density at its mean
        expected = -0.5 * np.log(1.75) - np.log(2 * np.pi)
        assert value == pytest.approx(expected, rel=1e-12)
        hessian = jax.jit(jax.hessian(inside))(np.array([1.5, 2.5]), covariance)
        assert np.all(np.isfinite(hessian))


def test_wrong_numbers_are_refused_inside_a_trace_too():
    with pytest.raises(DeclarationError, match="sd must be a finite number above zero; got -1"):
        jax.jit(lambda m: Normal(m, -1).log_prob(0.0))(0.0)


def test_nothing_runs_at_construction(monkeypatch):
    def make():
        Normal(0, 1)
        Gamma([1, 2], 3, shape=(4, 2))
        Beta(jnp_array, 2)
        Uniform(jnp_array, 2)
        MultivariateNormal([0, 1], np.eye(2))
        Dirichlet([1, 2, 3])
        for d in EVERY:
            type(d)(**{f: getattr(d, f) for f, _ in d.hyperparameters}, shape=d.shape)
            _ = d.batch_shape, d.event_shape, d.support, hash(d), repr(d)

    def refuse(*args, **kwargs):
        raise AssertionError("a JAX operation ran")

    jnp_array = jnp.ones(())
    monkeypatch.setattr(jax.extend.core.Primitive, "bind", refuse)
    make()
    with pytest.raises(AssertionError, match="a JAX operation ran"):
        jnp.exp(jnp_array)


@pytest.mark.parametrize("distribution", EVERY[:18], ids=repr)
def test_centre_and_spread_run_no_jax(distribution, monkeypatch):
    def refuse(*args, **kwargs):
        raise AssertionError("a JAX operation ran")

    monkeypatch.setattr(jax.extend.core.Primitive, "bind", refuse)
    centre, spread = distribution.centre_and_spread()
    assert np.all(np.isfinite(centre))
    assert np.all(spread > 0)
    support = distribution.support
    x = support.forward(centre, np)
    assert support.contains(x)
    np.testing.assert_allclose(support.inverse(x, np), centre, rtol=1e-9, atol=1e-12)
    assert np.all(np.isfinite(support.log_jacobian(centre, np)))


@pytest.mark.parametrize("distribution", [Poisson(3), Bernoulli(0.5)], ids=repr)
def test_counts_have_no_centre_in_z(distribution):
    with pytest.raises(DeclarationError, match="a count has no unconstrained coordinate"):
        distribution.centre_and_spread()
    with pytest.raises(DeclarationError, match="a count has no unconstrained coordinate"):
        distribution.log_prob_z(0.0)
