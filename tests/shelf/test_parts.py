"""What every ready part must do: terms, draws, predictions, recovery, words, and overriding."""

from __future__ import annotations

import inspect

import numpy as np
import pytest
from scipy import stats

import evidence as ev
from evidence import shelf
from evidence.complaints import DeclarationError
from evidence.distributions import HalfNormal, LogNormal, Normal
from evidence.fingerprint import read_functions
from tests.shelf.parts import (
    BY_NAME,
    FIVE_ERRORS,
    INDEPENDENT,
    PARTS,
    PREDICTORS,
    PROCESSES,
    ROWS,
    evaluate,
    likelihood,
)

LINEAR = {"response": "y", "predictors": PREDICTORS, "scale": 2.0}


@pytest.mark.parametrize("part", PARTS, ids=repr)
def test_one_finite_term_a_row(part, strict_ranks):
    terms = evaluate(part.model.log_likelihood, part.values, part.columns)
    assert terms.shape == (ROWS,)
    assert terms.dtype == np.float64
    assert np.isfinite(terms).all()


@pytest.mark.slow
@pytest.mark.parametrize("part", INDEPENDENT, ids=repr)
def test_draws_scatter_around_the_prediction(part):
    draws = part.draws
    expected = evaluate(part.model.predict, part.values, part.columns)["y"]
    assert expected.shape == (ROWS,)
    # five standard errors: one false alarm in ten thousand over all rows of a part
    assert (np.abs(draws.mean(axis=0) - expected) <= FIVE_ERRORS * draws.std(axis=0)).all()
    assert (draws.std(axis=0) > 0).all()


@pytest.mark.parametrize("part", PROCESSES, ids=repr)
def test_draws_of_a_process_have_its_covariance(part):
    known = part.truth["amplitude"] ** 2 + part.truth["noise"] ** 2
    # five errors: the sd of a variance from 400 normal draws is 7 % of it
    np.testing.assert_allclose(part.draws.var(axis=0), known, rtol=0.36)
    shift = part.draws.mean(axis=0) - part.truth["level"]
    assert (np.abs(shift) <= FIVE_ERRORS * np.sqrt(known)).all()
    # rows a fifth of the length apart move together, rows half of the record apart do not
    near, far = (np.corrcoef(part.draws[:, 0], part.draws[:, j])[0, 1] for j in (1, 27))
    assert near > 0.6
    assert abs(far) < (0.25 if part.model.name != "periodic" else 1.0)


# one of each likeness here, the others on demand; compiling is what takes the time
QUICK = {"two exponentials", "hill", "bend", "harmonics", "rough"}


@pytest.mark.slow
@pytest.mark.parametrize(
    "part",
    [
        pytest.param(p, marks=() if repr(p) in QUICK else pytest.mark.slow, id=repr(p))
        for p in PARTS
    ],
)
def test_the_truth_is_recovered(part):
    """The truth lies where 9999 of 10000 draws of the Gaussian posterior do."""
    found = ev.approximate(part.model, part.data(), depth="none")
    z = found.problem.unconstrained(part.truth) - found.posterior.mean_z
    distance = float(z @ found.modes[0].hessian @ z)
    assert distance < stats.chi2.ppf(0.9999, len(z)), found
    assert len(z) == sum(np.size(v) for v in part.truth.values()) - ("share" in part.truth)


@pytest.mark.parametrize("part", PARTS, ids=repr)
def test_every_parameter_is_explained_with_its_prior(part):
    assert set(part.model.priors) == set(part.truth)
    assert all("prior: " in part.model.notes[name] for name in part.model.priors)


def test_every_part_is_in_the_list():
    words = {"linear_regression": "linear", "saturation": "hill", "change_point": "bend"}
    words |= {"logistic_regression": "successes", "poisson_regression": "poisson"}
    words |= {"negative_binomial_regression": "clustered", "exponentials": "two exponentials"}
    words |= {"sinusoid": "harmonics", "gaussian_process": "rough"}
    assert set(words) == set(shelf.__all__) - {"standardise"}
    assert set(words.values()) <= set(BY_NAME)


@pytest.mark.parametrize("name", shelf.__all__)
def test_the_docstring_states_density_and_complaints(name):
    text = inspect.getdoc(getattr(shelf, name))
    assert "Raises\n------" in text
    if name != "standardise":
        assert all(
            word in text for word in ("Parameters\n-", "Returns\n-", "\nDensity", "Priors: ")
        )


def test_priors_and_values_can_be_replaced():
    wide = LogNormal(0.0, 2.0)
    model = shelf.linear_regression(
        "held", **LINEAR, priors={"noise": wide}, fixed={"slope_x": 0.5}, units={"y": "m"},
        notes={"noise": "mine"}, start={"intercept": 1.0}, constants={"g": 9.81},
    )  # fmt: skip
    assert model.priors["noise"] == wide
    assert set(model.priors) == {"intercept", "slope_depth", "noise"}
    assert {k: float(v) for k, v in model.constants.items()} == {"g": 9.81, "slope_x": 0.5}
    assert model.notes["noise"] == "mine"
    assert model.units == {"y": "m"}
    assert float(model.start["intercept"]) == 1.0


def test_a_note_on_a_replaced_prior_is_not_kept():
    model = shelf.linear_regression("new prior", **LINEAR, priors={"noise": HalfNormal(9.0)})
    assert "noise" not in model.notes
    assert "prior: " in model.notes["intercept"]


def test_a_constant_of_a_part_can_be_given_a_prior():
    options = {"kernel": "periodic", "period": 7.3, "scale": 1.0}
    known = shelf.gaussian_process("known", "y", "x", **options)
    assert float(known.constants["period"]) == 7.3
    prior = LogNormal(np.log(7.3), 0.1)
    unknown = shelf.gaussian_process("unknown", "y", "x", **options, priors={"period": prior})
    assert unknown.priors["period"] == prior
    assert not unknown.constants


