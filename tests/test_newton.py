"""One step of the search: the same arithmetic in NumPy, in a compiled loop and in a batch."""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from evidence import newton
from evidence.compiling import Program, as_numpy, float64
from evidence.mode import gather, search_compiled, search_numpy, starting_points
from evidence.outcome import Outcome
from tests.search_problems import CASES, make

CENTRE, SPREAD = np.zeros(2), np.ones(2)


def test_there_are_twenty_problems():
    assert len(CASES) == 20
    assert len({name for name, _ in CASES}) >= 7


@pytest.mark.parametrize(("name", "seed"), CASES)
def test_both_drivers_find_the_same(name, seed):
    """Mode for mode: place in its own sd, log density and scaled Hessian to 1e-9."""
    problem = make(name, seed)
    starts = starting_points(problem, 8, seed=0)
    plain = gather(search_numpy(problem, starts))
    compiled = gather(search_compiled(problem, starts))
    assert len(plain.peaks) == len(compiled.peaks) >= 1
    assert [p.hits for p in plain.peaks] == [p.hits for p in compiled.peaks]
    for one, other in zip(plain.peaks, compiled.peaks, strict=True):
        assert one.outcome is other.outcome is Outcome.OK
        sd = 1.0 / np.sqrt(np.diagonal(one.hessian))
        assert (other.z - one.z) / sd == pytest.approx(np.zeros(problem.dim), abs=1e-9)
        assert other.log_density == pytest.approx(one.log_density, abs=1e-9)
        difference = (other.hessian - one.hessian) * np.outer(sd, sd)
        assert np.max(np.abs(difference)) < 1e-9
        assert other.laplace == pytest.approx(one.laplace, abs=1e-9)


def quartic(xp, z):
    """h = sum z^2 / 2 + z^4 / 10 about 1, with its derivatives."""
    step = z - 1.0
    value = xp.sum(step**2 / 2 + step**4 / 10)
    return value, step + 0.4 * step**3, xp.diag(1 + 1.2 * step**2)


def descend(function, start, limit=300):
    state = newton.begin(np, np.asarray(start, float))
    for _ in range(limit):
        if state.phase == newton.ENDED:
            return state
        with np.errstate(all="ignore"):
            state = newton.advance(np, state, *function(np, state.trial), CENTRE, SPREAD)
    raise AssertionError("the search did not end by itself")


@pytest.mark.parametrize("start", [[0.0, 0.0], [1.0, 1.0], [-30.0, 40.0], [1e3, -1e3]])
def test_a_smooth_bowl_is_found_from_anywhere(start):
    state = descend(quartic, start)
    assert int(state.outcome) == Outcome.OK
    assert state.z == pytest.approx([1.0, 1.0], abs=1e-13)


def test_the_last_step_is_taken_without_conditions():
    """It squares the distance left: without it the place depends on the start."""
    state = descend(quartic, [0.0, 0.0])
    assert float(state.decrement) < newton.DECREMENT_SETTLED**2 * 10
    assert int(state.steps) < 15


def test_advance_under_vmap_is_the_loop():
    starts = np.random.default_rng(0).normal(size=(5, 2)) * 3

    def run(start):
        def step(state):
            return newton.advance(jnp, state, *quartic(jnp, state.trial), CENTRE, SPREAD)

        return jax.lax.while_loop(lambda s: s.phase != newton.ENDED, step, newton.begin(jnp, start))

    mapped = as_numpy(Program(jax.vmap(run))(starts))
    assert mapped.z.shape == (5, 2)
    for k, start in enumerate(starts):
        alone = descend(quartic, start)
        assert mapped.z[k] == pytest.approx(alone.z, abs=1e-13)
        assert (mapped.steps[k], mapped.outcome[k]) == (alone.steps, alone.outcome)


def test_one_step_is_the_same_in_numpy_and_jax():
    rng = np.random.default_rng(1)
    hessian = rng.normal(size=(2, 2))
    given = (1.3, rng.normal(size=2), hessian + hessian.T)  # indefinite
    plain = newton.advance(np, newton.begin(np, np.ones(2)), *given, CENTRE, SPREAD)
    traced = Program(
        lambda *at: newton.advance(jnp, newton.begin(jnp, jnp.ones(2)), *at, CENTRE, SPREAD)
    )(*given)
    for name, value in plain._asdict().items():
        assert np.asarray(getattr(traced, name)) == pytest.approx(value, abs=1e-13), name


@pytest.mark.parametrize("seed", range(6))
def test_a_step_always_goes_down(seed):
    """Also where the Hessian is indefinite: absolute eigenvalues."""
    rng = np.random.default_rng(seed)
    hessian, gradient = rng.normal(size=(2, 2)), rng.normal(size=2)
    state = newton.advance(
        np, newton.begin(np, np.zeros(2)), 0.0, gradient, hessian + hessian.T, CENTRE, SPREAD
    )
    step = state.trial - state.z
    assert gradient @ step < 0
    assert np.max(np.abs(step) / SPREAD) <= newton.CAP * (1 + 1e-12)


@pytest.mark.parametrize(
    ("decrement", "smallest", "outcome"),
    [
        (0.0, 1.0, Outcome.OK),
        (1e-12, 2e-10, Outcome.OK),
        (0.0, 0.0, Outcome.FLAT),
        (0.0, -1e-11, Outcome.FLAT),
        (0.0, -1e-3, Outcome.INDEFINITE),
        (1e-5, 1.0, Outcome.NO_PROGRESS),
        (1e-5, -1.0, Outcome.NO_PROGRESS),
        (np.inf, 0.0, Outcome.NO_PROGRESS),
    ],
)
def test_how_an_ended_search_is_called(decrement, smallest, outcome):
    assert newton.settle(np, decrement, smallest) == outcome
    with float64():
        assert int(newton.settle(jnp, decrement, smallest)) == outcome


@pytest.mark.parametrize("outcome", Outcome)
def test_every_outcome_has_words(outcome):
    assert 20 < len(outcome.sentence) < 120
    assert not outcome.sentence.endswith(".")
    assert (outcome is Outcome.OK) == (outcome.remedy == "")
