"""What would overturn a verdict: other priors. Against closed forms and afresh declared models."""

from __future__ import annotations

import json

import numpy as np
import pytest
from scipy.optimize import brentq

import evidence as ev
from evidence.distributions import Normal
from evidence.stress import stress_priors
from evidence.stress.recomputing import Recomputed, with_hyperparameters
from tests.stress import problems

Z, N = 2.4, 20


def exact_lead(sd, mean=0.0):
    """Log Bayes factor of a free mean N(mean, sd^2) against zero, by the closed form."""
    x, error = Z / np.sqrt(N), 1 / N
    free = -0.5 * np.log(error + sd**2) - 0.5 * (x - mean) ** 2 / (error + sd**2)
    return free + 0.5 * np.log(error) + 0.5 * x**2 / error


@pytest.fixture(scope="module")
def textbook():
    return stress_priors(problems.gaussian(Z, N))


@pytest.fixture(scope="module")
def reeds():
    return stress_priors(problems.two())


def by_label(result, label, candidate=None):
    return next(
        e
        for e in result.effects
        if e.lever.label == label and candidate in (None, e.lever.candidate)
    )


def test_the_textbook_case_of_jeffreys_and_lindley(textbook):
    """The tipping width of the closed form, and the effect by its name."""
    width = by_label(textbook, "sd of the prior on theta")
    wider = brentq(exact_lead, 1.0, 1e3)
    narrower = brentq(exact_lead, 1e-9, 1.0) if exact_lead(1e-9) < 0 else np.inf
    assert textbook.leader == "free"
    assert np.exp(width.step) == pytest.approx(wider, rel=1e-8)
    assert narrower == np.inf
    assert width.overtaken_by == "fixed"
    assert "Jeffreys-Lindley effect: fixed has no theta" in width.note
    assert "Jeffreys-Lindley effect" in textbook.summary
    assert textbook.lindley == (width,)
    slope = (exact_lead(1 + 1e-5) - exact_lead(1 - 1e-5)) / 2e-5
    assert width.derivative == pytest.approx(slope, rel=1e-6)
    assert width.doubled == pytest.approx(exact_lead(2.0) - exact_lead(1.0), abs=1e-9)
    assert width.halved == pytest.approx(exact_lead(0.5) - exact_lead(1.0), abs=1e-9)


def test_locations_move_in_prior_sd(textbook):
    place = by_label(textbook, "mean of the prior on theta")
    expected = brentq(lambda m: exact_lead(1.0, m), -4.6, 0.0)
    assert place.step == pytest.approx(expected, rel=1e-8)
    assert place.row()["tipping"] == pytest.approx(expected, rel=1e-8)
    assert place.derivative == pytest.approx(
        (exact_lead(1.0, 1e-5) - exact_lead(1.0, -1e-5)) / 2e-5, rel=1e-6
    )


def test_the_joint_change_is_the_nearest_on_the_closed_form(textbook):
    joint = textbook.joint
    steps = dict(zip((x.field for x in joint.levers), joint.steps, strict=True))
    at = exact_lead(np.exp(steps["sd"]), steps["mean"])
    assert at == pytest.approx(0.0, abs=1e-7)
    angles = np.linspace(0, 2 * np.pi, 721)
    shorter = [
        exact_lead(np.exp(0.99 * joint.norm * np.sin(a)), 0.99 * joint.norm * np.cos(a))
        for a in angles
    ]
    assert min(shorter) > 0
    assert joint.norm <= textbook.single.norm + 1e-9


def test_a_tipping_point_put_back_into_the_models_gives_equal_values(reeds):
    """Laplace plus second-order term plus the held gap, from models declared and fitted afresh."""
    weighing = problems.two()
    (lever,), (step,) = reeds.single.levers, reeds.single.steps
    value = {}
    for name, result in weighing.items():
        gap = result.log_evidence - result.laplace - result.second_order_term
        model = result.problem.model
        if name == lever.candidate:
            hyper = lever.moved(model.hyperparameters(), step)
            model = with_hyperparameters(model, hyper)
        again = ev.approximate(model, problems.SLOPED, depth="none")
        value[name] = again.laplace + again.second_order_term + gap
    assert value["sloped"] - value["flat"] == pytest.approx(0.0, abs=1e-6)
    assert abs(reeds.single.difference) < 1e-6
    assert reeds.single.confirmed
    assert abs(reeds.single.audited) <= max(3 * reeds.single.audited_error, 0.03)
    assert abs(reeds.joint.difference) < 1e-6
    assert reeds.joint.confirmed


@pytest.mark.slow
def test_derivatives_are_those_of_the_evidence_function(reeds):
    for name, result in [("sloped", problems.two()["sloped"])]:
        f = ev.evidence_function(result.problem.model, problems.SLOPED, second_order=True)
        gradient = f.value_and_gradient()[1][0]["priors"]
        own = [e for e in reeds.effects if e.lever.candidate == name]
        assert len(own) == sum(len(p.hyperparameters) for p in result.problem.model.priors.values())
        for effect in own:
            exact = float(getattr(gradient[effect.lever.parameter], effect.lever.field))
            found = effect.row()["derivative_per_unit"]
            assert found == pytest.approx(exact, rel=1e-5, abs=1e-6), effect.lever.label


def test_halving_and_doubling_are_recomputed(reeds):
    effect = by_label(reeds, "sd of the prior on slope")
    for sd, found in ((0.5, effect.halved), (2.0, effect.doubled)):
        values = [
            r.laplace + r.second_order_term
            for r in (
                ev.approximate(problems.sloped_model(x), problems.SLOPED, depth="none")
                for x in (sd, 1.0)
            )
        ]
        assert found == pytest.approx(values[0] - values[1], abs=1e-9)


