"""The studies on the shelf: their data, their declarations and what they say of the truth."""

import ast
import math
import runpy
from pathlib import Path

import jax
import numpy as np
import pytest
from scipy import stats

from evidence.model import Model
from evidence.study import read_study

SHELF = Path(__file__).parents[1] / "models"
STUDIES = sorted(path for path in SHELF.glob("*.py") if path.name != "make_data.py")
RESPONSES = {
    "litter": "grams",
    "frogs": "frogs",
    "misra": "volume",
    "gauge": "metres",
    "germination": "germinated",
    "nests": "fledged",
}
ALLOWED = {"jax", "jax.numpy", "pathlib", "evidence", "evidence.distributions"}

# NIST/ITL StRD, Nonlinear Least Squares Regression, Misra1a to Misra1d: certified parameters b1
# and b2 and the certified residual sum of squares.
MISRA = {
    "exponential": (2.3894212918e02, 5.5015643181e-04, 1.2455138894e-01),
    "inverse square": (3.3799746163e02, 3.9039091287e-04, 7.5464681533e-02),
    "inverse square root": (6.3642725809e02, 2.0813627256e-04, 4.0966836971e-02),
    "hyperbola": (4.3736970754e02, 3.0227324449e-04, 5.6419295283e-02),
}


def shelf_models():
    return [
        pytest.param(study, model, id=f"{study.path.stem}: {model.name}")
        for study in map(read_study, STUDIES)
        for model in study.models
    ]


def centres(model):
    """Every parameter at the centre of its prior, in natural units."""
    values = {}
    for name, prior in model.priors.items():
        z, _ = prior.centre_and_spread()
        values[name] = prior.support.forward(z, xp=np)
    return values


def study_named(stem):
    study = read_study(SHELF / f"{stem}.py")
    return study, {model.name: model for model in study.models}


def evaluate(function, *arguments):
    with jax.enable_x64(True):
        return jax.tree_util.tree_map(np.asarray, jax.jit(function)(*arguments))


def test_the_shelf_is_known():
    assert {path.stem for path in STUDIES} >= set(RESPONSES)


@pytest.mark.parametrize(
    "name", ["litter.csv", "frogs.csv", "gauge.csv", "germination.csv", "nests.csv"]
)
def test_invented_data_are_what_the_generator_writes(tmp_path, name):
    runpy.run_path(str(SHELF / "make_data.py"))["write"](tmp_path)
    assert (tmp_path / name).read_bytes() == (SHELF / name).read_bytes()


