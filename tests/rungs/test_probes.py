"""Probes along axes: scales, walls, kinks, far ends."""

import jax.numpy as jnp
import numpy as np
import pytest
from rung_problems import Target, gaussian, log_gamma, mode_at

from evidence.rungs.probes import name_axis, probe, probe_far_ends


def test_gaussian_has_unit_scales_and_no_trouble():
    target = gaussian(3)
    seen = probe(target, mode_at(target, np.full(3, 0.5)))
    assert seen.below == pytest.approx(np.ones(3), abs=1e-6)
    assert seen.above == pytest.approx(np.ones(3), abs=1e-6)
    assert seen.rise <= 0.0
    assert seen.deviation < 1e-6
    assert not seen.wall.any()
    assert not seen.kink.any()


def test_skew_splits_the_scales():
    target = log_gamma(1, 1.0)
    seen = probe(target, mode_at(target, np.zeros(1)))
    longer, shorter = max(seen.below[0], seen.above[0]), min(seen.below[0], seen.above[0])
    assert longer > 1.3
    assert shorter < 0.85


def test_wall_is_seen_on_the_axis_that_meets_it():
    target = Target(lambda z: jnp.where(z[0] > -1.0, -0.5 * jnp.sum(z**2), -jnp.inf), 2)
    mode = mode_at(target, np.zeros(2))
    seen = probe(target, mode)
    names = [name_axis(mode.axes[:, i], target) for i in np.flatnonzero(seen.wall)]
    assert names == ["z[0]"]


def test_wall_beyond_three_sd_is_none():
    target = Target(lambda z: jnp.where(z[0] > -3.5, -0.5 * jnp.sum(z**2), -jnp.inf), 2)
    assert not probe(target, mode_at(target, np.zeros(2))).wall.any()


def test_kink_is_seen_and_a_smooth_peak_is_none():
    target = Target(lambda z: -2.0 * jnp.abs(z[0]) - 0.5 * jnp.sum(z**2), 2)
    mode = mode_at(target, np.array([0.0, 0.0]))
    assert probe(target, mode).kink.sum() == 1
    smooth = Target(lambda z: -2.0 * jnp.log(jnp.cosh(z[0])) - 0.5 * jnp.sum(z**2), 2)
    assert not probe(smooth, mode_at(smooth, np.zeros(2))).kink.any()


def test_rise_above_the_mode_is_seen():
    target = Target(lambda z: jnp.logaddexp(-0.5 * z[0] ** 2, 1.0 - 5.0 * (z[0] - 3.0) ** 2), 1)
    assert probe(target, mode_at(target, np.zeros(1))).rise > 0.5


@pytest.mark.parametrize(
    ("log_density", "rising", "flat"),
    [
        (lambda z: -0.5 * jnp.sum(z**2), [False, False], [False, False]),
        (lambda z: -jnp.sum(jnp.log1p(z**2)), [False, False], [False, False]),
        (lambda z: -0.5 * z[0] ** 2, [False, False], [False, True]),
        (lambda z: z[1] - 0.5 * z[0] ** 2, [False, True], [False, False]),
        (lambda z: -0.5 * z[1] ** 2 + 0.5 * z[0] - jnp.exp(z[0]), [False] * 2, [False] * 2),
        # a prior with density x^-1/2 at zero underflows to +inf far out: no sign of trouble
        (lambda z: jnp.sum(z - 0.5 * jnp.log(jnp.exp(z)) - jnp.exp(z)), [False] * 2, [False] * 2),
    ],
)
def test_far_ends(log_density, rising, flat):
    target = Target(log_density, 2)
    ends = probe_far_ends(target, mode_at(target, np.zeros(2), expanded=False))
    assert ends.rising.tolist() == rising
    assert ends.flat.tolist() == flat


def test_axis_is_named_by_its_largest_coordinates():
    target = gaussian(3, names=("log rate", "mass", "logit p"))
    assert name_axis(np.array([0.7, -0.7, 0.01]), target) == "log rate, mass"
    assert name_axis(np.array([0.0, 0.0, 2.0]), target) == "logit p"