def test_table_summary_and_text(reeds):
    table = reeds.table()
    assert list(table.columns) == list(table.attrs["columns"])
    assert len(table) == 3 + 5
    row = table[(table.hyperparameter == "sd of the prior on slope")].iloc[0]
    assert (row.unit, row.kind, row.value) == ("1/m", "scale", 1.0)
    assert reeds.summary.startswith("The verdict for sloped holds unless the ")
    text = repr(reeds)
    assert text.startswith(reeds.summary)
    assert len(text.splitlines()) <= 12


def test_bayes_factor_derivatives_have_the_sign_of_the_candidate_against_the_leader(reeds):
    table = reeds.table().set_index(["candidate", "hyperparameter"])
    ours, theirs = ("sloped", "sd of the prior on noise"), ("flat", "sd of the prior on noise")
    assert table.bayes_factor_derivative[ours] == -table.derivative[ours]
    assert table.bayes_factor_derivative[theirs] == table.derivative[theirs]


def test_curves_are_recomputed_evidences(textbook):
    curve = textbook.curve("free", "theta.sd", [0.3, 1.0, 7.0])
    expected = [exact_lead(sd) for sd in (0.3, 1.0, 7.0)]
    np.testing.assert_allclose(curve.log_bayes_factor, expected, atol=1e-9)
    assert "multiple of the declared value" in curve.attrs["columns"]["factor"]
    with pytest.raises(ev.DeclarationError, match=r"'theta.ds' is no hyperparameter.*Did you"):
        textbook.curve("free", "theta.ds", [1.0])
    with pytest.raises(ev.DeclarationError, match=r"factors must be positive numbers; got"):
        textbook.curve("free", "theta.sd", [-1.0])


def test_saved_as_json_and_csv(textbook, tmp_path):
    textbook.report(tmp_path / "x.json")
    record = json.loads((tmp_path / "x.json").read_text())
    assert record["format"] == "evidence prior stress"
    assert record["single"]["moved"][0]["hyperparameter"] == "mean of the prior on theta"
    textbook.report(tmp_path / "x.csv")
    lines = (tmp_path / "x.csv").read_text().splitlines()
    assert len(lines) == 1 + len(textbook.effects)
    with pytest.raises(ev.DeclarationError, match=r"saved as .json or .csv; got 'x.txt'"):
        textbook.report("x.txt")


def test_picture(reeds):
    figure = reeds.plot()
    (axes,) = figure.axes
    assert "lead of sloped [nats]" in axes.get_xlabel()
    shown = [text.get_text() for text in axes.texts]
    assert any("sd of the prior on slope of sloped" in text for text in shown)
    assert any(text.startswith(("tips at", "holds")) for text in shown)


def test_constants_and_prior_functions():
    """The number inside a prior function is reached through constants, and the text says so."""
    x = np.linspace(-1, 1, 9)
    data = {"x": x, "y": 0.8 * x}

    def line(p, data):
        return Normal(p["b"] * data["x"], p["noise"]).log_prob(data["y"])

    hyper = ev.Model(
        "hyper", {"b": lambda p: Normal(0.0, p["width"])}, line,
        constants={"width": 1.0, "noise": 0.3},
    )  # fmt: skip
    plain = ev.Model("plain", {"b": Normal(0.0, 1.2)}, line, constants={"noise": 0.3})
    none = ev.Model("none", {}, lambda p, data: Normal(0.0 * data["x"], 0.3).log_prob(data["y"]))
    result = stress_priors(problems.weighed(hyper, plain, none, data=data, depth="none"))
    assert "on b of hyper is a function: write its numbers as constants=" in result.left_out[0]
    inner, outer = by_label(result, "constant width"), by_label(result, "sd of the prior on b")
    f = ev.evidence_function(plain, data)
    same = f.value_and_gradient({"priors": {"b": Normal(0.0, 1.0)}})[1][0]["priors"]["b"].sd
    assert inner.derivative == pytest.approx(float(same), rel=1e-6)
    assert inner.lever.kind == "constant"
    assert outer.lever.kind == "scale"
    assert result.single.confirmed is None  # at depth "none" nothing is audited


def test_what_cannot_be_stressed_is_refused(tmp_path):
    weighing = problems.two()
    weighing.report(tmp_path / "w.json")
    with pytest.raises(ev.DeclarationError, match=r"a saved result holds no candidates. Weigh"):
        stress_priors(ev.Weighing.from_json(tmp_path / "w.json"))
    with pytest.raises(ev.DeclarationError, match=r"needs what evidence.weigh returns; got Approx"):
        stress_priors(weighing["flat"])
    bare = [
        ev.Model.from_log_posterior(n, lambda p, s=s: -s * p["x"] ** 2, {"x": 0.1}, spread={"x": 1})
        for n, s in (("a", 1.0), ("b", 2.0))
    ]
    with pytest.raises(ev.DeclarationError, match=r"no prior .* has a number to move; got a is"):
        stress_priors(problems.weighed(*bare, data=None, depth="none"))


def test_one_candidate_has_derivatives_and_no_tipping_point():
    result = stress_priors(problems.weighed(problems.flat_model(), depth="none"))
    assert result.single is None
    assert result.joint is None
    assert "has no rival" in result.summary
    assert np.isfinite(result.table().derivative).all()


def test_the_gap_to_the_audit_is_held():
    weighing = problems.two()
    for result in weighing.values():
        again = Recomputed(result)
        assert again.log_evidence([], []) == pytest.approx(result.log_evidence, abs=1e-12)


def test_candidates_that_are_even_are_called_so():
    twins = [problems.sloped_model() for _ in range(2)]
    twins[1].name = "twin"
    result = stress_priors(problems.weighed(*twins, depth="none"))
    assert result.single.norm == 0
    assert "are even: any change decides" in result.summary