@pytest.mark.parametrize("path", STUDIES, ids=lambda path: path.stem)
def test_studies_import_nothing_from_the_shelf(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    imported = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            imported |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            imported.add(node.module)
    assert imported <= ALLOWED


@pytest.mark.parametrize("path", STUDIES, ids=lambda path: path.stem)
def test_study_says_where_its_data_are_from(path):
    study = read_study(path)
    assert study.title
    assert "invented" in study.text.lower() or "Source: " in study.text


@pytest.mark.parametrize(("study", "model"), shelf_models())
def test_every_parameter_and_column_is_explained(study, model):
    assert isinstance(model, Model)
    for name in [*model.priors, *study.data]:
        assert model.units[name]
        assert model.notes[name]
    assert all("prior: " in model.notes[name] for name in model.priors)


@pytest.mark.parametrize(("study", "model"), shelf_models())
def test_log_likelihood_gives_one_finite_term_a_row(study, model):
    terms = evaluate(model.log_likelihood, centres(model), dict(study.data))
    rows = {len(column) for column in study.data.values()}
    assert terms.shape == (rows.pop(),)
    assert not rows
    assert np.isfinite(terms).all()


@pytest.mark.slow
@pytest.mark.parametrize(("study", "model"), shelf_models())
def test_simulated_responses_scatter_around_the_predicted(study, model):
    response = RESPONSES[study.path.stem]
    data, p = dict(study.data), centres(model)
    keys = jax.random.split(jax.random.key(7), 400)

    def both(keys, p, data):
        draws = jax.vmap(lambda key: model.simulate(key, p, data)[response])(keys)
        return model.predict(p, data)[response], draws

    expected, draws = evaluate(both, keys, p, data)
    assert expected.shape == data[response].shape
    assert draws.shape == (400, *expected.shape)
    error = draws.std(axis=0) / math.sqrt(400)
    # Five standard errors: over a hundred rows one false alarm in ten thousand.
    assert (np.abs(draws.mean(axis=0) - expected) <= 5 * error).all()
    assert (error > 0).all()


@pytest.mark.parametrize("name", sorted(MISRA))
def test_misra_reaches_the_certified_residuals(name):
    study, models = study_named("misra")
    capacity, affinity, certified = MISRA[name]
    p = {"capacity": capacity, "affinity": affinity, "noise": 0.1}
    expected = evaluate(models[name].predict, p, dict(study.data))["volume"]
    residual = study.data["volume"] - expected
    assert residual @ residual == pytest.approx(certified, rel=1e-9)


def test_frogs_are_whole_and_depths_are_centimetres():
    study, _ = study_named("frogs")
    assert study.data["frogs"].dtype == np.int64
    assert len(study.data["frogs"]) == 60
    assert study.data["frogs"].min() == 0
    assert 5 < study.data["depth"].min() < study.data["depth"].max() < 120


@pytest.mark.parametrize(
    ("stem", "wide", "narrow", "values"),
    [
        ("litter", "two pools", "one pool", {"fraction": 0.0, "slow": 0.003, "excess": 5.0}),
        ("litter", "power law", "one pool", {"age": 1e7, "power": 3e4}),
        ("litter", "one pool", "no loss", {"rate": 0.0}),
        ("frogs", "frogs gather", "chance alone", {"size": 1e9}),
        ("frogs", "empty ponds", "chance alone", {"empty": 1e-12}),
    ],
)
def test_wider_candidates_hold_the_narrower(stem, wide, narrow, values):
    study, models = study_named(stem)
    p = {**centres(models[narrow]), **values}
    p["rate"] = values.get("rate", 0.003)
    left, right = (
        evaluate(models[name].log_likelihood, p, dict(study.data)) for name in (wide, narrow)
    )
    np.testing.assert_allclose(left, right, rtol=1e-3)


def test_pools_do_not_change_places():
    study, models = study_named("litter")
    prior = models["two pools"].priors["excess"]
    assert not prior.support.contains(-0.5)
    # The same curve with the pools exchanged: share 0.7, fast 0.002, slow 0.03.
    twin = {"mass": 10.0, "fraction": 0.7, "slow": 0.03, "excess": 0.002 / 0.03 - 1.0}
    own = {"mass": 10.0, "fraction": 0.3, "slow": 0.002, "excess": 0.03 / 0.002 - 1.0}
    curves = [evaluate(models["two pools"].predict, p, dict(study.data)) for p in (own, twin)]
    np.testing.assert_allclose(curves[0]["grams"], curves[1]["grams"], rtol=1e-12)
    assert twin["excess"] < 0 < own["excess"]


def scipy_terms(stem, name, p, data):
    """The terms of the log-likelihood by scipy.stats, written anew from the study's text."""
    if stem == "litter":
        t = data["days"]
        if name == "two pools":
            slow, fast = p["slow"], p["slow"] * (1 + p["excess"])
            left = p["fraction"] * np.exp(-fast * t) + (1 - p["fraction"]) * np.exp(-slow * t)
        elif name == "power law":
            left = (1 + t / p["age"]) ** (-p["power"])
        else:
            left = np.exp(-p.get("rate", 0.0) * t)
        return stats.norm.logpdf(data["grams"], p["mass"] * left, p["noise"])
    mean, count = np.exp(p["level"] + p["slope"] * (data["depth"] - 50) / 10), data["frogs"]
    if name == "frogs gather":
        return stats.nbinom.logpmf(count, p["size"], p["size"] / (p["size"] + mean))
    chance = stats.poisson.pmf(count, mean)
    return np.log(p.get("empty", 0.0) * (count == 0) + (1 - p.get("empty", 0.0)) * chance)


@pytest.mark.parametrize("stem", ["litter", "frogs"])
def test_log_likelihoods_agree_with_scipy(stem):
    study, models = study_named(stem)
    for name, model in models.items():
        p, data = centres(model), dict(study.data)
        terms = evaluate(model.log_likelihood, p, data)
        np.testing.assert_allclose(terms, scipy_terms(stem, name, p, data), rtol=1e-10)
