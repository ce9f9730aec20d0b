"""weigh_many against approximate, row by row, and its table, order and options."""

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.stats import multivariate_normal

import evidence as ev
from evidence.distributions import HalfNormal, LogNormal, Normal
from tests.batches import batch_problems as problems

COLUMNS = ["data_set", "candidate", "log_evidence", "standard_error", "laplace", "probability",
           "trust", "status"]  # fmt: skip


@pytest.fixture(scope="module")
def quick():
    return ev.weigh_many(problems.both(), problems.stacked(60), shared={"t": problems.TIMES})


@pytest.mark.filterwarnings("ignore::evidence.EvidenceWarning")
def test_laplace_is_that_of_a_single_fit(quick):
    data, table = problems.stacked(60)["y"], quick.table()
    for k in range(0, 60, 7):
        for j, model in enumerate(problems.both()):
            single = ev.approximate(model, {"t": problems.TIMES, "y": data[k]}, depth="none")
            row = table.iloc[2 * k + j]
            assert (row.data_set, row.candidate) == (k, model.name)
            assert abs(row.laplace - single.laplace) < 1e-8


def test_log_evidence_is_right_within_its_error(quick):
    """The constant candidate is one-dimensional: quadrature gives its evidence."""
    from scipy.integrate import quad
    from scipy.stats import norm

    data, table = problems.stacked(60)["y"], quick.table()
    rows = table[table.candidate == "constant"]
    for k in range(0, 60, 13):
        top = norm.logpdf(data[k], data[k].mean(), 0.2).sum()

        def density(z, k=k, top=top):
            return np.exp(norm.logpdf(data[k], np.exp(z), 0.2).sum() - top) * norm.pdf(z, 1.0, 0.5)

        middle = np.log(data[k].mean())
        truth = top + np.log(quad(density, middle - 1, middle + 1, points=[middle])[0])
        row = rows.iloc[k]
        assert abs(row.log_evidence - truth) < 3 * row.standard_error
        assert row.trust in ("sound", "corrected")


def test_table_has_its_columns_in_the_order_given(quick):
    table = quick.table()
    assert list(table.columns) == COLUMNS
    assert set(table.attrs["columns"]) == set(COLUMNS)
    assert list(table.data_set) == [k for k in range(60) for _ in range(2)]
    sums = table.groupby("data_set").probability.sum()
    np.testing.assert_allclose(sums, 1.0)


def test_the_right_candidate_is_settled_for(quick):
    table = quick.table().pivot(index="data_set", columns="candidate", values="probability")
    decays = np.arange(60) % 3 != 0
    assert np.all(table["decay"][decays] > 0.95)
    assert np.mean(table["constant"][~decays] > 0.9) > 0.8
    assert quick.counts["settled"] >= 50
    assert "60 data sets" in quick.summary
    assert len(repr(quick).splitlines()) <= 12


@pytest.mark.slow
def test_one_thread_two_threads_and_small_parts_give_the_same_digits(quick):
    again = ev.weigh_many(problems.both(), problems.stacked(60), shared={"t": problems.TIMES},
                          threads=2, part_size=17)  # fmt: skip
    one, other = quick.table(), again.table()
    np.testing.assert_allclose(one.laplace, other.laplace, atol=1e-9)
    np.testing.assert_allclose(one.log_evidence, other.log_evidence, atol=1e-9)
    np.testing.assert_allclose(one.standard_error, other.standard_error, atol=1e-9)
    assert list(one.trust) == list(other.trust)


def test_another_seed_moves_only_the_errors(quick):
    again = ev.weigh_many(problems.both(), problems.stacked(60), shared={"t": problems.TIMES},
                          seed=1)  # fmt: skip
    np.testing.assert_allclose(quick.table().laplace, again.table().laplace, atol=1e-8)
    assert not np.array_equal(quick.table().standard_error, again.table().standard_error)


@pytest.mark.slow
def test_a_list_of_dicts_gives_what_stacked_arrays_give(quick):
    again = ev.weigh_many(problems.both(), iter(problems.listed(60)))
    np.testing.assert_allclose(quick.table().laplace, again.table().laplace, atol=1e-9)


def test_depth_none_is_unchecked_and_has_no_error():
    batch = ev.weigh_many(problems.both(), problems.stacked(20), shared={"t": problems.TIMES},
                          depth="none")  # fmt: skip
    assert set(batch.table().trust) == {"unchecked"}
    assert batch.table().standard_error.isna().all()
    assert batch.counts["settled"] == 0


def _two_peaks(p, data):
    return Normal(p["side"] ** 2, 0.3).log_prob(data["y"])


def test_each_mode_of_the_template_is_followed_and_summed():
    model = ev.Model("two sides", {"side": Normal(0.2, 1.0)}, _two_peaks)
    y = 1.0 + 0.3 * np.random.default_rng(4).normal(size=(16, 6))
    batch = ev.weigh_many([model], {"y": y}, depth="none").table()
    for k in range(0, 16, 5):
        single = ev.approximate(model, {"y": y[k]}, depth="none")
        assert len(single.modes) == 2
        assert abs(batch.laplace[k] - single.laplace) < 1e-8
        assert abs(batch.log_evidence[k] - single.laplace_all_modes) < 1e-8


