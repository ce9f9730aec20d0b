"""Prior predictive and blended predictions against closed forms.

All data are invented, set at the fictional Lowmere reed-bed station.
"""

from __future__ import annotations

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy import stats

import evidence as ev
from evidence.distributions import Bernoulli, LogNormal, Normal, Poisson
from evidence.prediction.mixture import Share, mix, weighted_quantiles
from evidence.prediction.pictures import axis_of
from evidence.simulation import draw_prior, respond, response_shapes

BAGS = {"bag": np.arange(12.0)}
GRAMS = np.array([0.3, 1.4, 0.2, 0.9, -0.6, 1.8, 0.7, 0.1, 1.1, 0.4, 1.3, -0.2])
DATA = {**BAGS, "grams": GRAMS}
SD, PRIOR_SD = 1.0, 0.7


def mean_model(name="a mean", sd=PRIOR_SD, centre=0.0, **extra):
    """Grams around an unknown mean with a known sd: everything about it is closed."""
    return ev.Model(
        name,
        {"mean": Normal(centre, sd)},
        lambda p, data: Normal(p["mean"], SD).log_prob(data["grams"]),
        simulate=lambda key, p, data: {
            "grams": Normal(p["mean"] + 0.0 * data["bag"], SD).sample(key)
        },
        predict=lambda p, data: {"grams": p["mean"] + 0.0 * data["bag"]},
        units={"grams": "g", "bag": "1"},
        **extra,
    )


def zero_model(name="zero"):
    """Grams around zero: nothing is free."""
    return ev.Model(
        name,
        {},
        lambda p, data: Normal(0.0, SD).log_prob(data["grams"]),
        simulate=lambda key, p, data: {"grams": Normal(0.0 * data["bag"], SD).sample(key)},
        predict=lambda p, data: {"grams": 0.0 * data["bag"]},
    )


def exact_mean(y):
    """Posterior mean and variance of the mean."""
    variance = 1.0 / (1.0 / PRIOR_SD**2 + len(y) / SD**2)
    return variance * y.sum() / SD**2, variance


def exact_log_evidence(y, sd):
    """Multivariate normal density of the data [nats]."""
    n = len(y)
    covariance = SD**2 * np.eye(n) + sd**2 * np.ones((n, n))
    return stats.multivariate_normal(np.zeros(n), covariance, allow_singular=True).logpdf(y)


@pytest.fixture(scope="module")
def weighing():
    return ev.weigh([mean_model(), zero_model()], DATA, depth="none")


@pytest.fixture(scope="module")
def blended(weighing):
    return ev.blend(weighing, {"bag": np.arange(4.0)}, draws=20_000, seed=3)


def test_blend_agrees_with_the_closed_form(weighing, blended):
    log_z = np.array([exact_log_evidence(GRAMS, PRIOR_SD), exact_log_evidence(GRAMS, 0.0)])
    weight = 1.0 / (1.0 + np.exp(log_z[1] - log_z[0]))
    centre, variance = exact_mean(GRAMS)
    assert 0.1 < weight < 0.98
    assert weighing.probabilities["a mean"] == pytest.approx(weight, abs=1e-6)
    row = blended.table().iloc[0]
    # sd of the mean of 20 000 draws, five times
    slack = 5 * weight * np.sqrt(variance / 20_000)
    assert row["mean"] == pytest.approx(weight * centre, abs=slack)
    assert row["within"] == pytest.approx(weight * variance, rel=0.06)
    between = weight * (1 - weight) * centre**2
    assert row["between"] == pytest.approx(between, rel=0.06)
    assert row["sd"] ** 2 == pytest.approx(row["within"] + row["between"], rel=1e-12)
    assert row["share_between"] == pytest.approx(between / (between + weight * variance), rel=0.08)
    assert row["new_within"] == pytest.approx(weight * variance + SD**2, rel=0.06)


