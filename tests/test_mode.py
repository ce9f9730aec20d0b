"""The search for modes: starts, doubling, drivers, and every way in which it may end."""

from __future__ import annotations

import dataclasses
import warnings

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats as st

import evidence as ev
from evidence import mode, newton
from evidence.distributions import HalfNormal, LogNormal, Normal
from evidence.mode import (
    find_likelihood_peak,
    find_modes,
    gather,
    search_compiled,
    search_large,
    search_numpy,
    starting_points,
)
from evidence.outcome import Outcome
from evidence.problem import Problem
from tests.search_problems import make


def bare(function, start, spread=None, support=None):
    return ev.Model.from_log_posterior("bare", function, start, spread=spread, support=support)


def approximate(model, data=None, **options):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(model, data, depth="none", **options)


# large dimension


def _many(p, data):
    line = p["x"] + data["offset"]
    smooth = 0.5 * jnp.sum(jnp.diff(p["x"]) ** 2) / 0.3**2
    return jnp.sum(data["y"] * line - jnp.exp(line)) - smooth - 0.5 * jnp.sum(p["x"] ** 2)


@pytest.mark.parametrize("d", [150, 300])
def test_the_driver_for_large_dimension_agrees_with_newton(d):
    """Counts along a smooth path: L-BFGS goes first, the exact Hessian and Newton decide."""
    rng = np.random.default_rng(d)
    data = {"offset": rng.normal(size=d), "y": rng.poisson(2.0, size=d).astype(float)}
    model = bare(_many, {"x": np.zeros(d)}, spread={"x": np.ones(d)})
    problem = Problem(model, data)
    starts = starting_points(problem, 2, seed=0)
    (large,) = gather(search_large(problem, starts)).peaks
    (plain,) = gather(search_numpy(problem, starts[1:])).peaks
    assert large.hits == 2
    assert large.z == pytest.approx(plain.z, abs=1e-9)
    assert large.log_density == pytest.approx(plain.log_density, abs=1e-9)
    assert large.laplace == pytest.approx(plain.laplace, abs=1e-8)
    assert np.max(np.abs(large.hessian - plain.hessian)) < 1e-8


def test_large_problems_take_fewer_starts_and_the_large_driver(monkeypatch):
    used = []

    def watch(problem, starts):
        used.append(len(starts))
        return search_numpy(problem, starts)

    monkeypatch.setattr(mode, "search_large", watch)
    d = mode.LARGE + 1
    model = bare(lambda p: -0.5 * jnp.sum(p["x"] ** 2), {"x": np.ones(d)}, {"x": np.ones(d)})
    assert find_modes(Problem(model)).starts == sum(used) == 8


# starts


def test_starts_are_the_users_the_centre_and_draws_with_the_priors_scale():
    model = ev.Model(
        "starts", {"a": Normal(3.0, 2.0), "b": LogNormal(1.0, 0.5)}, lambda p: 0.0, start={"a": 9.0}
    )
    problem = Problem(model)
    starts = starting_points(problem, 4000, seed=0)
    assert starts[0].tolist() == [9.0, 1.0]
    assert starts[1].tolist() == [3.0, 1.0]
    assert starts[2:].mean(axis=0) == pytest.approx([3.0, 1.0], abs=0.02)
    assert starts[2:].std(axis=0) == pytest.approx([2.0, 0.5], rel=0.02)
    assert abs(np.corrcoef(starts[2:].T)[0, 1]) < 0.02
    # more starts go on where fewer ended, and the seed moves them
    assert np.array_equal(starting_points(problem, 16, seed=0), starts[:16])
    assert not np.array_equal(starting_points(problem, 16, seed=1)[2:], starts[2:16])


def test_starts_fill_as_many_dimensions_as_there_are():
    d = 60
    problem = Problem(bare(lambda p: 0.0 * p["x"][0], {"x": np.zeros(d)}, {"x": np.ones(d)}))
    starts = starting_points(problem, 512, seed=0)[1:]
    assert np.all(np.isfinite(starts))
    uniform = st.norm.cdf(starts)
    assert max(st.kstest(column, "uniform").statistic for column in uniform.T) < 0.04


# several modes


