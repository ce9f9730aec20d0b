"""The declaration of a candidate: what it refuses and in which words, and what it keeps."""

from __future__ import annotations

import pickle

import jax
import jax.numpy as jnp
import numpy as np
import pytest

import evidence as ev
from evidence.compiling import Programs
from evidence.distributions import HalfNormal, LogNormal, Normal, Poisson, positive, real
from evidence.distributions import discrete as discrete_support
from evidence.model import call_flexibly

PRIORS = {"mean": Normal(0.0, 2.0), "sd": HalfNormal(1.0)}


def terms(p, data):
    return Normal(p["mean"], p["sd"]).log_prob(data["y"])


def declare(**changes):
    given = {"name": "level", "priors": PRIORS, "log_likelihood": terms} | changes
    return ev.Model(given.pop("name"), given.pop("priors"), given.pop("log_likelihood"), **given)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"name": 3}, r"name of a candidate must be a text; got 3\. Type: Model\("),
        ({"name": "  "}, "name of a candidate must be a text"),
        ({"priors": [Normal(0, 1)]}, r"priors of 'level' must be a mapping.*got list.*Type: "),
        ({"priors": {1: Normal(0, 1)}}, "parameter names of 'level' must be texts; got 1"),
        ({"priors": {"mean": 3.0}}, r"prior of 'mean'.*must be a distrib.*got 3\.0.*constants"),
        ({"priors": {"mean": Normal}}, "prior of 'mean' in 'level' must be a distribution"),
        ({"priors": {"mean": None}}, "prior of 'mean'.*got None"),
        ({"priors": {"n": Poisson(3.0)}}, r"prior of 'n'.*continuous; got Poisson.*logsumexp"),
        ({"log_likelihood": 3}, "log_likelihood of 'level' must be a function; got int"),
        ({"simulate": "draws"}, "simulate of 'level' must be a function; got str"),
        ({"predict": 3}, "predict of 'level' must be a function"),
        ({"constants": {"sd": 1.0}}, r"'sd' of 'level' is declared twice.*Remove one"),
        ({"constants": {"k": "three"}}, "constant 'k' in 'level' must be a finite.*got 'three'"),
        ({"constants": {"k": np.nan}}, "constant 'k'.*finite"),
        ({"constants": [3.0]}, "constants of 'level' must be a mapping of names; got list"),
        ({"start": {"maen": 1.0}}, r"start of 'level' names 'maen'.*Declared: mean, sd.*'mean'\?"),
        ({"start": {"mean": np.inf}}, "start of 'mean' in 'level' must be a finite"),
        ({"start": 1.0}, "start of 'level' must be a mapping of names; got float"),
        ({"units": "grams"}, "units of 'level' must be a mapping of names; got str"),
    ],
)
def test_mistakes_in_a_declaration(changes, words):
    with pytest.raises(ev.DeclarationError, match=words):
        declare(**changes)


def bare(start, **options):
    return ev.Model.from_log_posterior("bare", lambda p: -(p["a"] ** 2), start, **options)


@pytest.mark.parametrize(
    ("start", "options", "words"),
    [
        ({}, {}, r"from_log_posterior\('bare'\) needs `start`.*Type: start="),
        (1.0, {}, "needs `start`.*got 1.0"),
        ({"a": "x"}, {}, "start of 'a' in 'bare' must be a finite"),
        ({"a": 1.0}, {"spread": {"b": 1.0}}, "spread of 'bare' names 'b', which is no parameter"),
        ({"a": 1.0}, {"spread": {"a": 0.0}}, r"spread of 'a'.*positive and of the shape \(\)"),
        ({"a": [1.0, 2.0]}, {"spread": {"a": [1.0] * 3}}, r"spread of 'a'.*shape \(2,\)"),
        ({"a": 1.0, "b": 1.0}, {"spread": {"a": 1.0}}, "spread of 'bare' lacks 'b'"),
        ({"a": 1.0}, {"support": {"b": positive}}, "support of 'bare' names 'b'"),
        ({"a": 1.0}, {"support": {"a": "positive"}}, "support of 'a'.*Type: .*positive"),
        ({"a": 1.0}, {"support": {"a": discrete_support}}, "must be a continuous support"),
        ({"a": -1.0}, {"support": {"a": positive}}, "start of 'a' in 'bare' lies outside"),
    ],
)
def test_mistakes_in_a_bare_log_posterior(start, options, words):
    with pytest.raises(ev.DeclarationError, match=words):
        bare(start, **options)


def test_what_a_declaration_keeps():
    model = declare(
        constants={"k": 3, "grid": [1, 2]},
        start={"mean": 1},
        units={"mean": "g"},
        notes={"sd": "of one bag"},
    )
    assert model.parameters == ("mean", "sd")
    assert model.constants["k"].dtype == model.constants["grid"].dtype == np.float64
    assert (model.units, model.notes) == ({"mean": "g"}, {"sd": "of one bag"})
    other = bare({"a": 2.0, "b": [1.0, 2.0]}, support={"a": positive})
    assert other.parameters == ("a", "b")
    assert other.supports == {"a": positive, "b": real}


