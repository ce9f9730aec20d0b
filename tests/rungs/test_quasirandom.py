"""Randomised low-discrepancy points."""

import numpy as np
import pytest
from scipy.stats import kstest, qmc

from evidence.rungs.quasirandom import uniform_points


@pytest.mark.parametrize("dim", [1, 4, 21, 30])
def test_points_fill_every_slice_of_every_coordinate(dim):
    points = uniform_points(64, dim, np.random.default_rng(0), replicates=3)
    assert points.shape == (3, 64, dim)
    assert points.min() > 0.0
    assert points.max() < 1.0
    for one in points:
        slices = np.sort(np.floor(64 * one), axis=0)
        assert np.array_equal(slices, np.tile(np.arange(64.0)[:, None], (1, dim)))


def test_first_two_coordinates_are_a_net():
    """A (0, m, 2) net has one point in every elementary box (Niederreiter 1992)."""
    points = uniform_points(64, 2, np.random.default_rng(1))[0]
    for k in range(7):
        boxes = np.floor(points * [2**k, 2 ** (6 - k)]).astype(int)
        assert len({tuple(b) for b in boxes}) == 64


def test_discrepancy_is_that_of_an_independent_sobol_sequence():
    ours = qmc.discrepancy(uniform_points(1024, 8, np.random.default_rng(2))[0])
    theirs = qmc.discrepancy(qmc.Sobol(8, rng=0).random(1024))
    random = qmc.discrepancy(np.random.default_rng(3).random((1024, 8)))
    assert ours < 1.3 * theirs
    assert ours < 0.5 * random


def test_replicates_are_uniform_each_and_independent():
    points = uniform_points(2, 3, np.random.default_rng(4), replicates=2000)
    first = points[:, 0, 1]
    assert kstest(first, "uniform").pvalue > 1e-3
    assert abs(np.corrcoef(first[:-1], first[1:])[0, 1]) < 0.1


def test_mean_over_replicates_is_unbiased_and_error_shrinks():
    def integral(n):
        u = uniform_points(n, 4, np.random.default_rng(5), replicates=32)
        return np.prod(1.5 * np.sqrt(u), axis=2).mean(axis=1)  # each factor integrates to 1

    rough, fine = integral(32), integral(2048)
    assert abs(fine.mean() - 1.0) < 3.0 * fine.std() / np.sqrt(31) + 1e-6
    assert fine.std() < rough.std() / 15.0  # independent points would give a factor of 8


def test_same_generator_state_same_points():
    one = uniform_points(16, 25, np.random.default_rng(7))
    two = uniform_points(16, 25, np.random.default_rng(7))
    other = uniform_points(16, 25, np.random.default_rng(8))
    assert np.array_equal(one, two)
    assert not np.array_equal(one, other)
