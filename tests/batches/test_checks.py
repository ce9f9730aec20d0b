"""The quick audit of a batch: what a single fit's sees, and what is built to deceive."""

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.stats import norm

import evidence as ev
from evidence.batches import checks, verdicts
from evidence.batches.findings import TRUST_CODE, Finding
from evidence.distributions import LogNormal, Normal, Poisson, Uniform
from evidence.rungs.proposal import Component, component


def _counts(p, data):
    return Poisson(p["rate"]).log_prob(data["frogs"])


def test_second_order_term_is_that_of_a_single_fit():
    """Twice: through the estimate at its trust, and by the closed form of a gamma integral."""
    model = ev.Model("counts", {"rate": LogNormal(1.0, 1.0)}, _counts)
    frogs = np.random.default_rng(0).poisson(3.0, size=(12, 6))
    batch = ev.weigh_many([model], {"frogs": frogs}).table()
    for k in range(0, 12, 4):
        single = ev.approximate(model, {"frogs": frogs[k]}, depth="quick")
        expected = single.laplace_all_modes + single.second_order_term
        assert batch.trust[k] == "sound"
        assert abs(batch.log_evidence[k] - expected) < 1e-5


def test_a_wall_beside_the_mode_is_seen():
    model = ev.Model("wall", {"x": Normal(0.0, 1.0)},
                     lambda p, d: jnp.where(p["x"] > -0.5, Normal(p["x"], 1.0).log_prob(d["y"]),
                                            -jnp.inf))  # fmt: skip
    batch = ev.weigh_many([model], {"y": np.full((3, 1), 0.5)}).table()
    assert set(batch.status) == {"WALL"}
    assert set(batch.trust) == {"doubtful"}


def test_mass_far_from_every_mode_is_found_by_the_broad_draws():
    """A second peak that only some data sets have, and the template has not."""

    def two(p, data):
        near = Normal(0.0, 0.5).log_prob(p["x"])
        far = Normal(6.0, 0.5).log_prob(p["x"]) + data["height"]
        return jnp.logaddexp(near, far)

    model = ev.Model("hidden peak", {"x": Normal(0.0, 4.0)}, two)
    hidden = np.isin(np.arange(61), [1, 2, 3, 59])  # every fourth is searched from many starts
    batch = ev.weigh_many([model], {"height": np.where(hidden, 3.0, -40.0)}).table()
    assert set(batch.trust[~hidden]) <= {"sound", "corrected", "rough"}
    assert set(batch.trust[hidden]) == {"doubtful"}


def test_a_second_peak_of_a_pilot_is_followed_everywhere():
    def two(p, data):
        near = Normal(0.0, 0.5).log_prob(p["x"])
        return jnp.logaddexp(near, Normal(6.0, 0.5).log_prob(p["x"]) + data["height"])

    model = ev.Model("two peaks", {"x": Normal(0.0, 4.0)}, two)
    batch = ev.weigh_many([model], {"height": np.linspace(-2.0, 3.0, 20)}, depth="none").table()
    # Gaussians that overlap with a Gaussian prior, in closed form
    near = norm.logpdf(0.0, 0.0, np.hypot(4.0, 0.5))
    far = norm.logpdf(6.0, 0.0, np.hypot(4.0, 0.5)) + np.linspace(-2.0, 3.0, 20)
    np.testing.assert_allclose(batch.log_evidence, np.logaddexp(near, far), atol=1e-6)


def test_an_unbounded_density_gives_no_number():
    def spike(p, data):
        return -jnp.log(p["scale"]) * data["n"] - 0.0 * p["scale"]

    model = ev.Model("spike", {"scale": Uniform(0.0, 1.0)}, spike)
    batch = ev.weigh_many([model], {"n": np.array([3.0, 3.0])}).table()
    assert set(batch.trust) == {"failed"}
    assert batch.log_evidence.isna().all()


@pytest.mark.slow
@pytest.mark.parametrize("d", [1, 3])
def test_mixture_density_in_the_program_is_that_of_the_rungs(d):
    """The log weights of draws from a posterior that is one broad Gaussian add up to its mass."""
    model = ev.Model("prior", {"x": Normal(0.0, 2.0, shape=(d,))},
                     lambda p, data: 0.0 * data["one"] * jnp.sum(p["x"]))  # fmt: skip
    batch = ev.weigh_many([model], {"one": np.ones((4, 1))}).table()
    np.testing.assert_allclose(batch.laplace, 0.0, atol=1e-9)
    assert set(batch.trust) == {"sound"}
    assert np.all(batch.standard_error <= 0.04)


def test_split_normal_quantiles_follow_those_of_a_single_fit():
    import jax

    below, above = np.array([0.5, 2.0]), np.array([1.5, 1.0])
    part: Component = component(np.zeros(2), np.eye(2), below=below, above=above, degrees=1e9)
    uniforms = np.random.default_rng(1).random((50, 3))
    expected = part.draw(uniforms)
    with jax.enable_x64(True):
        drawn = jax.jit(checks._sided)(uniforms[:, 1:], below, above)
    np.testing.assert_allclose(drawn, expected, rtol=1e-3)


def test_shifts_depend_on_position_and_seed_alone_and_are_uniform():
    whole = checks.shifts(np.arange(4000), 3, 7)
    np.testing.assert_array_equal(checks.shifts(np.arange(100, 200), 3, 7), whole[100:200])
    assert not np.array_equal(checks.shifts(np.arange(4000), 3, 8), whole)
    assert abs(whole.mean() - 0.5) < 0.01
    assert np.all(np.abs(np.corrcoef(whole.T) - np.eye(3)) < 0.06)


def _expanded(finding=0, term=0.01):
    one = np.ones(1)
    return verdicts.Expanded(one * 1.0, one * 1.01, one * term, np.array([finding]))


@pytest.mark.parametrize(
    ("finding", "drawn", "steady", "trust", "status"),
    [
        (0, 1.02, True, "sound", 0),
        (0, 1.8, True, "doubtful", Finding.DRAWS_DISAGREE),
        (0, 1.02, False, "doubtful", Finding.DRAWS_SCATTER),
        (Finding.WALL, 1.01, True, "doubtful", Finding.WALL),
    ],
)
def test_words_of_trust(finding, drawn, steady, trust, status):
    sample = verdicts.Drawn(np.array([drawn]), np.array([0.02]), np.array([0.02]),
                            np.array([steady]))  # fmt: skip
    rows, again = verdicts.judge(_expanded(finding), sample, spread_known=True)
    assert rows.trust[0] == TRUST_CODE[trust]
    assert rows.status[0] == status
    assert again[0] == (trust == "doubtful" and finding == 0)
    assert 3 * rows.standard_error[0] >= abs(rows.log_evidence[0] - sample.estimate[0])
