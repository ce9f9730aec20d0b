"""Shape of the largest weights, against a known distribution and against arviz."""

import warnings

import numpy as np
import pytest

from evidence.rungs.pareto import pareto_k


@pytest.mark.parametrize("shape", [0.2, 0.5, 0.9])
def test_generalised_pareto_weights_give_their_shape_back(shape):
    u = np.random.default_rng(0).random(40_000)
    weights = ((1.0 - u) ** -shape - 1.0) / shape
    assert pareto_k(np.log(weights)) == pytest.approx(shape, abs=0.12)


def _k_of_arviz(log_weights):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import arviz
    if hasattr(arviz, "psislw"):
        return float(arviz.psislw(log_weights)[1])
    from arviz_stats.base import array_stats

    return float(array_stats.psislw(-log_weights)[1])  # from 1.0 on it takes log likelihoods


@pytest.mark.parametrize("seed", [0, 1, 2])
@pytest.mark.parametrize("power", [0.3, 1.0, 2.0])
def test_agrees_with_arviz(seed, power):
    """Two implementations of Zhang & Stephens (2009) with the shrinkage of Vehtari et al.

    The two generations of arviz differ from one another by about 0.02 where k is above 1.
    """
    normal = np.random.default_rng(seed).standard_normal(4000)
    log_weights = power * 0.5 * normal**2 - normal**2 * 0.1
    assert pareto_k(log_weights) == pytest.approx(_k_of_arviz(log_weights), abs=0.02, rel=0.02)


def test_constant_is_taken_out():
    log_weights = np.random.default_rng(4).standard_normal(1000)
    assert pareto_k(log_weights + 700.0) == pytest.approx(pareto_k(log_weights), abs=1e-9)


def test_equal_weights_have_no_tail_and_few_weights_have_no_k():
    assert pareto_k(np.zeros(1000)) == -np.inf
    assert pareto_k(np.zeros(10)) == np.inf
    assert pareto_k(np.full(100, -np.inf)) == np.inf


def test_weights_of_zero_do_not_enter_the_tail():
    rng = np.random.default_rng(5)
    log_weights = np.where(rng.random(4000) < 0.9, -np.inf, 0.3 * rng.standard_normal(4000))
    assert pareto_k(log_weights) < 0.5


def test_one_dominating_weight_speaks_up():
    log_weights = np.zeros(1000)
    log_weights[:10] = np.linspace(1.0, 200.0, 10)
    assert pareto_k(log_weights) > 1.0
