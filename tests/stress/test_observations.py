"""What single observations do to a verdict, against weighings without them."""

from __future__ import annotations

import functools
import json

import jax.numpy as jnp
import numpy as np
import pytest
from scipy import stats

import evidence as ev
from evidence.distributions import HalfNormal, Normal
from evidence.stress import stress_observations
from evidence.stress.recomputing import Recomputed
from evidence.stress.reweighing import left_out_by_draws, pulls, recomputed_without
from tests.stress import problems


@functools.cache
def reeds():
    return stress_observations(problems.two())


def without(*chosen):
    """The same weighing with rows taken out of the data."""
    fewer = {name: np.delete(column, chosen) for name, column in problems.SLOPED.items()}
    found = problems.weighed(
        problems.flat_model(), problems.sloped_model(), data=fewer, depth="none"
    )
    value = {k: r.laplace + r.second_order_term for k, r in found.items()}
    return value["sloped"] - value["flat"]


def test_the_strongest_are_those_of_a_weighing_without_them():
    (pair,) = reeds().pairs
    whole = without()
    for index in pair.order[:3]:
        assert pair.recomputed[index]
        assert pair.left_out[index] == pytest.approx(without(index) - whole, abs=1e-7)
    assert pair.without_two == pytest.approx(pair.lead + without(*pair.two) - whole, abs=1e-7)


def test_re_weighted_values_agree_with_weighings_without_the_observation():
    weighing = problems.two()
    for name in weighing:
        change, shape = left_out_by_draws(weighing[name])
        again = Recomputed(weighing[name])
        exact = [recomputed_without(again, [i]) for i in range(len(change))]
        np.testing.assert_allclose(change, exact, atol=0.05)
        assert np.all(shape < 0.7)


@pytest.mark.slow
def test_pulls_are_the_exact_derivatives_in_the_weights():
    for name, result in problems.two().items():
        f = ev.evidence_function(result.problem.model, problems.SLOPED)
        _, (_, exact) = f.value_and_gradient(weights=np.ones(len(problems.DEPTH)))
        np.testing.assert_allclose(pulls(result), exact, rtol=1e-5, atol=1e-6, err_msg=name)


def test_pull_and_left_out_of_a_gaussian_mean_are_the_closed_forms():
    """One datum out of a normal mean with known noise: evidences by scipy's multivariate normal."""
    y = np.array([0.3, -0.2, 0.5, 3.4, 0.1])

    def evidence(y, noise=1.0, sd=2.0):
        return stats.multivariate_normal.logpdf(y, cov=noise**2 * np.eye(len(y)) + sd**2)

    free = ev.Model(
        "free", {"m": Normal(0.0, 2.0)}, lambda p, d: Normal(p["m"], 1.0).log_prob(d["y"])
    )
    fixed = ev.Model("fixed", {}, lambda p, d: Normal(0.0, 1.0).log_prob(d["y"]))
    weighing = problems.weighed(free, fixed, data={"y": y}, depth="quick")
    result = stress_observations(weighing)
    (pair,) = result.pairs
    sign = 1.0 if result.leader == "free" else -1.0
    for i in range(5):
        rest = np.delete(y, i)
        exact = evidence(rest) - evidence(y) + stats.norm.logpdf(y[i])
        assert pair.left_out[i] == pytest.approx(sign * exact, abs=1e-6)
    # posterior mean of the term, which is Gaussian here: E[log N(y | m, 1)]
    precision = 5 + 0.25
    mean, var = y.sum() / precision, 1 / precision
    expected = stats.norm.logpdf(y, mean) - 0.5 * var - stats.norm.logpdf(y)
    np.testing.assert_allclose(pair.pull, sign * expected, atol=1e-6)
    outlier = int(pair.order[0])
    assert outlier == 3
    assert abs(pair.pull[outlier] + pair.left_out[outlier]) > 0.1  # two different questions


def carried(ends, heights):
    """Stems that do not depend on depth, and a few far out at which they do."""
    near = np.linspace(-0.5, 0.5, 10)
    x = np.concatenate([near, ends])
    y = np.concatenate([2.0 + 0.3 * np.cos(7.0 * np.arange(10)), heights])
    return stress_observations(
        problems.weighed(
            problems.flat_model(),
            problems.sloped_model(),
            data={"depth": x, "stems": y},
            depth="quick",
        )
    )