def test_the_blends_interval_is_that_of_the_mixture(blended, weighing):
    weight = weighing.probabilities["a mean"]
    centre, variance = exact_mean(GRAMS)

    def below(y):
        return weight * stats.norm(centre, np.sqrt(variance + SD**2)).cdf(y) + (
            1 - weight
        ) * stats.norm(0, SD).cdf(y)

    row = blended.table().iloc[2]
    assert below(row["new_low"]) == pytest.approx(0.025, abs=0.006)
    assert below(row["new_high"]) == pytest.approx(0.975, abs=0.006)


def test_the_same_seed_gives_the_same_blend(weighing):
    one, two, other = (ev.blend(weighing, BAGS, draws=50, seed=s).table() for s in (1, 1, 2))
    assert one.equals(two)
    assert not one.equals(other)


def test_blend_speaks_in_short(blended):
    assert len(repr(blended).splitlines()) <= 12
    assert "averaged over a mean" in blended.summary
    table = blended.table()
    assert list(table.columns) == list(table.attrs["columns"])
    assert list(blended.means().columns) == ["column", "row", "blend", "a mean", "zero"]
    assert blended.plot().axes


def test_blend_without_new_data_takes_the_weighed_ones(weighing):
    assert len(ev.blend(weighing, draws=20).table()) == len(GRAMS)


def test_blend_uses_the_draws_that_the_audit_accepted():
    def counts(p, data):
        return Poisson(log_rate=p["level"] + 0.0 * data["bag"])

    model = ev.Model(
        "few frogs",
        {"level": Normal(0.0, 2.0)},
        lambda p, data: counts(p, data).log_prob(data["frogs"]),
        predict=lambda p, data: {"frogs": jnp.exp(p["level"]) + 0.0 * data["bag"]},
    )
    data = {"bag": np.arange(3.0), "frogs": np.array([0, 0, 0])}
    found = ev.blend(ev.weigh([model], data, depth="quick"), draws=4000)
    level = np.linspace(-30, 10, 400_001)
    density = np.exp(stats.norm(0, 2).logpdf(level) - 3 * np.exp(level))
    exact = np.sum(np.exp(level) * density) / np.sum(density)
    assert found.refined == ("few frogs",)
    assert found.table()["mean"][0] == pytest.approx(exact, rel=0.08)
    assert np.isnan(found.table()["new_low"]).all()


def test_candidates_without_a_chance_are_left_out():
    far = mean_model("far away", sd=0.7, centre=30.0)
    found = ev.blend(ev.weigh([mean_model(), far], DATA, depth="none"), draws=20)
    assert list(found.probabilities) == ["a mean"]
    assert "far away (probability below 1e-06)" in found.summary


def test_blend_names_draws_that_fail():
    model = mean_model()
    model.predict = lambda p, data: {"grams": jnp.log(p["mean"] - 0.4) + 0.0 * data["bag"]}
    found = ev.blend(ev.weigh([model], DATA, depth="none"), BAGS, draws=200)
    assert 0 < found.failed["a mean"] < 200
    assert "nan or inf" in found.summary
    assert np.isfinite(found.table()["mean"]).all()


def test_blend_refuses_what_cannot_predict(weighing, tmp_path):
    mute = ev.Model("mute", {"mean": Normal(0.0, 1.0)}, mean_model().log_likelihood)
    with pytest.raises(ev.DeclarationError, match="'mute' cannot predict"):
        ev.blend(ev.weigh([mute], DATA, depth="none"))
    with pytest.raises(ev.DeclarationError, match="needs a weighing; got list"):
        ev.blend([mute])
    with pytest.raises(ev.DeclarationError, match="draws must be a whole number from 2 on; got 1"):
        ev.blend(weighing, draws=1)
    with pytest.raises(ev.DeclarationError, match="level must lie between 0 and 1; got 95"):
        ev.blend(weighing, level=95)
    weighing.report(tmp_path / "x.json")
    with pytest.raises(ev.DeclarationError, match="a saved weighing holds tables"):
        ev.blend(ev.Weighing.from_json(tmp_path / "x.json"))


def test_candidates_must_predict_the_same():
    one = Share("a", 0.5, {"grams": np.ones((3, 2))}, {})
    with pytest.raises(ev.DeclarationError, match="the same columns; got 'a': grams; 'b': frogs"):
        mix([one, Share("b", 0.5, {"frogs": np.ones((3, 2))}, {})], 0.95)
    with pytest.raises(ev.DeclarationError, match="in the same shape"):
        mix([one, Share("b", 0.5, {"grams": np.ones((3, 4))}, {})], 0.95)


