"""The climb as a whole: what it accepts, where it speaks up, and what it never does."""

import dataclasses
import subprocess
import sys

import jax.numpy as jnp
import numpy as np
import pytest
from rung_problems import Target, gaussian, log_gamma, mode_at, two_peaks, without_axes

from evidence.complaints import DeclarationError, EvidenceWarning
from evidence.outcome import Outcome
from evidence.rungs import ladder
from evidence.rungs.ladder import climb


def _told(audit) -> str:
    return " | ".join(f"{sentence}. {remedy}" for sentence, remedy in audit.warnings)


def _within(audit, truth=0.0) -> bool:
    return abs(audit.log_evidence - truth) <= 3.0 * audit.standard_error


# -------------------------------------------------------------------------------- it accepts


@pytest.mark.parametrize("dim", [1, 5, 200])
def test_gaussian_is_sound_with_an_error_near_zero(dim):
    target = gaussian(dim)
    expanded = dim < 200  # the term is not computed in large dimension before the audit
    audit = climb(target, [mode_at(target, np.full(dim, 0.5), expanded=expanded)])
    assert audit.trust == "sound"
    assert audit.standard_error <= 1e-6
    assert audit.log_evidence == pytest.approx(0.0, abs=1e-6)
    assert audit.warnings == ()
    assert len(audit.rungs) == 1


def test_skew_is_corrected_by_the_second_order_term():
    target = log_gamma(5, 3.0, turned=True)
    audit = climb(target, [mode_at(target, np.zeros(5))])
    assert audit.rungs[-1].name == "second-order term"
    assert audit.trust == "corrected"
    assert abs(audit.log_evidence) < 0.03
    assert _within(audit)


def test_hundred_dimensional_skew_is_corrected_where_draws_degenerate():
    target = log_gamma(100, 6.0, turned=True)
    audit = climb(target, [mode_at(target, np.zeros(100))], depth="quick")
    assert [r.name for r in audit.rungs] == ["first draws", "second whitening"]
    assert audit.trust == "corrected"
    assert abs(audit.log_evidence) < 0.05
    assert _within(audit)
    assert audit.draws is None


def test_strong_skew_is_left_to_draws():
    target = log_gamma(2, 0.4)
    audit = climb(target, [mode_at(target, np.zeros(2))])
    assert audit.rungs[-1].name == "mixture draws"
    assert audit.trust == "corrected"
    assert _within(audit)
    assert len(audit.draws) == len(audit.log_weights) == 8192


def test_bent_ridge_is_left_to_the_adaptive_mixture():
    def log_density(z):
        bent = z[1] + 0.4 * (z[0] ** 2 - 4.0)
        return -0.125 * z[0] ** 2 - 0.5 * bent**2 - np.log(2.0 * 2.0 * np.pi)

    target = Target(log_density, 2, spread=3.0)
    audit = climb(target, [mode_at(target, np.array([0.0, 1.6]))], depth="thorough")
    assert "adaptive mixture" in audit.rungs[-1].name
    assert audit.trust == "sound"
    assert _within(audit)


# ------------------------------------------------------------------------- it speaks up


def test_unseen_peak_is_found_named_and_never_silent():
    target = two_peaks(6.0, 0.3, 0.8, spread=3.0)
    target.names = ("log rate", "log mass")
    audit = climb(target, [mode_at(target, np.zeros(2))])
    assert _within(audit)
    assert audit.trust in ("corrected", "rough", "doubtful")
    assert "of the mass lies far from the modes found, near log rate = " in _told(audit)
    assert "give a start near there" in _told(audit)


def test_both_peaks_given_nothing_is_unseen():
    target = two_peaks(6.0, 0.3, 0.8, spread=3.0)
    audit = climb(target, [mode_at(target, np.array([6.0, 0.0])), mode_at(target, np.zeros(2))])
    assert audit.log_evidence == pytest.approx(0.0, abs=0.01)
    assert audit.warnings == ()


def test_wall_is_named():
    target = Target(
        lambda z: jnp.where(z[0] > -0.5, -0.5 * jnp.sum(z**2), -jnp.inf), 2, spread=1.2,
        names=("log rate", "mass"),
    )  # fmt: skip
    audit = climb(target, [mode_at(target, np.zeros(2))])
    assert _within(audit, np.log(2.0 * np.pi) + np.log(0.6914624612740131))  # normal cdf of 0.5
    assert "drops to zero within three sd of the mode along log rate" in _told(audit)
    assert "declare the bound as the support of the parameter behind log rate" in _told(audit)