def test_a_held_value_is_what_the_density_uses():
    part = BY_NAME["linear"]
    held = shelf.linear_regression("held", **LINEAR, fixed={"noise": 0.7})
    others = {k: v for k, v in part.truth.items() if k != "noise"}
    data = part.data()
    assert likelihood(held, others, data) == likelihood(part.model, part.truth, data)


def test_a_prior_may_follow_from_another_parameter():
    """A slope in units of the noise (Zellner 1986), though noise is declared after it."""
    follow = {"slope_x": lambda p: Normal(0.0, 3.0 * p["noise"])}
    model = shelf.linear_regression("follows", **LINEAR, priors=follow)
    found = ev.approximate(model, BY_NAME["linear"].data(), depth="none")
    prior = stats.norm(0.0, 3.0 * found.mode["noise"]).logpdf(found.mode["slope_x"])
    others = [
        stats.norm(0.0, 2.0).logpdf([found.mode["intercept"], found.mode["slope_depth"]]).sum(),
        stats.halfnorm(0.0, 2.0).logpdf(found.mode["noise"]),
    ]
    part = found.problem.prior_part(found.posterior.mean_z)
    assert float(part.log_prior) == pytest.approx(prior + sum(others), rel=1e-10)


def lasting(model) -> str:
    return read_functions([model.log_likelihood], lasting=True).digest


def test_a_stored_result_is_told_apart_by_what_was_chosen():
    """The store of a batch knows a candidate by what its functions read."""
    make = shelf.linear_regression
    other = {**PREDICTORS, "x": (15.0, 20.0)}
    models = [
        make("same", "y", PREDICTORS, scale=2.0),
        make("same", "y", other, scale=2.0),
        make("same", "y", ["x"], scale=2.0),
        make("same", "depth", PREDICTORS, scale=2.0),
        *(shelf.saturation("same", "y", "x", k, scale=1.0, dose_scale=1.0) for k in
          ("hyperbola", "tanh")),
        *(shelf.gaussian_process("same", "y", "x", k, scale=1.0, length=1.0) for k in
          ("matern 3/2", "matern 5/2")),
    ]  # fmt: skip
    assert len({lasting(model) for model in models}) == len(models)
    assert lasting(models[0]) == lasting(make("same", "y", PREDICTORS, scale=3.0))


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: shelf.linear_regression("a", "y", scale=0.0), "scale must be a finite number abo"),
        (lambda: shelf.linear_regression("a", "y", scale="2 m"), "unit of the column; got '2 m'"),
        (lambda: shelf.linear_regression("a", "y", {"x": 1.0}, scale=1), "needs a reference and a"),
        (lambda: shelf.linear_regression("a", "y", {"x": (0, 0)}, scale=1), "the step of 'x' must"),
        (
            lambda: shelf.linear_regression(
                "a", "y", "x", scale=1, priors={"slopex": HalfNormal(1)}
            ),
            "names 'slopex', which is no parameter.*Did you mean 'slope_x'",
        ),
        (
            lambda: shelf.linear_regression(
                "a", "y", scale=1, priors={"noise": HalfNormal(1)}, fixed={"noise": 1.0}
            ),
            "'noise' of 'a' is named in priors and in fixed",
        ),
        (
            lambda: shelf.linear_regression("a", "y", scale=1, unit={"y": "m"}),
            "no option 'unit'.*Did you mean 'units'",
        ),
        (lambda: shelf.linear_regression("a", "y", scale=1, fixed=[1]), "fixed of 'a' must be a m"),
        (lambda: shelf.poisson_regression("a", "y", typical=-1), "typical must be a finite number"),
        (
            lambda: shelf.exponentials("a", "y", "x", 0, scale=1, time_scale=1),
            "terms must be a whole number, 1 or above; got 0",
        ),
        (
            lambda: shelf.saturation("a", "y", "x", "hil", scale=1, dose_scale=1),
            "kind must be one of .*Did you mean 'hill'",
        ),
        (
            lambda: shelf.change_point("a", "y", "x", between=(3, 1), scale=1),
            r"between must be two numbers, the lower one first; got \(3, 1\)",
        ),
        (
            lambda: shelf.sinusoid("a", "y", "x", periods=(0, 1), scale=1),
            "periods must be two numbers, the lower one first, both above zero",
        ),
        (
            lambda: shelf.sinusoid("a", "y", "x", periods=2.0, harmonics=1.5, scale=1),
            "harmonics must be a whole number",
        ),
        (
            lambda: shelf.gaussian_process("a", "y", "x", "matern 5", scale=1, length=1),
            "kernel must be one of .*Did you mean 'matern 5/2'",
        ),
        (lambda: shelf.gaussian_process("a", "y", "x", scale=1), "length must be a finite number"),
        (
            lambda: shelf.gaussian_process("a", "y", "x", "periodic", scale=1),
            "takes period= and one column; got kernel='periodic', period=None",
        ),
        (
            lambda: shelf.gaussian_process("a", "y", "x", scale=1, length=1, period=3.0),
            "and no other, takes period=",
        ),
    ],
)
def test_mistakes_are_told(call, text):
    with pytest.raises(DeclarationError, match=text):
        call()


def test_a_missing_column_is_named():
    model = shelf.linear_regression("a", "y", ["dpeth"], scale=1.0)
    with pytest.raises(DeclarationError, match=r"'dpeth', which is not in.*Did you mean 'depth'"):
        ev.approximate(model, BY_NAME["linear"].data())