def _islands(p, data):
    distance = jnp.sum((p["x"] - data["places"]) ** 2, axis=1)
    return jax.nn.logsumexp(jnp.log(data["shares"]) - 0.5 * distance / data["width"] ** 2)


ISLANDS = bare(_islands, {"x": np.zeros(2)}, {"x": np.full(2, 3.0)})


def test_doubling_finds_what_eight_starts_miss():
    places = np.array([[-4, -3], [-3, -1], [-6, 0], [-2, 2], [2, 3], [2, 0]], float)
    shares = np.array([0.3, 0.2, 0.2, 0.1, 0.1, 0.1])
    data = {"places": places, "shares": shares, "width": np.float64(0.25)}
    problem = Problem(ISLANDS, data)
    first = gather(search_numpy(problem, starting_points(problem, 8, seed=0)))
    found = find_modes(problem, seed=0)
    assert len(first.peaks) < 6
    assert first.seen_once > 0
    assert len(found.peaks) == 6
    assert found.starts > 8
    assert found.seen_once == 0
    approximation = approximate(ISLANDS, data)
    exact = np.log(2 * np.pi * 0.25**2)  # the shares add up to 1
    assert approximation.laplace_all_modes == pytest.approx(exact, abs=1e-6)
    assert approximation.laplace == pytest.approx(exact + np.log(0.3), abs=1e-6)


def test_doubling_stops_where_nothing_was_seen_once():
    told = []
    problem = make("poisson", 1)
    found = find_modes(problem, progress=told.append)
    assert (found.starts, told) == (8, ["mode search from 8 starts"])


def test_doubling_ends_at_its_most(monkeypatch):
    """A density with more modes than starts."""
    monkeypatch.setattr(mode, "MOST_STARTS", 16)
    places = np.stack(np.meshgrid(np.arange(-9.0, 10), np.arange(-9.0, 10)), -1).reshape(-1, 2)
    data = {"places": places, "shares": np.full(361, 1 / 361), "width": np.float64(0.2)}
    found = find_modes(Problem(ISLANDS, data))
    assert found.starts == 16
    assert found.seen_once > 0


def test_modes_far_below_the_leader_do_not_double():
    data = {
        "places": np.array([[0.0, 0.0], [5.0, 5.0]]),
        "shares": np.array([1.0, 1e-9]),
        "width": np.float64(0.5),
    }
    problem = Problem(ISLANDS, data)
    ends = search_numpy(problem, np.array([[0.0, 0.0], [0.1, 0.0], [5.0, 5.0]]))
    findings = gather(ends)
    assert [p.hits for p in findings.peaks] == [2, 1]
    assert findings.seen_once == 0


def test_ends_within_a_tenth_of_an_sd_are_one_mode():
    problem = make("gaussian", 1)
    (end,) = search_numpy(problem, problem.centre[None])
    axis = np.linalg.inv(np.linalg.cholesky(end.hessian)).T[:, 0] * 2.0  # d = 4: rms over 4
    near = dataclasses.replace(end, z=end.z + 0.09 * axis, log_density=end.log_density - 0.01)
    far = dataclasses.replace(end, z=end.z + 0.11 * axis, log_density=end.log_density - 0.01)
    assert [p.hits for p in gather([near, end]).peaks] == [2]
    assert gather([near, end]).peaks[0].log_density == end.log_density
    assert [p.hits for p in gather([far, end]).peaks] == [1, 1]


def test_a_saddle_at_the_centre_is_left():
    """At the symmetric centre the gradient vanishes; both peaks beside it must be found."""
    problem = make("saddle", 1)
    centre = problem.evaluate(problem.centre)
    assert np.array_equal(centre.gradient, np.zeros(2))
    assert np.linalg.eigvalsh(centre.hessian)[0] < 0
    (end,) = search_numpy(problem, problem.centre[None])
    assert end.outcome is Outcome.OK
    assert end.log_density > centre.log_density + 0.5
    found = find_modes(problem)
    assert len(found.peaks) == 2
    assert found.peaks[0].z[0] == pytest.approx(-found.peaks[1].z[0], abs=1e-9)


# independence of start, seed and driver


