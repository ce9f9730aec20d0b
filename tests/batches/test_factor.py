"""Directions by a factorisation against those by eigenvectors."""

import jax
import numpy as np
import pytest

from evidence import newton
from evidence.batches.factor import factor, factored_directions


def _matrix(d, seed, shift):
    rng = np.random.default_rng(seed)
    half = rng.normal(size=(d, d))
    return half @ half.T + shift * np.eye(d), rng.normal(size=d)


def _find(gradient, hessian):
    with jax.enable_x64(True):
        program = jax.jit(lambda g, h, s: factored_directions(None, g, h, s))
        found = program(gradient, hessian, np.ones(len(gradient)))
    return [np.asarray(x) for x in found]


@pytest.mark.parametrize("d", [1, 2, 5, 17])
def test_newton_step_and_decrement_of_a_positive_definite_hessian(d):
    hessian, gradient = _matrix(d, d, 0.1)
    step, escape, decrement, smallest = _find(gradient, hessian)
    expected = np.linalg.solve(hessian, gradient)
    np.testing.assert_allclose(step, -expected, rtol=1e-9)
    np.testing.assert_allclose(decrement, gradient @ expected, rtol=1e-10)
    assert smallest > 0
    assert not escape.any()


@pytest.mark.parametrize("d", [2, 5, 17])
@pytest.mark.parametrize("seed", range(5))
def test_indefinite_hessian_gives_a_step_down_and_a_way_off_the_saddle(d, seed):
    hessian, gradient = _matrix(d, seed, -0.3 * d)
    step, escape, decrement, smallest = _find(gradient, hessian)
    principal = newton.principal_directions(np, gradient, hessian, np.ones(d))
    assert (smallest < 0) == (principal.smallest < 0)
    assert gradient @ step < 0
    assert decrement > 0
    assert escape @ hessian @ escape < 0


def test_no_damping_is_added_to_a_badly_scaled_hessian():
    scales = 10.0 ** np.arange(-4, 4)
    hessian, gradient = _matrix(8, 0, 0.5)
    hessian, gradient = hessian * np.outer(scales, scales), gradient * scales
    with jax.enable_x64(True):
        parts = jax.jit(factor)(gradient, hessian, np.ones(8))
    np.testing.assert_array_equal(parts.raw, parts.pivots)
    lower, pivots = np.asarray(parts.lower), np.asarray(parts.pivots)
    again = lower @ np.diag(pivots) @ lower.T / np.outer(parts.scale, parts.scale)
    np.testing.assert_allclose(again, hessian, rtol=1e-10)