def test_every_number_is_a_float64_argument():
    model = declare(constants={"k": np.float32(0.5), "whole": 3})
    leaves = jax.tree_util.tree_leaves(model.hyperparameters())
    assert len(leaves) == 5  # mean and sd of Normal, sd of HalfNormal, two constants
    assert all(isinstance(x, np.ndarray) and x.dtype == np.float64 for x in leaves)


def test_changing_the_callers_dicts_changes_nothing():
    priors, constants = dict(PRIORS), {"k": np.ones(2)}
    model = declare(priors=priors, constants=constants)
    priors["other"] = Normal(0, 1)
    constants["k"][0] = 7.0
    assert model.parameters == ("mean", "sd")
    assert model.constants["k"].tolist() == [1.0, 1.0]


def test_float32_in_the_declaration_is_named():
    model = declare(
        priors={"mean": Normal(jnp.asarray(0.1), 2.0), "sd": HalfNormal(np.float64(1.0))},
        constants={"k": jnp.asarray(0.1), "exact": 0.1},
    )
    assert model.float32 == ("constant 'k'", "mean of the prior of 'mean'")
    assert declare().float32 == ()
    data = {"y": np.arange(5.0)}
    with pytest.warns(ev.EvidenceWarning, match="constant 'k'.* is float32.*7 of 16 digits"):
        ev.approximate(model, data, depth="none")


@pytest.mark.parametrize(
    ("function", "calls_with_data"),
    [
        (lambda p: 0, False),
        (lambda p, data: 0, True),
        (lambda p, d: 0, True),
        (lambda p, data=None: 0, True),
        (lambda p, scale=2.0: 0, False),
        (lambda *both: 0, True),
    ],
)
def test_functions_of_one_or_two_arguments(function, calls_with_data):
    seen = []

    def watch(*arguments):
        seen.append(len(arguments))
        return function(*arguments)

    watch.__signature__ = __import__("inspect").signature(function)
    assert call_flexibly(watch, {}, {}) == 0
    assert seen == [2 if calls_with_data else 1]


def test_texts_of_a_model():
    text = repr(declare())
    assert text == "Model('level')\n  mean ~ Normal(mean=0.0, sd=2.0)\n  sd ~ HalfNormal(sd=1.0)"
    many = declare(priors={f"a{k}": Normal(0, 1) for k in range(40)})
    assert repr(many).endswith("and 31 more")
    assert len(repr(many).splitlines()) <= 12
    dependent = declare(priors={"a": Normal(0, 1), "b": lambda p: Normal(p["a"], 1)})
    assert "b ~ <lambda>(p)" in repr(dependent)
    assert repr(bare({"a": 1.0})) == "Model('bare', log posterior of a)"


def test_programs_forget_the_least_used(monkeypatch):
    monkeypatch.setattr("evidence.compiling.PROGRAMS_KEPT", 3)
    programs, built = Programs(), []
    for key in (1, 2, 3, 1, 4, 1, 2):
        programs.get(key, lambda key=key: built.append(key) or key)
    assert built == [1, 2, 3, 4, 2]  # 1 was used again and stayed, 2 was forgotten
    assert len(programs) == 3


def test_a_model_of_module_functions_can_be_pickled():
    model = declare(constants={"k": 2.0})
    data = {"y": np.linspace(-1.0, 2.0, 12)}
    before = ev.approximate(model, data, depth="none")
    assert len(model.programs) > 0
    copy = pickle.loads(pickle.dumps(model))
    assert len(copy.programs) == 0
    assert copy.priors == model.priors
    after = ev.approximate(copy, data, depth="none")
    assert after.log_evidence == before.log_evidence


# what travels as an argument compiles nothing


def scaled_terms(p, data):
    return Normal(p["mean"] * p["k"], p["sd"]).log_prob(data["y"])


def test_changing_a_number_compiles_nothing(monkeypatch):
    """Constants, a prior's numbers and data are arguments; a model's function is traced once."""
    traces = []

    def counted(function, p, data):
        traces.append(function)
        return call_flexibly(function, p, data)

    # counted where it is called: a counter that the function reads would be a change itself
    monkeypatch.setattr("evidence.problem.call_flexibly", counted)
    model = ev.Model("level", dict(PRIORS), scaled_terms, constants={"k": 1.0})
    data = {"y": np.linspace(-1.0, 2.0, 12)}
    found = []
    for _ in range(3):  # the second fit compiles the whole search, the third has everything
        found.append(ev.approximate(model, data, depth="none").log_evidence)
        ev.approximate(model, data, depth="none").posterior.table()
    traced = len(traces)
    model.constants["k"] = np.array(2.0)
    found.append(ev.approximate(model, data, depth="none").log_evidence)
    model.priors["mean"] = Normal(0.5, 3)
    found.append(ev.approximate(model, data, depth="none").log_evidence)
    found.append(ev.approximate(model, {"y": data["y"] + 2.0}, depth="none").log_evidence)
    assert len(traces) == traced
    assert found[0] == pytest.approx(found[2], abs=1e-9)
    assert len({round(float(x), 6) for x in found}) == 4
    # another type of prior, or another number of rows, is another program
    model.priors["sd"] = LogNormal(0.0, 1.0)
    ev.approximate(model, data, depth="none")
    assert len(traces) > traced
    traced = len(traces)
    ev.approximate(model, {"y": np.linspace(-1.0, 2.0, 13)}, depth="none")
    assert len(traces) > traced
