"""Predictions and posterior predictive checks: bands by hand, failures on purpose."""

from __future__ import annotations

import dataclasses
import warnings

import jax.numpy as jnp
import numpy as np
import pytest

import evidence as ev
from evidence.complaints import DeclarationError
from evidence.distributions import HalfNormal, LogNormal, Normal, Poisson
from evidence.problem import Problem
from evidence.replicas import check_replicas, choose_axis, prediction_record, replicate

SD = 0.5
CHECKS = [
    "mean", "sd", "smallest value", "largest value", "share inside the 95 % band",
    "correlation of neighbouring residuals",
]  # fmt: skip


def level(**changes):
    """Normal data of known sd around one level."""
    functions = {
        "predict": lambda p, data: {"y": p["level"] + 0.0 * data["x"]},
        "simulate": lambda key, p, data: {
            "y": Normal(p["level"] + 0.0 * data["x"], SD).sample(key)
        },
    } | changes
    return ev.Model(
        "level",
        {"level": Normal(0.0, 10.0)},
        lambda p, data: Normal(p["level"], SD).log_prob(data["y"]),
        **functions,
    )


def replicas(model, data, seed=0):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        result = ev.approximate(model, data, depth="none")
    problem = result.problem
    return problem, replicate(problem, result.posterior.draws_z(1000), seed=seed)


@pytest.fixture(scope="module")
def data():
    x = np.arange(40.0)
    return {"x": x, "y": np.random.default_rng(4).normal(3.0, SD, 40)}


def failed(problem, found):
    return [c["check"] for one in found for c in check_replicas(problem, one) if c["failed"]]


def test_bands_are_those_of_the_conjugate_normal(data):
    # posterior and predictive of a normal mean: Gelman et al., Bayesian Data Analysis (2013), 2.5
    problem, (found,) = replicas(level(), data)
    variance = 1.0 / (40 / SD**2 + 1e-2)
    mean = variance * data["y"].sum() / SD**2
    record = prediction_record(problem, found)
    for prefix, sd in (("expected", variance**0.5), ("new", (variance + SD**2) ** 0.5)):
        low, high = np.mean(record[f"{prefix}_low"]), np.mean(record[f"{prefix}_high"])
        error = 5 * sd / np.sqrt(1000 * 0.1)
        assert low == pytest.approx(mean - 1.96 * sd, abs=error)
        assert high == pytest.approx(mean + 1.96 * sd, abs=error)
        assert np.mean(record[f"{prefix}_mean"]) == pytest.approx(mean, abs=error)
    assert record["observed"] == data["y"].tolist()
    assert (record["along"], record["rows"]) == ("x", 40)


def test_a_candidate_that_made_the_data_passes(data):
    problem, found = replicas(level(), data)
    checks = check_replicas(problem, found[0])
    assert [c["check"] for c in checks] == CHECKS
    assert failed(problem, found) == []
    inside = checks[4]
    assert 0.85 <= inside["observed"] <= 1.0
    assert inside["low"] <= 0.95 <= inside["high"]


@pytest.mark.parametrize(
    ("spoil", "fails"),
    [
        (lambda x, y: np.where(x == 7, 12.0, y), ["sd", "largest value"]),
        (lambda x, y: np.where(x == 7, -9.0, y), ["sd", "smallest value"]),
        (lambda x, y: 3.0 + 4.0 * (y - 3.0), ["sd", "share inside the 95 % band"]),
        (lambda x, y: 3.0 + 0.1 * (y - 3.0), ["sd", "smallest value", "largest value"]),
        (lambda x, y: y + 0.1 * (x - 20.0), ["correlation of neighbouring residuals"]),
        (lambda x, y: 3.0 + 0.9 * np.sin(x / 3.0), ["correlation of neighbouring residuals"]),
    ],
)
def test_each_check_fails_where_it_should(data, spoil, fails):
    problem, found = replicas(level(), {**data, "y": spoil(data["x"], data["y"])})
    assert set(fails) <= set(failed(problem, found))


def test_good_candidates_seldom_fail(data):
    """Of data sets made by the candidate, six checks at 1 % each fail about one in twenty."""
    problem, (found,) = replicas(level(), data)
    centre = found.simulated.mean()
    rng = np.random.default_rng(8)
    count = 0
    for _ in range(200):
        again = dataclasses.replace(found, observed=rng.normal(centre, SD, 40))
        count += bool(failed(problem, [again]))
    assert 1 <= count <= 24


def test_the_shape_of_a_curve_is_checked_along_the_axis_and_not_in_the_order_of_rows(data):
    rng = np.random.default_rng(6)
    order = rng.permutation(40)
    y = data["y"] + 0.1 * (data["x"] - 20.0)
    problem, found = replicas(level(), {"x": data["x"][order], "y": y[order]})
    assert "correlation of neighbouring residuals" in failed(problem, found)