def test_candidates_without_parameters_are_exact():
    fixed = ev.Model("fixed", {}, problems.constant, constants={"mass": 3.0})
    data = problems.stacked(5)
    batch = ev.weigh_many([fixed], data, shared={"t": problems.TIMES}).table()
    covariance = 0.04 * np.eye(20)
    expected = [multivariate_normal(np.full(20, 3.0), covariance).logpdf(y) for y in data["y"]]
    np.testing.assert_allclose(batch.log_evidence, expected, rtol=1e-12)
    assert set(batch.trust) == {"sound"}
    assert set(batch.standard_error) == {0.0}


def test_a_prior_that_reads_the_data_is_centred_anew_in_each_data_set():
    priors = {"mass": lambda p, data: LogNormal(jnp.log(jnp.mean(data["y"])), 0.3)}
    model = ev.Model("near the mean", priors, problems.constant)
    data = problems.stacked(8)
    batch = ev.weigh_many([model], data, shared={"t": problems.TIMES}, depth="none").table()
    for k in range(8):
        columns = {"t": problems.TIMES, "y": data["y"][k]}
        assert abs(batch.laplace[k] - ev.approximate(model, columns, depth="none").laplace) < 1e-8


@pytest.mark.filterwarnings("ignore::evidence.EvidenceWarning")
def test_standard_depth_climbs_row_by_row_as_approximate_does():
    def skewed(p, data):
        return Normal(p["a"] * p["b"], 0.1).log_prob(data["y"])

    model = ev.Model("product", {"a": LogNormal(0.0, 1.0), "b": LogNormal(0.0, 1.0)}, skewed)
    y = np.random.default_rng(2).uniform(0.5, 2.0, size=(3, 4)).mean(axis=1, keepdims=True)
    quick = ev.weigh_many([model], {"y": y}).table()
    climbed = ev.weigh_many([model], {"y": y}, depth="standard").table()
    for k in range(3):
        if quick.trust[k] == "doubtful":
            single = ev.approximate(model, {"y": y[k]}, depth="standard")
            assert climbed.log_evidence[k] == single.log_evidence
            assert climbed.trust[k] == single.trust
        else:
            assert climbed.log_evidence[k] == quick.log_evidence[k]
    assert set(climbed.trust) <= {"sound", "corrected", "rough"}


def test_a_bare_log_posterior_without_spread_is_doubtful():
    model = ev.Model.from_log_posterior(
        "bare", lambda p, data: -0.5 * jnp.sum((p["x"] - data["y"]) ** 2), {"x": 0.0}
    )
    batch = ev.weigh_many([model], {"y": np.arange(4.0)[:, None]}).table()
    np.testing.assert_allclose(batch.log_evidence, 0.5 * np.log(2 * np.pi), atol=0.03)
    assert set(batch.trust) == {"doubtful"}
    assert set(batch.status) == {"NO_SPREAD"}


def test_a_bare_log_posterior_without_decay_has_no_number():
    model = ev.Model.from_log_posterior(
        "open", lambda p, data: -jnp.logaddexp(0.0, -((p["x"] - data["y"][0]) ** 2)) * 0.0
        + jnp.exp(-0.5 * (p["x"] - data["y"][0]) ** 2), {"x": 0.1}, spread={"x": 1.0},
    )  # fmt: skip
    batch = ev.weigh_many([model], {"y": np.zeros((2, 1))}).table()
    assert set(batch.trust) == {"failed"}
    assert set(batch.status) == {"UNBOUNDED"}
    assert batch.log_evidence.isna().all()


def test_prior_probabilities_move_the_probabilities():
    data = problems.stacked(6)
    even = ev.weigh_many(problems.both(), data, shared={"t": problems.TIMES}, depth="none")
    odd = ev.weigh_many(problems.both(), data, shared={"t": problems.TIMES}, depth="none",
                        prior_probabilities={"decay": 0.2, "constant": 0.8})  # fmt: skip
    one, other = even.table(), odd.table()
    factor = np.exp(even.log_bayes_factors("decay", "constant"))
    np.testing.assert_allclose(one.probability[::2], factor / (1 + factor))
    np.testing.assert_allclose(other.probability[::2], factor / (4 + factor))


def test_models_and_options_are_checked():
    data = problems.stacked(3)
    with pytest.raises(ev.DeclarationError, match=r"on_bad must be 'record' or 'raise'; got 'no'"):
        ev.weigh_many(problems.both(), data, on_bad="no")
    with pytest.raises(ev.DeclarationError, match="depth must be one of"):
        ev.weigh_many(problems.both(), data, depth="deep")
    with pytest.raises(ev.DeclarationError, match="threads must be a whole number from 1 on"):
        ev.weigh_many(problems.both(), data, threads=0)
    other = ev.Model("half", {"s": HalfNormal(1.0)}, lambda p, d: Normal(0.0, 1.0).log_prob(
        d["y"][:10]) * p["s"])  # fmt: skip
    with pytest.raises(ev.DeclarationError, match="different numbers of log-likelihood terms"):
        ev.weigh_many([*problems.both(), other], data, shared={"t": problems.TIMES})
    with pytest.raises(ev.DeclarationError, match="no candidate is named 'decai'"):
        ev.weigh_many(problems.both(), data, shared={"t": problems.TIMES},
                      depth="none").log_bayes_factors("decai", "constant")  # fmt: skip
