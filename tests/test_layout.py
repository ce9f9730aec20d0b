"""How named parameters lie in z: shapes, labels, dependent priors, starts, numpyro's priors."""

from __future__ import annotations

import warnings

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats as st

import evidence as ev
from evidence.compiling import float64
from evidence.distributions import (
    Beta,
    Dirichlet,
    Gamma,
    HalfNormal,
    LogNormal,
    MultivariateNormal,
    Normal,
    ordered,
    positive,
    simplex,
)
from evidence.layout import Named, unpack
from evidence.problem import Problem

Y = np.array([0.3, 1.1, 0.8, 0.9])


def approximate(model, data=None):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(model, data, depth="none")


def level(p, data):
    return Normal(p["mean"], p["sd"]).log_prob(data["y"])


EVERYTHING = {
    "mean": Normal(0.0, 2.0),
    "rates": LogNormal(0.0, 1.0, shape=(2,)),
    "shares": Dirichlet([1.0, 2.0, 3.0]),
    "pair": MultivariateNormal(np.zeros(2), np.eye(2)),
    "chance": Beta(2.0, 3.0),
}


def everything(p):
    return (
        -((p["mean"] - 1) ** 2)
        - jnp.sum(p["rates"] ** 2)
        + jnp.log(p["shares"])[0]
        - jnp.sum(p["pair"] ** 2)
        + jnp.log(p["chance"])
    )


EVERY = ev.Model("every kind", EVERYTHING, everything)


def test_blocks_follow_the_order_of_declaration():
    problem = Problem(EVERY)
    assert problem.names == (
        "mean",
        "log rates[0]",
        "log rates[1]",
        "log(shares[0]/shares[2])",
        "log(shares[1]/shares[2])",
        "pair[0]",
        "pair[1]",
        "logit chance",
    )
    assert problem.dim == 8
    labels = [label for label, _, _ in problem.layout.entries()]
    assert labels[:6] == ["mean", "rates[0]", "rates[1]", "shares[0]", "shares[1]", "shares[2]"]
    values = problem.natural(np.linspace(-1.0, 1.0, 8))
    assert list(values) == list(EVERYTHING)
    assert {k: v.shape for k, v in values.items()} == {
        "mean": (),
        "rates": (2,),
        "shares": (3,),
        "pair": (2,),
        "chance": (),
    }
    assert values["shares"].sum() == pytest.approx(1.0, abs=1e-15)


def test_unconstrained_is_the_inverse_of_natural():
    problem = Problem(EVERY)
    z = np.random.default_rng(1).normal(size=8)
    assert problem.unconstrained(problem.natural(z)) == pytest.approx(z, abs=1e-12)
    draws = problem.natural(np.stack([z, 2 * z, -z]))
    assert draws["shares"].shape == (3, 3)
    assert draws["mean"] == pytest.approx(z[0] * np.array([1, 2, -1]))


def test_prior_and_jacobian_against_scipy():
    """scipy.stats in natural units, the Jacobians written out by hand."""
    problem = Problem(EVERY)
    z = np.random.default_rng(2).normal(size=8)
    x, part = problem.natural(z), problem.prior_part(z)
    expected = (
        st.norm(0, 2).logpdf(x["mean"])
        + st.lognorm(1.0).logpdf(x["rates"]).sum()
        + st.dirichlet([1.0, 2.0, 3.0]).logpdf(x["shares"] / x["shares"].sum())
        + st.multivariate_normal(np.zeros(2)).logpdf(x["pair"])
        + st.beta(2, 3).logpdf(x["chance"])
    )
    jacobian = z[1] + z[2] + np.log(x["shares"]).sum() + np.log(x["chance"] * (1 - x["chance"]))
    assert float(part.log_prior) == pytest.approx(expected, abs=1e-11)
    assert float(part.log_jacobian) == pytest.approx(jacobian, abs=1e-12)
    assert list(part.values) == list(EVERYTHING)


def test_prior_part_derivatives_by_differences():
    problem = Problem(EVERY)
    z = np.random.default_rng(3).normal(size=8)
    part = problem.prior_part(z)

    def total(z):
        here = problem.prior_part(z)
        return float(here.log_prior + here.log_jacobian)

    step = 1e-5
    slope = [(total(z + step * e) - total(z - step * e)) / (2 * step) for e in np.eye(8)]
    assert part.gradient == pytest.approx(slope, abs=1e-7)
    bend = [
        (problem.prior_part(z + step * e).gradient - problem.prior_part(z - step * e).gradient)
        / (2 * step)
        for e in np.eye(8)
    ]
    assert part.hessian == pytest.approx(-np.array(bend), abs=1e-7)


def test_the_density_is_the_sum_of_its_parts():
    problem = Problem(EVERY)
    z = np.random.default_rng(4).normal(size=8)
    whole, part, likelihood = problem.evaluate(z), problem.prior_part(z), problem.likelihood_part(z)
    with float64():
        values = {k: jnp.asarray(v) for k, v in problem.natural(z).items()}
        fit = float(everything(values))
    assert float(likelihood.log_density) == pytest.approx(fit, abs=1e-11)
    total = fit + float(part.log_prior + part.log_jacobian)
    assert float(whole.log_density) == pytest.approx(total, abs=1e-11)
    assert whole.hessian == pytest.approx(whole.hessian.T, abs=1e-12)
    batch = problem.batch(np.tile(z, (70, 1)))
    assert batch == pytest.approx(np.full(70, float(whole.log_density)), abs=1e-11)