def test_an_observation_that_carries_the_verdict_is_named():
    result = carried([4.0], [4.2])
    (pair,) = result.pairs
    assert result.leader == "sloped"
    assert pair.carrier == 10
    assert pair.lead + pair.left_out[10] < 0 < pair.lead
    assert result.warnings[0].startswith("without observation 10 alone flat would lead by ")
    assert "it carries the lead of sloped" in result.summary
    assert reeds().pairs[0].carrier is None
    assert not any("carries" in text for text in reeds().warnings)


def test_two_observations_that_carry_the_verdict_together():
    result = carried([4.0, 4.3], [3.6, 3.8])
    (pair,) = result.pairs
    assert result.leader == "sloped"
    assert set(pair.two) == {10, 11}
    assert pair.carrier is None
    assert pair.without_two < 0 < pair.lead
    assert "they carry the lead of sloped" in result.warnings[0]
    assert result.summary.startswith("Without observations 1")


def test_table_text_and_files(tmp_path):
    result = reeds()
    table = result.table()
    assert list(table.columns) == list(table.attrs["columns"])
    assert len(table) == len(problems.DEPTH)
    assert sorted(table["rank"]) == list(range(1, len(table) + 1))
    assert table.loc[table["rank"] == 1, "left_out"].abs().item() == table.left_out.abs().max()
    text = repr(result)
    assert text.startswith(result.summary)
    assert len(text.splitlines()) <= 12
    result.report(tmp_path / "o.json")
    record = json.loads((tmp_path / "o.json").read_text())
    assert record["rows"][3]["observation"] == 3
    result.report(tmp_path / "o.csv")
    assert len((tmp_path / "o.csv").read_text().splitlines()) == 1 + len(table)


def test_picture_along_the_data():
    result = reeds()
    (axes,) = result.plot().axes
    assert axes.get_xlabel() == "observation"
    (axes,) = result.plot("flat", along="depth").axes
    assert axes.get_xlabel() == "depth"
    marks = np.concatenate([line.get_xdata() for line in axes.lines if line.get_marker() in "v^"])
    np.testing.assert_allclose(np.sort(marks), problems.DEPTH)
    with pytest.raises(ev.DeclarationError, match=r"'dept' is no column.*Did you mean 'depth'"):
        result.plot(along="dept")
    with pytest.raises(ev.DeclarationError, match=r"'curved' is no rival here. There are: flat"):
        result.plot("curved")


def summed_model(name="summed"):
    return ev.Model(
        name,
        {"level": Normal(2.0, 1.0), "noise": HalfNormal(0.5)},
        lambda p, data: jnp.sum(problems.flat(p, data)),
    )


def test_a_scalar_log_likelihood_is_refused_with_what_to_type(tmp_path):
    alone = problems.weighed(summed_model(), summed_model("other"), depth="none")
    with pytest.raises(ev.DeclarationError, match=r"returns the sum .* without \.sum\(\)"):
        stress_observations(alone)
    mixed = problems.weighed(problems.sloped_model(), problems.flat_model(), summed_model(),
                             depth="none")  # fmt: skip
    result = stress_observations(mixed)
    assert [pair.candidate for pair in result.pairs] == ["flat"]
    assert "summed returns the sum of its terms and is left out" in result.left_out[0]
    with pytest.raises(ev.DeclarationError, match="compares the leader with a rival"):
        stress_observations(problems.weighed(problems.flat_model(), depth="none"))
    with pytest.raises(ev.DeclarationError, match="recompute must be a whole number from 0 on"):
        stress_observations(mixed, recompute=-1)
    mixed.report(tmp_path / "w.json")
    with pytest.raises(ev.DeclarationError, match="a saved result holds no candidates"):
        stress_observations(ev.Weighing.from_json(tmp_path / "w.json"))


def test_without_an_audit_the_gaussian_is_drawn_and_weighed():
    weighing = problems.weighed(problems.flat_model(), problems.sloped_model(), depth="none")
    change, _ = left_out_by_draws(weighing["sloped"])
    again = Recomputed(weighing["sloped"])
    exact = [recomputed_without(again, [i]) for i in range(len(change))]
    np.testing.assert_allclose(change, exact, atol=0.1)