def test_weighted_quantiles_are_those_of_repeated_values():
    values, times = np.array([[1.0], [2.0], [5.0]]), np.array([1, 2, 5])
    found = weighted_quantiles(values, times / 8, np.array([0.25, 0.7]))
    # middles of the shares: 1/16, 4/16, 11/16
    assert found[:, 0] == pytest.approx([2.0, 5.0])


def test_prior_predictive_agrees_with_the_closed_form():
    found = ev.prior_predictive(mean_model(), DATA, draws=4000, seed=5)
    drawn = found.simulated["grams"]
    assert drawn.shape == (4000, 12)
    # each value is normal with the variances added up, the mean of 12 has a twelfth of the noise
    assert drawn.std() == pytest.approx(np.hypot(SD, PRIOR_SD), rel=0.05)
    table = found.table().set_index("feature")
    sd = np.sqrt(PRIOR_SD**2 + SD**2 / 12)
    assert table.loc["mean", "high"] == pytest.approx(1.96 * sd, rel=0.08)
    above = stats.norm(0, sd).sf(GRAMS.mean())
    assert table.loc["mean", "share_above"] == pytest.approx(above, abs=0.04)
    assert not table["outside"].any()
    assert found.warning is None
    assert found.observed["grams"] == pytest.approx(GRAMS)


def test_the_parameters_come_from_their_priors():
    model = ev.Model(
        "dependent",
        {
            "scale": LogNormal(1.0, 0.5),
            "mean": lambda p, data: Normal(10.0, p["scale"] * data["bag"][2]),
            "each": Normal(0.0, 2.0, shape=(3,)),
        },
        lambda p, data: 0.0 * data["bag"],
    )
    drawn = draw_prior(model, BAGS, 5000, seed=1)
    assert list(drawn) == ["scale", "mean", "each"]
    assert stats.kstest(np.log(drawn["scale"]), stats.norm(1.0, 0.5).cdf).pvalue > 1e-4
    scaled = (drawn["mean"] - 10.0) / (2.0 * drawn["scale"])
    assert stats.kstest(scaled, stats.norm.cdf).pvalue > 1e-4
    assert drawn["each"].shape == (5000, 3)
    assert stats.kstest(drawn["each"].ravel(), stats.norm(0, 2).cdf).pvalue > 1e-4
    assert abs(np.corrcoef(drawn["each"].T)[0, 1]) < 0.06


def test_draws_do_not_depend_on_the_sessions_generator():
    before = draw_prior(mean_model(), BAGS, 20, seed=1)["mean"]
    with jax.default_prng_impl("rbg"):
        within = draw_prior(mean_model(), BAGS, 20, seed=1)["mean"]
    assert np.array_equal(before, within)
    assert not np.array_equal(before, draw_prior(mean_model(), BAGS, 20, seed=2)["mean"])


def test_data_far_outside_are_told_of():
    with pytest.warns(ev.EvidenceWarning, match="outside nearly all that the priors of 'a mean'"):
        found = ev.prior_predictive(mean_model(), {**BAGS, "grams": 1000.0 * GRAMS}, draws=300)
    assert "'grams'" in found.warning
    assert "Beware" in found.summary
    assert found.table().set_index("feature").loc["sd", "outside"]


def test_priors_far_too_wide_are_told_of():
    found = ev.prior_predictive(mean_model(sd=1e6), DATA, draws=300)
    assert found.warning is None
    assert "times narrower" in found.summary
    assert found.plot().axes[0].get_yscale() == "symlog"


def test_prior_predictive_without_the_response():
    found = ev.prior_predictive(mean_model(), BAGS, draws=50)
    assert found.observed == {}
    assert found.table()["observed"].isna().all()
    assert "between" in found.summary
    assert "observed" not in found.summary
    assert len(repr(found).splitlines()) <= 12
    assert found.plot().axes