LITTER = ev.Model(
    "litter",
    {"mass": LogNormal(2.3, 0.5), "rate": LogNormal(-5.0, 1.0), "noise": HalfNormal(0.5)},
    lambda p, data: Normal(p["mass"] * jnp.exp(-p["rate"] * data["days"]), p["noise"]).log_prob(
        data["grams"]
    ),
)
LITTER_DATA = {
    "days": np.array([0.0, 30.0, 60.0, 120.0, 240.0, 360.0]),
    "grams": np.array([10.1, 8.6, 7.9, 5.8, 3.9, 2.2]),  # invented
}
STARTS = [
    None,
    {"mass": 3.0, "rate": 0.1, "noise": 0.01},
    {"mass": 50.0, "rate": 1e-4, "noise": 2.0},
    {"rate": 0.004},
]


def test_laplace_does_not_depend_on_start_seed_or_driver():
    values = []
    for seed, start in enumerate(STARTS):
        LITTER.start = {k: np.asarray(v) for k, v in (start or {}).items()}
        values.append(approximate(LITTER, LITTER_DATA, seed=seed).laplace)
    LITTER.start = {}
    problem = Problem(LITTER, LITTER_DATA)
    starts = starting_points(problem, 8, seed=3)
    for search in (search_numpy, search_compiled, search_large):
        values += [end.laplace for end in search(problem, starts) if end.outcome is Outcome.OK]
    assert len(values) >= 20
    assert values == pytest.approx([values[0]] * len(values), abs=1e-7)


def test_the_peak_of_the_likelihood_alone():
    """Least squares by hand: mean and maximum-likelihood sd of a normal sample."""
    y = np.array([1.0, 2.0, 4.0, 3.5])
    model = ev.Model(
        "sample",
        {"mean": Normal(0.0, 1.0), "sd": HalfNormal(1.0)},
        lambda p, data: Normal(p["mean"], p["sd"]).log_prob(data["y"]),
    )
    problem = Problem(model, {"y": y})
    end = find_likelihood_peak(problem, problem.centre)
    assert end.outcome is Outcome.OK
    assert problem.natural(end.z)["mean"] == pytest.approx(y.mean(), abs=1e-9)
    assert problem.natural(end.z)["sd"] == pytest.approx(y.std(), abs=1e-9)
    assert end.log_density == pytest.approx(st.norm(y.mean(), y.std()).logpdf(y).sum(), abs=1e-10)


# every outcome, produced on purpose


def _only_at_zero(p):
    inside = jnp.where(p["a"] == 0.0, 0.0, -jnp.inf)
    return 0.5 * p["a"] ** 2 + inside


def _one_where(p):
    return -0.5 * p["a"] ** 2 + jnp.where(p["b"] > 50.0, jnp.sqrt(p["b"] - 50.0), 0.0) - p["b"] ** 2


OUTCOMES = {
    Outcome.NO_PROGRESS: [
        (lambda p: -0.5 * p["a"] ** 2 - 3 * jnp.abs(p["b"] - 0.3), r"\(along b\).*Look for abs"),
        (lambda p: -0.5 * p["a"] ** 2 + jnp.where(p["b"] > 1.0, -jnp.inf, p["b"]), "at a wall"),
    ],
    Outcome.INDEFINITE: [(lambda p: _only_at_zero(p) - 0.5 * p["b"] ** 2, "a saddle.*: a")],
    Outcome.FLAT: [
        (lambda p: -0.5 * p["a"] ** 2, "flat to second order: b"),
        (lambda p: -0.5 * (p["a"] + p["b"]) ** 2, "0.71 [ab] - 0.71 [ab]"),
    ],
    Outcome.RUNAWAY: [
        (lambda p: -0.5 * p["a"] ** 2 + p["b"], r"ran off to infinity.*\(along b\)"),
        (lambda p: -0.5 * (p["a"] / jnp.exp(p["b"])) ** 2 - 9 * p["b"], r"ran off.*\(along"),
    ],
    Outcome.INFINITE: [
        (lambda p: -0.5 * p["a"] ** 2 - jnp.log(jnp.abs(p["b"])), r"\+inf somewhere.*unbounded"),
        (
            lambda p: -0.5 * p["a"] ** 2 - p["b"] ** 2 + jnp.where(p["b"] > 1.0, jnp.inf, 0.0),
            r"\+inf somewhere",
        ),
    ],
    Outcome.NOT_FINITE: [
        (lambda p: jnp.log(-1.0 - p["a"] ** 2) + p["b"], "nan or -inf at every start.*logarithms"),
        (lambda p: -jnp.inf + p["a"] + p["b"], "nan or -inf at every start"),
    ],
    Outcome.NAN_DERIVATIVE: [(_one_where, r"\(with respect to b\).*safe = jnp.where\(ok, x, 1")],
}


