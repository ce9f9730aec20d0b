"""Draws from the modes' mixture, and what ten per cent on the prior's scale finds."""

import numpy as np
import pytest
from rung_problems import Target, gaussian, log_gamma, mode_at, two_peaks

from evidence.rungs.importance import mode_mixture, sample_mixture
from evidence.rungs.probes import probe


def _mixture(target, *places):
    modes = [mode_at(target, z) for z in places]
    return mode_mixture(modes, [probe(target, m) for m in modes], target)


def _sample(target, *places, n=8192, seed=0):
    return sample_mixture(target, _mixture(target, *places), n, np.random.default_rng(seed))


@pytest.mark.parametrize("dim", [1, 3, 8])
def test_gaussian_within_its_error(dim):
    found = _sample(gaussian(dim), np.full(dim, 0.5))
    assert abs(found.estimate) <= 3.0 * found.standard_error
    assert found.standard_error < 0.02
    assert found.pareto_k < 0.3


@pytest.mark.parametrize("shape", [0.5, 2.0])
def test_skew_within_its_error(shape):
    found = _sample(log_gamma(3, shape, turned=True), np.zeros(3))
    assert abs(found.estimate) <= 3.0 * found.standard_error
    assert found.standard_error < 0.02


def test_stated_error_covers_over_many_seeds():
    target = log_gamma(2, 1.0)
    mixture = _mixture(target, np.zeros(2))
    runs = [sample_mixture(target, mixture, 1024, np.random.default_rng(s)) for s in range(40)]
    ratio = np.array([r.estimate / r.standard_error for r in runs])
    assert np.abs(ratio).max() < 3.0
    assert np.std(ratio) > 0.05  # an error that is never used would cover as well


def test_mass_out_of_sight_of_the_mode_is_found_on_the_priors_scale():
    target = two_peaks(6.0, 1.0, 0.8, spread=3.0)
    mixture = _mixture(target, np.zeros(2))
    with_broad = sample_mixture(target, mixture, 8192, np.random.default_rng(1))
    without = sample_mixture(target, mixture.narrow(), 8192, np.random.default_rng(1))
    assert abs(with_broad.estimate) <= 3.0 * with_broad.standard_error
    assert without.estimate < -0.5


def test_every_mode_gets_a_part():
    target = two_peaks(2.0, 0.3, 0.01)
    mixture = _mixture(target, np.zeros(2), np.array([2.0, 0.0]))
    assert len(mixture.components) == 3
    assert mixture.shares[1] >= 0.9 * 0.02
    assert mixture.broad.tolist() == [False, False, True]
    assert mixture.shares[2] == pytest.approx(0.1)


def test_zero_density_everywhere_is_told_by_an_infinite_error():
    target = gaussian(2)
    mixture = _mixture(target, np.full(2, 0.5))
    nothing = Target(lambda z: z[0] * 0.0 - np.inf, 2)
    found = sample_mixture(nothing, mixture, 1024, np.random.default_rng(0))
    assert found.estimate == -np.inf
    assert found.standard_error == np.inf


def test_same_seed_same_digits():
    target = gaussian(2)
    assert _sample(target, np.full(2, 0.5)).estimate == _sample(target, np.full(2, 0.5)).estimate