def test_kink_is_named():
    target = Target(
        lambda z: -2.0 * jnp.abs(z[0]) - 0.5 * z[1] ** 2, 2, spread=1.0, names=("shift", "mass")
    )
    mode = mode_at(target, np.zeros(2), status=Outcome.NO_PROGRESS)
    audit = climb(target, [mode])
    assert _within(audit, 0.5 * np.log(2.0 * np.pi))
    assert "kink at its top along shift" in _told(audit)


def test_direction_of_the_prior_alone_is_named():
    def log_density(z):  # the prior holds z[1] alone
        return -0.5 * (z[0] / 0.1) ** 2 - 0.5 * (z[1] / 2.0) ** 2

    target = Target(log_density, 2, spread=2.0, names=("rate", "offset"))
    told = _told(climb(target, [mode_at(target, np.zeros(2))]))
    assert "only the prior holds the direction of offset" in told
    assert "direction of rate" not in told


def test_missing_spread_is_at_most_doubtful_with_its_remedy():
    target = gaussian(2, spread_known=False)
    audit = climb(target, [mode_at(target, np.full(2, 0.5))])
    assert audit.trust == "doubtful"
    assert audit.log_evidence == pytest.approx(0.0, abs=1e-6)
    assert "give spread={name: rough prior sd" in _told(audit)


@pytest.mark.parametrize("factor", [1e-3, 1e3])
def test_prior_scale_wrong_by_a_thousand_is_never_silent(factor):
    target = log_gamma(2, 0.7, spread=1.5 * factor)
    audit = climb(target, [mode_at(target, np.zeros(2))])
    if factor < 1.0:
        assert audit.trust == "doubtful"
        assert "times as wide as the prior scale given for" in _told(audit)
    assert _within(audit)


def test_density_unbounded_towards_a_small_scale_is_refused():
    def log_density(z):  # eight effects around a mean, their scale free to go to zero
        scale = jnp.exp(z[0])
        effects = jnp.sum(-0.5 * ((z[2:] - z[1]) / scale) ** 2 - z[0])
        return effects - 0.5 * jnp.sum(z[2:] ** 2) - 0.5 * z[1] ** 2 - jnp.log1p(scale**2) + z[0]

    target = Target(log_density, 6, spread=1.5, names=("log tau", "mean", "a", "b", "c", "d"))
    z = np.array([-40.0, 0.0, 0.0, 0.0, 0.0, 0.0])
    audit = climb(target, [mode_at(target, z, status=Outcome.RUNAWAY)])
    assert audit.trust == "failed"
    assert np.isnan(audit.log_evidence)
    assert "keeps rising along log tau" in _told(audit)
    assert "non-centred form" in _told(audit)


@pytest.mark.parametrize(
    "log_density",
    [lambda z: 0.0 * z[0], lambda z: -0.5 * z[0] ** 2, lambda z: z[1] - 0.5 * z[0] ** 2],
)
def test_density_without_an_integral_is_refused(log_density):
    target = Target(log_density, 2)
    mode = mode_at(target, np.zeros(2), status=Outcome.FLAT)
    audit = climb(target, [mode])
    assert audit.trust == "failed"
    assert np.isnan(audit.log_evidence)
    assert "z[1]" in _told(audit)


def test_infinite_density_somewhere_is_refused():
    target = Target(lambda z: jnp.where(z[0] > 1.5, jnp.inf, -0.5 * jnp.sum(z**2)), 2)
    audit = climb(target, [mode_at(target, np.zeros(2))])
    assert audit.trust == "failed"
    assert "+inf" in _told(audit)


@pytest.mark.parametrize("status", [Outcome.NOT_FINITE, Outcome.INFINITE])
def test_nothing_finite_is_refused_in_words(status):
    target = gaussian(2)
    height = np.inf if status is Outcome.INFINITE else -np.inf
    mode = dataclasses.replace(
        mode_at(target, np.zeros(2), status=status), log_density=height, laplace=np.nan
    )
    audit = climb(target, [mode])
    assert audit.trust == "failed"
    assert np.isnan(audit.log_evidence)
    assert audit.stopped_because == status.sentence
    assert climb(target, []).trust == "failed"


def test_nan_on_half_the_space_counts_as_no_density():
    target = Target(lambda z: jnp.where(z[0] < 0.0, jnp.nan, -0.5 * jnp.sum(z**2)), 2, spread=1.2)
    audit = climb(target, [mode_at(target, np.array([1e-3, 0.0]))])
    assert _within(audit, np.log(np.pi))
    assert audit.trust == "corrected"