def test_one_number_is_drawn_as_a_histogram():
    model = ev.Model(
        "coin",
        {"level": Normal(0.0, 1.0)},
        lambda p, data: Bernoulli(logit=p["level"]).log_prob(data["heads"]),
        simulate=lambda key, p, data: {"heads": Bernoulli(logit=p["level"]).sample(key)},
    )
    found = ev.prior_predictive(model, {"heads": 1}, draws=100)
    assert list(found.table()["feature"]) == ["mean"]
    assert found.plot().axes[0].get_ylabel() == "data sets"


def failing_model():
    model = mean_model("sometimes nan")
    model.simulate = lambda key, p, data: {"grams": jnp.log(p["mean"]) + 0.0 * data["bag"]}
    return model


def test_failing_draws_are_named_and_counted():
    found = ev.prior_predictive(failing_model(), BAGS, draws=400, seed=0)
    bad = int((found.parameters["mean"] < 0).sum())
    assert 100 < bad < 300
    assert len(found.failed) == bad
    assert len(found.simulated["grams"]) == 400 - bad
    assert f"{bad} of 400 draws gave nan or inf" in found.summary
    assert found.failed[0][1] == "'grams' holds 12 nan or inf"


def test_prior_predictive_refuses_bad_input():
    mute = ev.Model("mute", {"mean": Normal(0.0, 1.0)}, mean_model().log_likelihood)
    with pytest.raises(ev.DeclarationError, match="'mute' cannot draw data; got no simulate="):
        ev.prior_predictive(mute, DATA)
    with pytest.raises(ev.DeclarationError, match="draws must be a whole number from 1 on; got 0"):
        ev.prior_predictive(mean_model(), DATA, draws=0)
    with pytest.raises(ev.DeclarationError, match="needs one candidate; got list"):
        ev.prior_predictive([mean_model()], DATA)
    bare = ev.Model.from_log_posterior("bare", lambda p: -(p["x"] ** 2), {"x": 0.0})
    with pytest.raises(ev.DeclarationError, match="'bare' has no priors to draw from"):
        draw_prior(bare, {}, 3, seed=0)
    hopeless = mean_model("hopeless")
    hopeless.simulate = lambda key, p, data: {"grams": jnp.nan * data["bag"]}
    with pytest.raises(ev.DataError, match="every one of 20 data sets drawn from the priors"):
        ev.prior_predictive(hopeless, DATA, draws=20)


@pytest.mark.parametrize(
    ("simulate", "message"),
    [
        (lambda key, p, data: data["bag"], "must return a mapping of column name to values"),
        (lambda key, p, data: {"y": data["bags"]}, "Did you mean 'bag'"),
        (lambda key, p, data: {"y": float(p["mean"])}, "in Python on a traced value"),
    ],
)
def test_a_simulate_that_cannot_be_traced_is_named(simulate, message):
    model = mean_model()
    model.simulate = simulate
    with pytest.raises(ev.DeclarationError, match=message):
        ev.prior_predictive(model, BAGS, draws=5)
    with pytest.raises(ev.DeclarationError, match=message):
        response_shapes(model, BAGS)


def test_many_rows_are_drawn_in_pieces(monkeypatch):
    whole = respond(mean_model(), {"mean": np.arange(7.0)}, BAGS, 7, seed=2)
    monkeypatch.setattr("evidence.simulation.NUMBERS_AT_ONCE", 40)
    pieces = respond(mean_model(), {"mean": np.arange(7.0)}, BAGS, 7, seed=2)
    assert whole["simulated"]["grams"] == pytest.approx(pieces["simulated"]["grams"], abs=1e-12)
    assert pieces["expected"]["grams"][:, 0] == pytest.approx(np.arange(7.0))


def test_the_axis_is_a_real_column_that_varies():
    data = {"whole": np.arange(3), "same": np.ones(3), "real": np.array([2.0, 1.0, 3.0])}
    assert axis_of(data, {"y"}, 3)[0] == "real"
    assert axis_of({"whole": np.arange(3)}, {"y"}, 3)[0] == "whole"
    name, at = axis_of({"same": np.ones(3)}, {"y"}, 3)
    assert name is None
    assert at == pytest.approx([1, 2, 3])
