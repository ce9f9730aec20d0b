"""When the second-order term may be believed."""

import dataclasses

import jax.numpy as jnp
import numpy as np
import pytest
from rung_problems import Target, gaussian, log_gamma, mode_at, without_axes

from evidence.rungs.expansion import expand_modes, expand_rotated


def test_gaussian_needs_no_term():
    target = gaussian(4)
    found = expand_modes([mode_at(target, np.full(4, 0.5))], 4)
    assert found.estimate == pytest.approx(0.0, abs=1e-9)
    assert found.small
    assert not found.cancels


def test_term_is_added_to_the_log_over_many_pieces():
    """A hundred log-gamma pieces: Laplace is off by 100 x 1/(12 a) to first order (Stirling)."""
    target = log_gamma(100, 5.0, turned=True)
    found = expand_modes([mode_at(target, np.zeros(100))], 100)
    assert found.plain == pytest.approx(-100.0 / 60.0, abs=0.02)
    assert found.estimate == pytest.approx(0.0, abs=0.02)
    assert found.small_per_coordinate
    assert not found.small


def test_large_term_of_one_mode_is_dropped():
    target = log_gamma(1, 0.12)
    mode = mode_at(target, np.zeros(1))
    found = expand_modes([mode], 1)
    assert mode.second_order_term > 0.5
    assert found.estimate == found.plain
    assert not found.small


def test_large_parts_that_cancel_are_not_taken_for_exactness():
    def log_density(z):  # a bent Gaussian: the term is zero by cancellation
        return -0.5 * z[0] ** 2 - 0.5 * (z[1] + 0.8 * (z[0] ** 2 - 1.0)) ** 2

    target = Target(log_density, 2)
    mode = mode_at(target, np.array([0.0, 0.8]))
    assert abs(mode.second_order_term) < 1e-3
    assert expand_modes([mode], 2).cancels


def test_modes_are_summed_and_those_without_peak_left_out():
    target = gaussian(2)
    mode = mode_at(target, np.full(2, 0.5))
    found = expand_modes([mode, mode, without_axes(mode)], 2)
    assert found.estimate == pytest.approx(np.log(2.0), abs=1e-9)
    assert np.isnan(expand_modes([without_axes(mode)], 2).estimate)


def test_unknown_term_of_a_mode_that_matters_is_not_small():
    target = gaussian(2)
    mode = mode_at(target, np.full(2, 0.5))
    unknown = dataclasses.replace(mode, second_order_term=np.nan)
    assert not expand_modes([mode, unknown], 2).small


def test_rotated_whitening_agrees_where_derivatives_exist():
    target = log_gamma(6, 3.0, turned=True)
    mode = mode_at(target, np.zeros(6))
    found = expand_rotated(target, mode, np.random.default_rng(0))
    assert found.agrees
    assert found.term == pytest.approx(mode.second_order_term, rel=1e-2)


def test_rotated_whitening_disagrees_across_a_wall():
    def log_density(z):
        return -0.5 * jnp.sum(z**2) - jnp.where(z[0] > 1e-3, 50.0 * (z[0] - 1e-3) ** 2, 0.0)

    target = Target(log_density, 4)
    mode = mode_at(target, np.zeros(4))
    found = expand_rotated(target, mode, np.random.default_rng(0))
    assert not found.agrees
