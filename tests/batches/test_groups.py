"""Random effects over data sets against closed forms, enumeration and known null."""

import itertools

import numpy as np
import pytest
from scipy.special import betainc, gammaln, logsumexp
from scipy.stats import dirichlet

from evidence.batches import groups


def _exact_log_evidence(values):
    """log E[prod_n sum_k r_k Z_nk] under a flat Dirichlet, by all assignments of data sets."""
    n, k = values.shape
    parts = []
    for owners in itertools.product(range(k), repeat=n):
        counts = np.bincount(owners, minlength=k)
        weight = gammaln(k) + gammaln(1.0 + counts).sum() - gammaln(k + n)
        parts.append(weight + values[np.arange(n), owners].sum())
    return logsumexp(parts)


def test_clear_data_sets_are_counted():
    """With certain data sets the posterior is Dirichlet(1 + counts) (Stephan et al. 2009)."""
    values = np.where(np.arange(12)[:, None] < [9, 0], 0.0, -200.0)
    values[9:, 1] = 0.0
    alpha, share = groups.random_effects(values)
    np.testing.assert_allclose(alpha, [10.0, 4.0], atol=1e-8)
    np.testing.assert_allclose(share.sum(axis=1), 1.0)


def test_exceedance_of_two_is_a_beta_integral_and_of_three_agrees_with_draws():
    alpha = np.array([10.0, 4.0])
    found = groups._exceedance(alpha)
    np.testing.assert_allclose(found[0], 1 - betainc(10.0, 4.0, 0.5), rtol=1e-12)
    alpha = np.array([3.0, 5.0, 4.0])
    draws = dirichlet(alpha).rvs(200_000, random_state=np.random.default_rng(0))
    counted = np.bincount(draws.argmax(axis=1), minlength=3) / len(draws)
    np.testing.assert_allclose(groups._exceedance(alpha), counted, atol=0.005)


@pytest.mark.parametrize("seed", range(5))
def test_free_energy_is_a_close_lower_bound(seed):
    values = np.random.default_rng(seed).normal(scale=2.0, size=(6, 3))
    alpha, share = groups.random_effects(values)
    exact = _exact_log_evidence(values)
    bound = groups._free_energy(values, alpha, share)
    assert bound <= exact + 1e-9
    assert exact - bound < 1.0


def test_without_differences_the_null_is_favoured_and_protects():
    values = 0.01 * np.random.default_rng(3).normal(size=(30, 2))
    found = groups.summarise_groups(values, ["one", "other"])
    assert found.null_probability > 0.5
    assert np.all(np.abs(found.protected_exceedance - 0.5) < 0.3)
    np.testing.assert_allclose(found.protected_exceedance.sum(), 1.0)


def test_fixed_effects_add_up_and_data_sets_without_a_number_are_left_out():
    values = np.array([[-1.0, -2.0], [np.nan, -1.0], [-3.0, -1.0]])
    found = groups.summarise_groups(values, ["one", "other"])
    np.testing.assert_allclose(found.summed_log_evidence, [-4.0, -3.0])
    assert (found.data_sets, found.left_out) == (2, 1)
    assert list(found.table().candidate) == ["one", "other"]
    assert "2 data sets (1 left out)" in found.summary