def test_unpack_under_vmap():
    problem = Problem(EVERY)
    z = np.random.default_rng(5).normal(size=(4, 8))
    mapped = jax.vmap(lambda point: unpack(problem.layout, point, problem.hyper, problem.data))
    with float64():
        values, prior, jacobian = jax.jit(mapped)(z)
    alone = problem.prior_part(z[2])
    assert prior.shape == jacobian.shape == (4,)
    assert values["shares"].shape == (4, 3)
    assert float(prior[2]) == pytest.approx(float(alone.log_prior), abs=1e-12)


def test_batch_takes_nan_for_nothing_and_keeps_infinity():
    model = ev.Model.from_log_posterior(
        "broken",
        lambda p: jnp.where(p["a"] > 1, jnp.nan, jnp.where(p["a"] < -1, jnp.inf, -(p["a"] ** 2))),
        {"a": 0.0},
    )
    found = Problem(model).batch(np.array([[0.0], [2.0], [-2.0]]))
    assert found.tolist() == [0.0, -np.inf, np.inf]


# priors that depend on what was declared before them


def test_a_prior_of_earlier_parameters_and_of_data():
    """The same Gaussian model three ways, with its evidence in closed form."""
    tau, width = 1.5, 0.4

    def closed_form():
        covariance = 0.3**2 * np.eye(4) + width**2 + tau**2
        return st.multivariate_normal(np.zeros(4), covariance).logpdf(Y)

    def terms(p, data):
        return Normal(p["mean"], 0.3).log_prob(data["y"])

    of_p = {"centre": Normal(0.0, tau), "mean": lambda p: Normal(p["centre"], width)}
    of_data = {
        "centre": Normal(0.0, tau),
        "mean": lambda p, data: Normal(p["centre"], data["width"]),
    }
    of_constant = {
        "centre": lambda p: Normal(0.0, p["tau"]),
        "mean": lambda p: Normal(p["centre"], p["width"]),
    }
    constants = {"tau": tau, "width": width}
    found = [
        approximate(ev.Model("of p", of_p, terms), {"y": Y}),
        approximate(ev.Model("of data", of_data, terms), {"y": Y, "width": np.float64(width)}),
        approximate(ev.Model("of constants", of_constant, terms, constants=constants), {"y": Y}),
    ]
    assert [x.log_evidence for x in found] == pytest.approx([closed_form()] * 3, abs=1e-9)


def test_centres_of_dependent_priors_follow_those_before():
    priors = {"scale": LogNormal(0.7, 0.2), "x": lambda p: Normal(3.0, p["scale"])}
    problem = Problem(ev.Model("dependent", priors, lambda p: 0.0 * p["x"]))
    assert problem.centre == pytest.approx([0.7, 3.0], abs=1e-12)
    assert problem.spread == pytest.approx([0.2, np.exp(0.7)], abs=1e-12)
    assert problem.spread_known


def test_a_support_that_depends_on_a_parameter():
    priors = {
        "low": Normal(0.0, 1.0),
        "x": lambda p: ev.distributions.Uniform(p["low"], p["low"] + 2.0),
    }
    problem = Problem(ev.Model("moving", priors, lambda p: -((p["x"] - 1.0) ** 2)))
    z = np.array([0.3, -0.4])
    x = problem.natural(z)
    assert 0.3 < x["x"] < 2.3
    assert problem.unconstrained(x) == pytest.approx(z, abs=1e-12)
    assert float(problem.prior_part(z).log_prior) == pytest.approx(
        st.norm.logpdf(0.3) - np.log(2.0), abs=1e-12
    )


# starts


def test_the_users_start_in_z():
    model = ev.Model("start", EVERYTHING, everything, start={"rates": [1.0, np.e], "chance": 0.5})
    problem = Problem(model)
    expected = problem.centre.copy()
    expected[[1, 2, 7]] = [0.0, 1.0, 0.0]
    assert problem.start == pytest.approx(expected, abs=1e-12)
    assert Problem(EVERY).start is None


@pytest.mark.parametrize(
    ("start", "words"),
    [
        ({"rates": [-1.0, 1.0]}, r"value of 'rates' in 'start' must lie inside.*\[-1\.  1\.\]"),
        ({"chance": 1.0}, "value of 'chance'.*inside its prior's support"),
        ({"shares": [0.2, 0.2, 0.2]}, "value of 'shares'.*inside its prior's support"),
        ({"rates": [1.0, 1.0, 1.0]}, r"value of 'rates' in 'start' must have the shape \(2,\)"),
        ({"mean": [1.0, 2.0]}, r"value of 'mean' in 'start' must have the shape \(\); got \(2,\)"),
    ],
)
def test_starts_that_cannot_be(start, words):
    with pytest.raises(ev.DeclarationError, match=words):
        Problem(ev.Model("start", EVERYTHING, everything, start=start))


