"""Peaks that the mode search missed."""

import numpy as np
import pytest
from rung_problems import Target, gaussian, log_gamma, mode_at, two_peaks

from evidence.rungs.importance import mode_mixture
from evidence.rungs.probes import probe
from evidence.rungs.unseen import climb_to_peak, find_unseen


def _unseen(target, *places, seed=0):
    modes = [mode_at(target, z) for z in places]
    mixture = mode_mixture(modes, [probe(target, m) for m in modes], target)
    return find_unseen(target, modes, mixture, np.random.default_rng(seed))


@pytest.mark.parametrize("seed", range(5))
def test_narrow_peak_is_found_from_its_basin(seed):
    """Two hundred draws on the prior's scale hit this peak itself about once in two runs."""
    target = two_peaks(6.0, 0.2, 0.8, spread=3.0)
    found = _unseen(target, np.zeros(2), seed=seed)
    assert len(found) == 1
    assert found[0].centre == pytest.approx([6.0, 0.0], abs=0.02)
    assert found[0].axes @ found[0].axes.T == pytest.approx(0.04 * np.eye(2), rel=0.1, abs=1e-3)


@pytest.mark.parametrize(
    ("target", "z"),
    [
        (gaussian(3), np.full(3, 0.5)),
        (gaussian(30), np.full(30, 0.5)),
        (log_gamma(3, 0.5), np.zeros(3)),
    ],
)  # fmt: skip
def test_single_peak_has_no_other(target, z):
    assert _unseen(target, z) == []


def test_known_peaks_are_not_found_again():
    target = two_peaks(6.0, 0.2, 0.8, spread=3.0)
    assert _unseen(target, np.zeros(2), np.array([6.0, 0.0])) == []


def test_bent_ridge_is_climbed_back_to_its_own_peak():
    def log_density(z):
        return -0.125 * z[0] ** 2 - 0.5 * (z[1] + 0.6 * (z[0] ** 2 - 4.0)) ** 2

    target = Target(log_density, 2, spread=3.0)
    assert _unseen(target, np.array([0.0, 2.4])) == []


def test_climb_ends_at_the_peak_and_gives_up_where_there_is_none():
    target = gaussian(3)
    assert climb_to_peak(target, np.full(3, 4.0)).centre == pytest.approx(np.full(3, 0.5), abs=0.02)
    endless = Target(lambda z: z[0] - 0.5 * z[1] ** 2, 2)
    assert climb_to_peak(endless, np.zeros(2)) is None