def test_mode_without_a_hessian_is_drawn_from_on_the_priors_scale():
    target = gaussian(2, spread=1.5)
    audit = climb(target, [without_axes(mode_at(target, np.full(2, 0.5)))])
    assert _within(audit)


def test_far_higher_needle_without_a_peak_is_doubtful():
    target = gaussian(2)
    needle = mode_at(target, np.ones(2), status=Outcome.NO_PROGRESS)
    needle = dataclasses.replace(needle, log_density=60.0)
    modes = [mode_at(target, np.full(2, 0.5)), needle]
    audit = climb(target, modes)
    assert audit.trust == "doubtful"
    assert "looks unbounded" in _told(audit)


# ------------------------------------------------------------------ depth, cost, interruption


def test_depth_limits_the_climb():
    target = two_peaks(6.0, 0.3, 0.8, spread=3.0)
    modes = [mode_at(target, np.zeros(2))]
    quick = climb(target, modes, depth="quick")
    assert [r.name for r in quick.rungs] == ["first draws"]
    assert quick.trust in ("rough", "doubtful")
    assert quick.stopped_because == "no rung of this depth was accepted"
    assert len(climb(target, modes, depth="standard").rungs) > 1


def test_dear_rungs_are_announced_and_not_begun():
    target = two_peaks(6.0, 0.3, 0.8, spread=3.0)
    target.seconds_per_call = 0.01
    told = []
    audit = climb(target, [mode_at(target, np.zeros(2))], progress=told.append)
    assert len(audit.rungs) == 1
    assert audit.stopped_because == (
        "mixture draws will take about 82 seconds (8192 log densities); "
        "it is begun only with depth='thorough'"
    )
    assert audit.stopped_because in told


def test_without_a_progress_line_the_announcement_is_a_warning():
    target = gaussian(2, seconds_per_call=1.0)
    modes = [mode_at(target, np.full(2, 0.5))]
    before = target.calls
    with pytest.warns(EvidenceWarning, match="first draws will take about 18 minutes"):
        audit = climb(target, modes)
    assert target.calls == before
    assert audit.rungs == ()
    assert audit.trust == "doubtful"
    assert audit.log_evidence == pytest.approx(0.0, abs=1e-6)


def test_thorough_announces_and_begins():
    target = gaussian(2, seconds_per_call=1.0)
    told = []
    modes = [mode_at(target, np.full(2, 0.5))]
    audit = climb(target, modes, depth="thorough", progress=told.append)
    assert audit.trust == "sound"
    assert any("interrupt to keep what there is" in text for text in told)


def test_interruption_keeps_what_there_is():
    target = two_peaks(6.0, 0.3, 0.8, spread=3.0)
    modes = [mode_at(target, np.zeros(2))]
    whole = target.batch

    def interrupted(z):
        if len(z) > 5000:
            raise KeyboardInterrupt
        return whole(z)

    target.batch = interrupted
    audit = climb(target, modes)
    assert [r.name for r in audit.rungs] == ["first draws"]
    assert np.isfinite(audit.log_evidence)
    assert audit.trust in ("rough", "doubtful")
    assert audit.stopped_because.startswith("interrupted")


def test_same_seed_same_digits_and_another_seed_others():
    target = log_gamma(2, 0.4)
    modes = [mode_at(target, np.zeros(2))]
    one, two, other = (climb(target, modes, seed=s).log_evidence for s in (3, 3, 4))
    assert one == two
    assert one != other
    assert climb(target, modes, seed=np.int64(3)).log_evidence == one


@pytest.mark.parametrize("seed", [1.5, "1", None, -1, True])
def test_seed_that_is_no_integer_is_refused(seed):
    target = gaussian(1)
    with pytest.raises(DeclarationError, match="seed is an integer of at least 0; got"):
        climb(target, [], seed=seed)


def test_unknown_depth_is_refused_with_a_near_name():
    with pytest.raises(DeclarationError, match="Did you mean 'thorough'"):
        climb(gaussian(1), [], depth="through")


def test_first_rung_loads_neither_scipy_stats_nor_arviz():
    code = (
        "import sys; import evidence.rungs.ladder; "
        "print(sorted({'scipy.stats', 'arviz', 'pandas'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_times_are_written_as_a_reader_would():
    assert ladder._duration(65.0) == "65 seconds"
    assert ladder._duration(600.0) == "10 minutes"
    assert ladder._duration(36000.0) == "10 hours"