@pytest.mark.parametrize(
    ("outcome", "function", "words"),
    [(o, f, w) for o, cases in OUTCOMES.items() for f, w in cases],
)
def test_each_outcome_on_purpose(outcome, function, words):
    model = bare(function, {"a": 0.0, "b": 0.0}, {"a": 1.0, "b": 1.0})
    with pytest.warns(ev.EvidenceWarning, match=words):
        result = ev.approximate(model, depth="none")
    assert result.status is outcome
    assert result.trust == "failed"
    assert np.isnan(result.log_evidence)
    assert np.isnan(result.standard_error)
    with pytest.raises(ArithmeticError, match=r"bare: no log evidence \(failed\): .*"):
        result.require()
    assert len(repr(result).splitlines()) <= 12


def test_the_two_wheres_remedy_works():
    def two_wheres(p):
        ok = p["b"] > 50.0
        root = jnp.sqrt(jnp.where(ok, p["b"] - 50.0, 1.0))
        return -0.5 * p["a"] ** 2 + jnp.where(ok, root, 0.0) - p["b"] ** 2

    model = bare(two_wheres, {"a": 0.0, "b": 0.0}, {"a": 1.0, "b": 1.0})
    result = approximate(model)
    assert result.status is Outcome.OK
    assert result.log_evidence == pytest.approx(0.5 * np.log(2 * np.pi * np.pi), abs=1e-10)


def test_blind_starts_are_told_beside_a_peak():
    """A derivative that is nan in half of the space hides the mass there."""
    model = ev.Model(
        "half blind",
        {"b": Normal(0.0, 1.0)},
        lambda p: jnp.where(p["b"] > 0, jnp.sqrt(p["b"]), 0.0),
    )
    with pytest.warns(ev.EvidenceWarning, match=r"from \d of 8 starts .*nan \(with respect to b\)"):
        result = ev.approximate(model, depth="none")
    assert result.status is Outcome.OK


def test_infinity_is_told_also_where_other_searches_ended_higher():
    """Most searches stop at a kink above; one meets +inf: that is the status."""

    def function(p):
        tall = 30.0 - 3.0 * jnp.abs(p["a"])
        return jnp.where(p["a"] > 3.5, jnp.inf, jnp.where(p["a"] > 2.5, 2 * p["a"], tall))

    model = bare(function, {"a": 3.0}, {"a": 1.0})
    result = approximate(model)
    assert result.status is Outcome.INFINITE
    assert np.isnan(result.log_evidence)


def test_the_step_limit(monkeypatch):
    monkeypatch.setattr(newton, "STEPS", 4)
    monkeypatch.setattr(mode, "CARRIED_ON", 0)
    model = bare(lambda p: -0.5 * (1 - p["a"]) ** 2 - 200 * (p["b"] - p["a"] ** 2) ** 2,
                 {"a": -3.0, "b": 5.0}, {"a": 1.0, "b": 1.0})  # fmt: skip
    with pytest.warns(ev.EvidenceWarning, match="ran out of steps"):
        result = ev.approximate(model, depth="none")
    assert result.status is Outcome.STEP_LIMIT
    assert np.isnan(result.log_evidence)


def test_a_search_out_of_steps_is_taken_up_again(monkeypatch):
    monkeypatch.setattr(newton, "STEPS", 12)
    problem = make("banana", 3)
    monkeypatch.setattr(problem, "start", np.array([-3.0, 5.0]))
    ended = gather(search_numpy(problem, starting_points(problem, 8, 0)))
    assert any(end.outcome is Outcome.STEP_LIMIT for end in ended.failures)
    found = find_modes(problem)
    assert found.peaks[0].z == pytest.approx([1.0, 1.0], abs=1e-9)
    assert found.peaks[0].log_density == pytest.approx(0.0, abs=1e-12)