def test_ties_count_one_half():
    model = ev.Model(
        "counts",
        {"rate": LogNormal(0.0, 1.0)},
        lambda p, data: Poisson(p["rate"]).log_prob(data["n"]),
        simulate=lambda key, p, data: {"n": Poisson(p["rate"]).sample(key, data["n"].shape)},
    )
    n = np.random.default_rng(2).poisson(0.4, 50)
    problem, found = replicas(model, {"n": n})
    smallest = next(c for c in check_replicas(problem, found[0]) if c["check"] == "smallest value")
    assert smallest["p_value"] == pytest.approx(0.5, abs=0.05)
    assert failed(problem, found) == []


def test_without_simulate_there_is_a_prediction_and_no_check(data):
    problem, (found,) = replicas(level(simulate=None), data)
    record = prediction_record(problem, found)
    assert "new_low" not in record
    assert len(record["expected_low"]) == 40
    assert check_replicas(problem, found) == []


def test_without_predict_the_band_of_new_data_remains(data):
    problem, (found,) = replicas(level(predict=None), data)
    assert "expected_low" not in prediction_record(problem, found)
    assert len(check_replicas(problem, found)) == 6


def test_neither_gives_nothing(data):
    assert replicas(level(predict=None, simulate=None), data)[1] == []


def test_a_response_that_is_no_column_is_drawn_and_not_checked(data):
    model = level(
        predict=lambda p, data: {"other": p["level"] + data["x"]},
        simulate=lambda key, p, data: {"y": p["level"] + jnp.zeros(3)},
    )
    problem, found = replicas(model, data)
    assert [x.column for x in found] == ["other", "y"]
    assert [x.observed for x in found] == [None, None]
    assert [check_replicas(problem, x) for x in found] == [[], []]
    assert prediction_record(problem, found[0])["observed"] is None


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"predict": lambda p, data: p["level"]}, "predict of 'level' must return a mapping"),
        ({"predict": lambda p, data: {"y": p["lvl"]}}, "asks for 'lvl'.*Did you mean 'level'"),
        ({"simulate": lambda key, p, data: {"y": np.exp(p["level"])}}, "jnp.exp"),
        ({"simulate": lambda key, p, data: 1 / 0}, "could not be traced.*ZeroDivisionError"),
    ],
)
def test_what_is_wrong_with_the_users_function_is_said(data, changes, words):
    with pytest.raises(DeclarationError, match=words):
        replicas(level(**changes), data)


def test_the_same_seed_gives_the_same_digits(data):
    (_, (one,)), (_, (same,)), (_, (other,)) = (
        replicas(level(), data, seed=seed) for seed in (0, 0, 1)
    )
    assert np.array_equal(one.simulated, same.simulated)
    assert not np.array_equal(one.simulated, other.simulated)


def test_many_rows_take_fewer_draws_and_an_even_choice_of_rows():
    rows = 50_000
    data = {"x": np.arange(float(rows)), "y": np.random.default_rng(1).normal(3.0, SD, rows)}
    problem, (found,) = replicas(level(), data)
    assert found.simulated.shape == (200, 20_000)
    assert (found.kept[0], found.kept[-1], found.rows) == (0, rows - 1, rows)
    assert np.array_equal(found.observed, data["y"][found.kept])
    record = prediction_record(problem, found)
    assert len(record["at"]) == 300
    assert (record["at"][0], record["at"][-1], record["rows"]) == (0.0, rows - 1.0, rows)
    assert failed(problem, [found]) == []


@pytest.mark.parametrize(
    ("columns", "name"),
    [
        ({"group": np.arange(4) % 2, "x": np.arange(4.0)}, "x"),
        ({"group": np.arange(4) % 2}, "group"),
        ({"same": np.ones(4), "flag": np.array([True, False, True, False])}, None),
        ({"long": np.arange(5.0)}, None),
    ],
)
def test_the_axis_of_a_picture(columns, name):
    model = ev.Model(
        "flat",
        {"level": Normal(0.0, 1.0), "noise": HalfNormal(1.0)},
        lambda p, data: Normal(p["level"], p["noise"]).log_prob(data["y"]),
        predict=lambda p, data: {"y": p["level"] + jnp.zeros(4)},
    )
    problem = Problem(model, {**columns, "y": np.array([0.1, 0.2, 0.4, 0.1])})
    (found,) = replicate(problem, np.zeros((5, 2)), seed=0)
    found_name, values = choose_axis(problem, found)
    assert found_name == name
    assert values.tolist() == (columns[name] if name else np.arange(1.0, 5.0)).tolist()
