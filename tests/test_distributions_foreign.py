"""numpyro's distributions behind our interface."""

import pickle
import subprocess
import sys

import jax
import jax.numpy as jnp
import numpy as np
import numpyro.distributions as nd
import pytest

from evidence.complaints import DeclarationError
from evidence.distributions import (
    Dirichlet,
    HalfNormal,
    LogNormal,
    Normal,
    above,
    between,
    discrete,
    fraction,
    positive,
    real,
)
from evidence.distributions.foreign import adapt


@pytest.fixture(autouse=True)
def _float64():
    with jax.enable_x64(True):
        yield


def several():
    mixing = nd.Categorical(np.array([0.3, 0.7]))
    return [
        (nd.Normal(0.3, 1.7), (), (), real),
        (nd.HalfNormal(1.7).expand([2]), (2,), (), positive),
        (nd.Beta(2.0, 3.0), (), (), fraction),
        (nd.Uniform(-1.0, 2.0), (), (), between(-1, 2)),
        (nd.TruncatedNormal(0.0, 1.0, low=0.5), (), (), above(0.5)),
        (nd.Normal(np.zeros(3), 1.0).to_event(1), (), (3,), real),
        (nd.MixtureSameFamily(mixing, nd.Normal(np.array([0.0, 1.0]), 1.0)), (), (), real),
        (nd.Dirichlet(np.array([1.0, 2.0, 3.0])), (), (3,), None),
        (nd.LKJCholesky(3, 2.0), (), (3, 3), None),
        (nd.VonMises(0.0, 2.0), (), (), None),
    ]


@jax.jit
def everything(ours, x, z):
    """Density, density in z, and the log Jacobian summed over the event axes."""
    jacobian = ours.support.log_jacobian(z)
    jacobian = jacobian.reshape(*ours.batch_shape, -1).sum(-1)
    return ours.log_prob(x), ours.log_prob_z(z), jacobian


@pytest.mark.slow
@pytest.mark.parametrize("place", range(10))
def test_shapes_supports_and_density(place):
    theirs, batch, event, support = several()[place]
    ours = adapt(theirs)
    assert (ours.batch_shape, ours.event_shape) == (batch, event)
    assert support is None or ours.support == support
    centre, spread = ours.centre_and_spread()
    assert centre.shape == spread.shape == ours.support.z_shape(batch + event)
    assert np.all(spread > 0)
    x = ours.support.forward(centre, np)
    assert type(x) in (np.ndarray, np.float64)
    assert ours.support.contains(x)
    np.testing.assert_allclose(ours.support.inverse(x, np), centre, rtol=1e-6, atol=1e-9)
    density, in_z, jacobian = everything(ours, x, centre)
    np.testing.assert_allclose(density, jax.jit(theirs.log_prob)(x), rtol=1e-12)
    assert in_z.shape == batch
    np.testing.assert_allclose(in_z, density + jacobian, rtol=1e-9)
    draws = jax.eval_shape(lambda key: ours.sample(key, (4,)), jax.random.key(0))
    assert draws.shape == (4, *batch, *event)


@pytest.mark.parametrize(
    ("theirs", "ours"),
    [
        (nd.Normal(0.3, 1.7), Normal(0.3, 1.7)),
        (nd.HalfNormal(1.7), HalfNormal(1.7)),
        (nd.LogNormal(0.3, 1.7), LogNormal(0.3, 1.7)),
    ],
    ids=lambda x: type(x).__name__,
)
def test_the_same_prior_from_either_side(theirs, ours):
    adapted = adapt(theirs)
    z = np.linspace(-1.0, 2.0, 4)
    np.testing.assert_allclose(adapted.log_prob_z(z), ours.log_prob_z(z), rtol=1e-6)
    for found, exact in zip(adapted.centre_and_spread(), ours.centre_and_spread(), strict=True):
        # a start: a quarter of an sd is enough
        assert found == pytest.approx(exact, abs=0.25 * ours.centre_and_spread()[1])


