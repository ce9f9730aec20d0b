"""The mixture that learns the posterior's shape."""

import numpy as np
import pytest
from rung_problems import Target, gaussian, log_gamma, mode_at, two_peaks

from evidence.rungs.adaptive import mixture_from_draws, refit, sample_adapted
from evidence.rungs.importance import mode_mixture, sample_mixture
from evidence.rungs.probes import probe
from evidence.rungs.proposal import Mixture, component


def _start(target, z):
    mode = mode_at(target, z)
    return mode_mixture([mode], [probe(target, mode)], target)


def _adapted(target, start, seed=0):
    return sample_adapted(
        target, start, np.random.default_rng(seed), draws_per_round=2000, final_draws=4096
    )


@pytest.mark.parametrize(
    ("target", "z"), [(gaussian(3), np.full(3, 0.5)), (log_gamma(4, 0.7), np.zeros(4))]
)
def test_exact_cases_within_the_error(target, z):
    found = _adapted(target, _start(target, z))
    assert abs(found.estimate) <= 3.0 * found.standard_error
    assert found.standard_error < 0.02
    assert found.pareto_k < 0.6


def test_learns_a_bent_ridge_better_than_the_start():
    def log_density(z):
        bent = z[1] + 0.4 * (z[0] ** 2 - 4.0)
        return -0.125 * z[0] ** 2 - 0.5 * bent**2 - np.log(2.0 * 2.0 * np.pi)

    target = Target(log_density, 2, spread=3.0)
    start = _start(target, np.array([0.0, 1.6]))
    plain = sample_mixture(target, start, 4096, np.random.default_rng(0))
    learned = _adapted(target, start)
    assert abs(learned.estimate) <= 3.0 * learned.standard_error
    assert learned.share > 2.0 * plain.share


def test_follows_mass_that_only_the_broad_part_sees():
    target = two_peaks(6.0, 0.3, 0.8, spread=3.0)
    found = _adapted(target, _start(target, np.zeros(2)))
    assert abs(found.estimate) <= 3.0 * found.standard_error
    assert found.standard_error < 0.03


def test_refit_recovers_two_clusters():
    rng = np.random.default_rng(3)
    draws = np.concatenate([rng.normal(-4.0, 0.5, (600, 2)), rng.normal(4.0, 1.0, (200, 2))])
    start = Mixture.of([component(np.array([s, s]), 2.0 * np.eye(2)) for s in (-2.0, 2.0)], [1, 1])
    fitted = start
    for _ in range(4):
        fitted = refit(fitted, draws, np.full(800, 1.0 / 800))
    centres = np.array([c.centre for c in fitted.components])
    assert centres[0] == pytest.approx([-4.0, -4.0], abs=0.1)
    assert centres[1] == pytest.approx([4.0, 4.0], abs=0.3)
    assert fitted.shares == pytest.approx([0.75, 0.25], abs=0.01)


def test_component_with_too_few_draws_is_dropped():
    rng = np.random.default_rng(4)
    draws = rng.normal(size=(500, 2))
    start = Mixture.of([component(np.full(2, m), np.eye(2)) for m in (0.0, 90.0)], [1, 1])
    assert len(refit(start, draws, np.full(500, 1.0 / 500)).components) == 1


def test_mixture_from_draws_covers_them():
    rng = np.random.default_rng(5)
    draws = rng.normal(size=(2000, 3)) * [1.0, 10.0, 0.1]
    fitted = mixture_from_draws(draws, 4, rng)
    target = gaussian(3)
    target.batch = lambda z: -0.5 * ((z / [1.0, 10.0, 0.1]) ** 2).sum(axis=1)
    found = sample_mixture(target, fitted, 4096, rng)
    assert found.estimate == pytest.approx(1.5 * np.log(2.0 * np.pi), abs=0.03)


def test_zero_density_ends_without_an_exception():
    target = gaussian(2)
    start = _start(target, np.full(2, 0.5))
    nothing = Target(lambda z: z[0] * 0.0 - np.inf, 2)
    assert _adapted(nothing, start).estimate == -np.inf
