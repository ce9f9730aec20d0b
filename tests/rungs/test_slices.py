"""Conditional expansions along one coordinate."""

import jax.numpy as jnp
import numpy as np
import pytest
from rung_problems import LOG_2PI, Target, gaussian, mode_at

from evidence.rungs.importance import sample_mixture
from evidence.rungs.ladder import climb
from evidence.rungs.proposal import Mixture, component
from evidence.rungs.slices import find_driver, slice_mixture

SPREAD = np.concatenate([[2.0], np.full(5, 3.0)])


def _funnel(order=slice(None), *, shift: float = 0.0) -> Target:
    """Five effects whose log scale is normal with sd 2: log integral 0."""

    def log_density(z):
        z = z[order]
        effects = -0.5 * ((z[1:] - shift) / jnp.exp(z[0])) ** 2 - z[0] - 0.5 * LOG_2PI
        return -0.125 * z[0] ** 2 - np.log(2.0) - 0.5 * LOG_2PI + jnp.sum(effects)

    target = Target(log_density, 6, names=("log tau", "a", "b", "c", "d", "e"))
    target.spread = SPREAD[order]
    return target


def _broad_draws(target, n=8192):
    broad = Mixture.of([component(target.centre, np.diag(target.spread))], [1.0])
    return sample_mixture(target, broad, n, np.random.default_rng(0))


def test_driver_is_the_coordinate_that_sets_the_widths():
    assert find_driver(_broad_draws(_funnel())) == 0
    assert find_driver(_broad_draws(_funnel(slice(None, None, -1)))) == 5


def test_gaussian_has_no_driver():
    assert find_driver(_broad_draws(gaussian(4))) is None
    assert find_driver(_broad_draws(gaussian(1))) is None


@pytest.mark.parametrize("shift", [0.0, 0.5])
def test_row_of_slices_integrates_a_funnel(shift):
    target = _funnel(shift=0.3)
    row = slice_mixture(target, 0, _broad_draws(target), shift=shift)
    found = sample_mixture(target, row.mixture, 8192, np.random.default_rng(1))
    assert abs(found.estimate) <= 3.0 * found.standard_error
    assert found.standard_error < 0.03
    assert found.pareto_k < 0.5
    assert len(row.mixture.components) == 25


def test_slices_follow_the_conditional_modes():
    def log_density(z):
        return -0.5 * (z[0] / 2.0) ** 2 - 0.5 * ((z[1] - jnp.sin(z[0])) / 0.1) ** 2

    target = Target(log_density, 2, spread=2.0)
    row = slice_mixture(target, 0, _broad_draws(target)).mixture
    centres = np.array([c.centre for c in row.components])
    assert centres[:, 1] == pytest.approx(np.sin(centres[:, 0]), abs=1e-3)
    assert np.ptp(centres[:, 0]) == pytest.approx(16.0)


def test_climb_accepts_them_where_all_else_fails():
    target = _funnel()
    at = np.zeros(6)
    at[0] = -20.0  # the peak of a funnel holds nothing of its mass
    audit = climb(target, [mode_at(target, at)])
    assert audit.rungs[-1].name == "conditional expansions"
    assert "along log tau" in audit.rungs[-1].note
    assert audit.trust == "corrected"
    assert abs(audit.log_evidence) <= min(3.0 * audit.standard_error, 0.05)
