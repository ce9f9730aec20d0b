"""Supports: maps, inverses, log Jacobians, labels, and what is inside."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from numpyro.distributions import biject_to, constraints

from evidence.complaints import DeclarationError
from evidence.distributions import (
    above,
    below,
    between,
    discrete,
    fraction,
    ordered,
    positive,
    real,
    simplex,
)
from tests.distribution_cases import strict_float64

NUMBERS = [real, positive, fraction, above(2.5), below(-1.0), between(-2, 3), between(0, 1)]
VECTORS = [simplex, ordered]


@pytest.fixture(autouse=True)
def _strict():
    with strict_float64():
        yield


def points(support):
    if support.event_rank:
        return np.random.default_rng(1).normal(0.0, 2.0, size=(5, 3))
    return np.array([-12.0, -4.0, -0.3, 0.0, 0.2, 1.0, 5.0, 12.0])


@jax.jit
def maps(support, z):
    x = support.forward(z)
    return x, support.inverse(x), support.log_jacobian(z)


@pytest.mark.parametrize("support", [*NUMBERS, *VECTORS], ids=repr)
def test_round_trip_and_numpy_the_same_as_jax(support):
    z = points(support)
    x, back, log_jacobian = maps(support, z)
    # beside a bound of 2.5, exp(-12) keeps ten digits
    np.testing.assert_allclose(back, z, rtol=1e-10, atol=1e-12)
    in_numpy = support.forward(z, np), support.inverse(x, np), support.log_jacobian(z, np)
    for ours, theirs in zip(in_numpy, (x, back, log_jacobian), strict=True):
        assert not isinstance(ours, jax.Array)
        np.testing.assert_allclose(ours, theirs, rtol=1e-12, atol=1e-12)
    assert support.contains(x)
    assert x.shape == (*z.shape[:-1], 4) if support is simplex else x.shape == z.shape
    assert support.z_shape(x.shape) == z.shape


@pytest.mark.parametrize("support", NUMBERS, ids=repr)
def test_log_jacobian_is_the_log_slope(support):
    z = points(support)
    slope = jax.jit(jax.vmap(jax.grad(support.forward)))(z)
    np.testing.assert_allclose(support.log_jacobian(z, np), np.log(np.abs(slope)), atol=1e-9)


@pytest.mark.parametrize("support", VECTORS, ids=repr)
def test_log_jacobian_is_the_log_determinant(support):
    z = points(support)
    k = z.shape[-1]  # densities on the simplex leave the last component out
    matrix = jax.jit(jax.vmap(jax.jacfwd(lambda v: support.forward(v)[:k])))(z)
    np.testing.assert_allclose(
        support.log_jacobian(z, np), np.linalg.slogdet(np.asarray(matrix))[1], atol=1e-10
    )


@pytest.mark.parametrize(
    ("support", "constraint"),
    [
        (real, constraints.real),
        (positive, constraints.positive),
        (fraction, constraints.unit_interval),
        (above(2.5), constraints.greater_than(2.5)),
        (below(-1.0), constraints.less_than(-1.0)),
        (between(-2, 3), constraints.interval(-2.0, 3.0)),
        (ordered, constraints.ordered_vector),
    ],
    ids=repr,
)
def test_maps_equal_numpyro_where_the_coordinate_is_the_same(support, constraint):
    z = points(support)
    with jax.numpy_rank_promotion("allow"), jax.numpy_dtype_promotion("standard"):
        transform = biject_to(constraint)
        x = transform(z)
        log_jacobian = transform.log_abs_det_jacobian(z, x)
    np.testing.assert_allclose(support.forward(z, np), x, rtol=1e-12, atol=1e-15)
    np.testing.assert_allclose(support.log_jacobian(z, np), log_jacobian, rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("support", [fraction, simplex, between(-1, 1)], ids=repr)
def test_far_coordinates_keep_their_log_jacobian(support):
    z = np.array([800.0]) if support is simplex else np.array(800.0)
    for xp in (np, jnp):
        for sign in (-1.0, 1.0):
            value = support.log_jacobian(sign * z, xp)
            assert value == pytest.approx(-800.0, rel=2e-3)
    slope = jax.jit(jax.grad(lambda v: support.log_jacobian(v).sum()))(z)
    np.testing.assert_allclose(slope, -1.0)


def test_slope_and_bend_at_the_origin():
    # written with abs(z), these would have a kink at 0 that no value shows
    for support in (fraction, between(0.0, 1.0)):
        assert jax.jit(jax.grad(support.forward))(0.0) == 0.25
        assert jax.jit(jax.grad(support.log_jacobian))(0.0) == 0.0
        assert jax.jit(jax.hessian(support.log_jacobian))(0.0) == -0.5


def test_near_a_bound_the_distance_keeps_its_digits():
    lower = between(0.0, 5.0).forward(-200.0, np)
    upper = between(-5.0, 0.0).forward(200.0, np)
    assert lower == -upper == pytest.approx(5.0 * np.exp(-200.0), rel=1e-12)


def test_array_bounds():
    support = between(np.array([0.0, 1.0]), 3.0)
    x = support.forward(np.zeros(2), np)
    np.testing.assert_array_equal(x, [1.5, 2.0])
    assert support.contains(x)
    assert not support.contains([0.5, 0.5])
    np.testing.assert_allclose(support.log_jacobian(np.zeros(2), np), np.log([0.75, 0.5]))


@pytest.mark.parametrize(
    ("support", "value", "inside"),
    [
        (real, -1e300, True),
        (real, np.inf, False),
        (real, [0.0, np.nan], False),
        (real, "a", False),
        (positive, 0.0, False),
        (positive, [1, 2], True),
        (fraction, 1.0, False),
        (fraction, 0.5, True),
        (above(2), 2.0, False),
        (above(2), 2.1, True),
        (below(2), 2.1, False),
        (below(2), 1, True),
        (between(0, 2), 2.0, False),
        (between(0, 2), 1.0, True),
        (simplex, [0.3, 0.7], True),
        (simplex, [0.3, 0.6], False),
        (simplex, [0.0, 1.0], False),
        (simplex, 1.0, False),
        (simplex, [1.0], False),
        (ordered, [1.0, 2.0, 2.0], False),
        (ordered, [[1.0, 2.0], [0.0, 3.0]], True),
        (ordered, 1.0, False),
        (discrete, [0, 3], True),
        (discrete, 0.5, False),
        (discrete, -1, False),
    ],
)
def test_what_is_inside(support, value, inside):
    assert support.contains(value) is inside


@pytest.mark.parametrize(
    ("support", "index", "label"),
    [
        (real, None, "x"),
        (real, 2, "x[2]"),
        (positive, None, "log x"),
        (positive, 2, "log x[2]"),
        (positive, (1, 2), "log x[1, 2]"),
        (positive, (), "log x"),
        (fraction, None, "logit x"),
        (between(0, 1), 1, "logit x[1]"),
        (between(0, 2), 1, "scaled logit x[1]"),
        (above(2.5), None, "log(x - 2.5)"),
        (above(0), 3, "log x[3]"),
        (above(-1), None, "log(x - (-1))"),
        (above([1.0, 2.0]), 1, "log(x[1] - lower bound)"),
        (below(10), None, "log(10 - x)"),
        (simplex, None, "log(x/x[last])"),
        (simplex, 0, "log(x[0]/x[last])"),
        (ordered, None, "log steps of x"),
        (ordered, 0, "x[0]"),
        (ordered, (1, 2), "log(x[1, 2] - x[1, 1])"),
        (discrete, 1, "x[1]"),
    ],
    ids=repr,
)
def test_labels(support, index, label):
    assert support.label("x", index) == label


def test_labels_of_all_coordinates():
    assert simplex.labels("p", (3,)) == ["log(p[0]/p[2])", "log(p[1]/p[2])"]
    assert simplex.labels("p", (2, 2)) == ["log(p[0, 0]/p[0, 1])", "log(p[1, 0]/p[1, 1])"]
    assert positive.labels("rate", ()) == ["log rate"]
    assert above([1.0, 2.0]).labels("x", (2,)) == ["log(x[0] - 1)", "log(x[1] - 2)"]


def test_label_of_a_traced_bound_is_in_words():
    seen = []
    jax.jit(lambda a: seen.append((above(a).label("x"), between(a, 1.0).label("x"))))(0.5)
    assert seen == [("log(x - lower bound)", "scaled logit x")]


def test_traced_bounds_carry_derivatives():
    slope = jax.jit(jax.grad(lambda low: between(low, 2.0).forward(0.0)))(1.0)
    assert slope == 0.5
    assert jax.jit(jax.grad(lambda low: between(low, 2.0).log_jacobian(0.0)))(1.0) == -1.0
    assert jax.vmap(lambda support: support.forward(0.0))(above(jnp.arange(3.0))).shape == (3,)


@pytest.mark.parametrize("ask", ["forward", "inverse", "log_jacobian", "z_shape"])
def test_counts_have_no_coordinate(ask):
    with pytest.raises(DeclarationError, match=r"a count has no unconstrained coordinate\. Sum"):
        getattr(discrete, ask)(np.zeros(1))


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: between(2, 1), r"between: low must be below high.*got between\(low=2\.0"),
        (lambda: between([0, 0], [1, 0]), "between: low must be below high, element by element"),
        (lambda: between([0, 0], [1, 1, 1]), "between: low must be below high"),
        (lambda: above("a"), "above: lower must be a finite number; got 'a'"),
        (lambda: below(np.inf), "below: upper must be a finite number; got inf"),
        (lambda: above(None), "above: lower must be a finite number; got None"),
    ],
)
def test_wrong_bounds_are_refused(make, message):
    with pytest.raises(DeclarationError, match=message):
        make()


@pytest.mark.parametrize("support", [*NUMBERS, *VECTORS, discrete], ids=repr)
def test_repr_evaluates_back(support):
    names = {"above": above, "below": below, "between": between}
    names |= {repr(s): s for s in (real, positive, fraction, simplex, ordered, discrete)}
    assert eval(repr(support), names) == support
    assert hash(eval(repr(support), names)) == hash(support)
