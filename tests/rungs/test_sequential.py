"""Sequential Monte Carlo, small."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from rung_problems import Target, mode_at, two_peaks

from evidence.rungs.importance import mode_mixture
from evidence.rungs.probes import probe
from evidence.rungs.sequential import _next_rise, run_sequential


def _start(target, z):
    mode = mode_at(target, z)
    return mode_mixture([mode], [probe(target, mode)], target)


def _run(target, z, seed=0, particles=500):
    return run_sequential(target, _start(target, z), seed, replicates=4, particles=particles)


PEAKS = two_peaks(6.0, 1.0, 0.8, spread=3.0)


def test_mass_out_of_sight_of_the_mode_within_the_error():
    found = _run(PEAKS, np.zeros(2))
    assert found.reached
    assert abs(found.estimate) <= 3.0 * found.standard_error
    assert found.standard_error < 0.15
    assert found.draws.shape == (2000, 2)
    assert np.mean(found.draws[:, 0] > 3.0) == pytest.approx(0.8, abs=0.15)


def test_same_seed_same_digits_and_another_seed_others():
    one, two, other = (_run(PEAKS, np.zeros(2), seed=s) for s in (1, 1, 2))
    assert one.estimate == two.estimate
    assert one.estimate != other.estimate


def test_zero_density_on_half_the_space_is_survived():
    target = Target(lambda z: jnp.where(z[0] > 0.0, -0.5 * jnp.sum(z**2), -jnp.inf), 2, spread=1.5)
    found = _run(target, np.array([0.5, 0.0]))
    assert found.estimate == pytest.approx(np.log(np.pi), abs=0.15)
    assert found.draws[:, 0].min() > 0.0


def test_rise_keeps_half_the_particles_and_is_whole_where_harmless():
    with jax.enable_x64(True):
        ratio = np.random.default_rng(0).normal(size=2000) * 30.0
        alive = jnp.ones(2000, dtype=bool)
        rise_of = jax.jit(_next_rise)
        rise = float(rise_of(jnp.asarray(ratio), alive, jnp.asarray(1.0)))
        whole = float(rise_of(jnp.zeros(2000), alive, jnp.asarray(0.4)))
    weights = np.exp(rise * (ratio - np.max(ratio)))
    assert weights.sum() ** 2 / (weights**2).sum() == pytest.approx(1000.0, rel=1e-3)
    assert whole == pytest.approx(0.4)