def test_vectors_integrate_to_one_in_numpyros_own_coordinate():
    prior = adapt(nd.Dirichlet(np.array([1.5, 2.0, 3.0])))
    t = np.linspace(-12.0, 12.0, 301)
    grid = np.stack(np.meshgrid(t, t, indexing="ij"), axis=-1)
    total = np.sum(np.exp(jax.jit(lambda d, z: d.log_prob_z(z))(prior, grid))) * (t[1] - t[0]) ** 2
    assert total == pytest.approx(1.0, abs=1e-5)
    z = np.array([0.2, -0.4])
    x = prior.support.forward(z, np)
    exact = Dirichlet([1.5, 2.0, 3.0]).log_prob(x) + prior.support.log_jacobian(z, np)
    assert prior.log_prob_z(z) == pytest.approx(float(exact), rel=1e-6)


def test_elementwise_support_of_a_vector_sums_its_jacobian():
    prior = adapt(nd.HalfNormal(2.0).expand([2]).to_event(1))
    z = np.array([[0.1, -0.2], [1.0, 0.5]])
    expected = HalfNormal(2.0).log_prob_z(z).sum(-1)
    np.testing.assert_allclose(prior.log_prob_z(z), expected, rtol=1e-6)


def test_leaves_are_numpyros_sorted_by_name():
    prior = adapt(nd.Normal(np.zeros(3), 2.0).to_event(1))
    paths, _ = jax.tree_util.tree_flatten_with_path(prior)
    assert [jax.tree_util.keystr(p) for p, _ in paths] == [".base_dist.loc", ".base_dist.scale"]
    moved = jax.tree.map(lambda leaf: leaf + 1.0, prior)
    np.testing.assert_allclose(moved.distribution.base_dist.loc, 1.0)
    np.testing.assert_allclose(moved.distribution.base_dist.scale, 3.0)
    odd = jax.tree.map(lambda _: object(), prior)
    assert len(odd.leaves) == 2


def test_derivatives_in_the_hyperparameters():
    slope = jax.jit(jax.grad(lambda d: d.log_prob_z(1.0)))(adapt(nd.Normal(0.0, 2.0)))
    assert slope.leaves == pytest.approx((0.25, 1.0 / 8 - 0.5))


def test_hyperparameters_with_copies_are_not_offered():
    assert adapt(nd.Normal(0.0, 1.0)).hyperparameters == (("loc", "loc"), ("scale", "scale"))
    assert adapt(nd.Uniform(0.0, 1.0)).hyperparameters == ()


def test_single_precision_leaves_are_named():
    with jax.enable_x64(False):
        prior = nd.Normal(jnp.ones(2) / 3, 1.0)
    assert "loc" in adapt(prior).float32_leaves
    assert adapt(nd.Normal(0.0, 1.0)).float32_leaves == ()


def test_repr_equality_and_pickle():
    prior = adapt(nd.Normal(0.5, 1.0))
    assert repr(prior) == "numpyro Normal(loc=0.5, scale=1.0)"
    assert prior == adapt(nd.Normal(0.5, 1.0))
    assert prior != adapt(nd.Normal(0.6, 1.0))
    assert pickle.loads(pickle.dumps(prior)) == prior
    support = adapt(nd.Dirichlet(np.ones(3))).support
    assert repr(support).startswith("support of numpyro Dirichlet(")
    assert support.label("p", 1) == "unconstrained p[1]"
    assert support == adapt(nd.Dirichlet(np.ones(3))).support
    assert not support.contains(np.array([0.5, 0.6, 0.1]))


def test_our_own_pass_through_and_counts_are_marked():
    prior = Normal(0, 1)
    assert adapt(prior) is prior
    assert adapt(nd.Poisson(3.0)).support is discrete


@pytest.mark.parametrize(
    ("given", "message"),
    [
        (3, "a prior must be a distribution of evidence.distributions or of numpyro; got 3"),
        (abs, "a prior must be a distribution .*got <built-in function abs>"),
        (nd.ImproperUniform(nd.constraints.real, (), ()), "priors that integrate to one; got Impr"),
        (nd.ImproperUniform(nd.constraints.real, (2,), ()).to_event(1), "integrate to one"),
    ],
    ids=lambda x: type(x).__name__,
)
def test_what_is_no_prior_is_refused(given, message):
    with pytest.raises(DeclarationError, match=message):
        adapt(given)


def test_our_own_distributions_load_no_numpyro():
    code = (
        "import sys, evidence.distributions.foreign as f, evidence.distributions as d;"
        "f.adapt(d.Normal(0, 1)); print('numpyro' in sys.modules, 'scipy.stats' in sys.modules)"
    )
    shown = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert shown.stdout.split() == ["False", "False"]