def test_bare_supports_and_spreads():
    model = ev.Model.from_log_posterior(
        "bare",
        lambda p: -jnp.sum(p["s"] ** 2) + jnp.log(p["w"])[0] - jnp.sum(p["o"] ** 2),
        {"s": 2.0, "w": [0.2, 0.3, 0.5], "o": [1.0, 2.0]},
        support={"s": positive, "w": simplex, "o": ordered},
    )
    problem = Problem(model)
    assert problem.dim == 5
    assert problem.names[1] == "log(w[0]/w[2])"
    assert problem.start == pytest.approx([np.log(2), np.log(0.4), np.log(0.6), 1.0, 0.0])
    assert not problem.spread_known
    given = ev.Model.from_log_posterior(
        "bare", lambda p: -jnp.sum(p["s"] ** 2), {"s": [1.0, 2.0]}, spread={"s": 3.0}
    )
    assert Problem(given).spread.tolist() == [3.0, 3.0]
    assert Problem(given).spread_known


def test_named_values_refuse_unknown_names():
    named = Named({"a": 1.0, "b": 2.0}, "parameter", "level")
    with pytest.raises(ev.DeclarationError, match=r"'level' asks for 'aa'.*There are: a, b.*'a'"):
        named["aa"]
    with pytest.raises(ev.DeclarationError, match=r"which is not in the data\. There are: none"):
        Named({}, "column", "level")["y"]
    doubled = jax.tree_util.tree_map(lambda x: 2 * x, named)
    assert isinstance(doubled, Named)
    assert dict(doubled) == {"a": 2.0, "b": 4.0}


# numpyro's distributions as they are


def test_numpyro_priors_give_the_same_evidence():
    numpyro = pytest.importorskip("numpyro.distributions")
    ours = {
        "mean": Normal(0.0, 2.0),
        "sd": HalfNormal(1.0),
        "rate": Gamma(2.0, 3.0),
        "w": Dirichlet([1.0, 2.0]),
    }
    theirs = {
        "mean": numpyro.Normal(np.float64(0.0), np.float64(2.0)),
        "sd": numpyro.HalfNormal(np.float64(1.0)),
        "rate": lambda p: numpyro.Gamma(2.0, 3.0),
        "w": numpyro.Dirichlet(np.array([1.0, 2.0])),
    }

    def terms(p, data):
        return level(p, data) - p["rate"] ** 2 + jnp.log(p["w"])[0]

    first = approximate(ev.Model("ours", ours, terms), {"y": Y})
    second = approximate(ev.Model("theirs", theirs, terms), {"y": Y})
    assert second.log_evidence == pytest.approx(first.log_evidence, abs=1e-6)
    assert second.log_likelihood_at_mode == pytest.approx(first.log_likelihood_at_mode, abs=1e-5)


# no parameters, and arrays of them


def test_a_model_without_parameters_is_its_likelihood():
    model = ev.Model(
        "fixed", {}, lambda p, d: Normal(p["m"], 1.0).log_prob(d["y"]), constants={"m": 0.5}
    )
    found = approximate(model, {"y": Y})
    exact = st.norm(0.5, 1.0).logpdf(Y).sum()
    assert found.log_evidence == pytest.approx(exact, abs=1e-12)
    assert found.bic == pytest.approx(-2 * exact, abs=1e-12)
    assert (found.dimension, found.terms, found.trust) == (0, 4, "unchecked")
    checked = ev.approximate(model, {"y": Y}, depth="quick")
    assert (checked.standard_error, checked.trust) == (0.0, "sound")
    assert found.table()["estimate"].tolist() == pytest.approx([exact] * 3)
    assert "fixed: log evidence" in repr(found)


def test_a_model_without_parameters_may_be_impossible():
    with pytest.warns(ev.EvidenceWarning, match="nan or -inf at every start"):
        found = ev.approximate(ev.Model("no", {}, lambda p: -jnp.inf), depth="none")
    assert np.isnan(found.log_evidence)
    assert found.trust == "failed"


def test_an_array_of_parameters_is_as_many_single_ones():
    def array_terms(p, data):
        return Normal(p["m"], 0.5).log_prob(data["y"])

    def single_terms(p, data):
        m = jnp.stack([p[f"m{k}"] for k in range(4)])
        return Normal(m, 0.5).log_prob(data["y"])

    one = approximate(ev.Model("array", {"m": Normal(0, 1, shape=(4,))}, array_terms), {"y": Y})
    four = {f"m{k}": Normal(0, 1) for k in range(4)}
    many = approximate(ev.Model("singles", four, single_terms), {"y": Y})
    exact = st.norm(0, np.sqrt(1.25)).logpdf(Y).sum()
    assert one.log_evidence == pytest.approx(exact, abs=1e-10)
    assert many.log_evidence == pytest.approx(exact, abs=1e-10)
    assert one.mode["m"] == pytest.approx(0.8 * Y, abs=1e-9)
