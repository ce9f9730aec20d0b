"""Split Student-t components and mixtures."""

import numpy as np
import pytest
from scipy import stats

from evidence.rungs.proposal import Mixture, component
from evidence.rungs.quasirandom import uniform_points

AXES = np.array([[1.0, 0.0], [0.7, 0.5]])


def test_unsplit_density_is_the_multivariate_t():
    ours = component(np.array([1.0, -1.0]), AXES, degrees=4.0)
    z = np.random.default_rng(0).normal(size=(50, 2)) * 3.0
    reference = stats.multivariate_t([1.0, -1.0], AXES @ AXES.T, df=4.0).logpdf(z)
    assert ours.log_density(z) == pytest.approx(reference, abs=1e-10)


def test_split_density_integrates_to_one():
    part = component(np.zeros(1), np.eye(1), below=np.array([0.5]), above=np.array([3.0]))
    z = np.sinh(np.linspace(-12.0, 12.0, 40_001))
    assert np.trapezoid(np.exp(part.log_density(z[:, None])), z) == pytest.approx(1.0, abs=1e-6)


def test_draws_follow_the_density():
    """The probability integral transform of split draws on either side of the centre."""
    part = component(np.zeros(1), np.eye(1), below=np.array([0.5]), above=np.array([2.0]))
    u = uniform_points(4096, 2, np.random.default_rng(1))[0]
    z = part.draw(u)[:, 0]
    assert np.mean(z < 0.0) == pytest.approx(0.5 / 2.5, abs=0.005)
    assert stats.kstest(z[z > 0.0] / 2.0, stats.halfcauchy.cdf).pvalue < 1e-3  # not any tail
    folded = stats.kstest(z[z > 0.0] / 2.0, lambda x: 2.0 * stats.t(5.0).cdf(x) - 1.0)
    assert folded.statistic < 0.02


def test_mixture_weighs_draws_without_bias():
    """The mean of (another density / mixture) is one, at any share of the parts."""
    parts = [component(np.zeros(2), AXES), component(np.full(2, 2.0), np.eye(2))]
    mixture = Mixture.of(parts, [0.3, 0.7])
    counts = mixture.counts(2000)
    z = mixture.draw(counts, np.random.default_rng(2), 4).reshape(-1, 2)
    target = stats.multivariate_normal([1.0, 1.0], np.eye(2)).logpdf(z)
    ratio = np.exp(target - mixture.at_counts(counts).log_density(z))
    assert counts.sum() == 2000
    assert ratio.mean() == pytest.approx(1.0, abs=0.01)


def test_joined_keeps_shares_and_narrow_drops_the_broad():
    local = Mixture.of([component(np.zeros(2), AXES)], [1.0])
    broad = Mixture.of([component(np.zeros(2), 5.0 * np.eye(2))], [1.0], [True])
    both = local.joined(broad, 0.1)
    assert both.shares == pytest.approx([0.9, 0.1])
    assert len(both.narrow().components) == 1
    assert both.narrow().components[0].axes is AXES
    assert broad.narrow() is broad


def test_small_shares_get_draws_all_the_same():
    parts = [component(np.zeros(2), AXES)] * 2
    counts = Mixture.of(parts, [1.0, 1e-9]).counts(100)
    assert counts.tolist() == [98, 2]
