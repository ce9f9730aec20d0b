"""Data sets of unlike length: filled up where that is sound, and only there."""

import jax.numpy as jnp
import numpy as np
import pytest

import evidence as ev
from evidence.batches.parts import Part, group_by_shape, learn_schema, length_class
from evidence.distributions import LogNormal, Normal
from tests.batches import batch_problems as problems

SLOPE = {"slope": Normal(0.0, 1.0), "level": Normal(0.0, 2.0)}


def _row_wise(p, data):
    return Normal(p["level"] + p["slope"] * data["x"], 0.5).log_prob(data["y"])


def _centred(p, data):
    away = data["x"] - jnp.mean(data["x"])
    return Normal(p["level"] + p["slope"] * away, 0.5).log_prob(data["y"])


def _cumulative(p, data):
    return Normal(p["level"] + p["slope"] * jnp.cumsum(data["x"][::-1])[::-1],
                  0.5).log_prob(data["y"])  # fmt: skip


def _autoregression(p, data):
    return Normal(p["level"] + p["slope"] * data["y"][:-1], 0.5).log_prob(data["y"][1:])


def _distances(p, data):
    gap = jnp.abs(data["x"][:, None] - data["x"][None, :])
    mean = jnp.exp(-gap) @ data["y"] / jnp.sum(jnp.exp(-gap), axis=1)
    return Normal(p["level"] + p["slope"] * mean, 0.5).log_prob(data["y"])


def _reads_length(p, data):
    """Row by row, but for the number of rows."""
    scaled = data["x"] / data["x"].shape[0]
    return Normal(p["level"] + p["slope"] * scaled, 0.5).log_prob(data["y"])


def _data(lengths, seed=0):
    rng = np.random.default_rng(seed)
    return [{"x": rng.uniform(0, 1, n), "y": rng.normal(size=n)} for n in lengths]


def _assert_equal_to_single_fits(function, lengths):
    model = ev.Model("tested", SLOPE, function)
    data = _data(lengths)
    batch = ev.weigh_many([model], data, depth="none").table()
    for k, columns in enumerate(data):
        single = ev.approximate(model, columns, depth="none")
        assert abs(batch.laplace[k] - single.laplace) < 1e-8


def test_row_wise_terms_are_filled_up_and_masked():
    _assert_equal_to_single_fits(_row_wise, [5, 9, 12, 31, 7])


@pytest.mark.slow
@pytest.mark.filterwarnings("ignore::evidence.EvidenceWarning")
@pytest.mark.parametrize(
    "function", [_centred, _cumulative, _autoregression, _distances, _reads_length]
)
def test_terms_that_read_other_rows_are_compiled_per_length(function):
    _assert_equal_to_single_fits(function, [5, 9, 9, 5, 9])


def test_too_many_lengths_are_refused_by_name_where_terms_read_other_rows():
    model = ev.Model("centred line", SLOPE, _centred)
    with pytest.raises(ev.DeclarationError, match="'centred line' is not row by row"):
        ev.weigh_many([model], _data(range(5, 25)), depth="none")


def test_a_scalar_log_likelihood_is_refused_where_lengths_differ():
    model = ev.Model("scalar line", SLOPE, lambda p, d: jnp.sum(_row_wise(p, d)))
    with pytest.raises(ev.DeclarationError, match="'scalar line' must return one term per obser"):
        ev.weigh_many([model], _data([5, 9]), depth="none")
    alike = ev.weigh_many([model], _data([6, 6]), depth="none").table()
    assert np.isfinite(alike.log_evidence).all()


@pytest.mark.slow
def test_a_prior_that_reads_the_data_is_not_filled_up():
    priors = {"level": lambda p, data: Normal(jnp.mean(data["y"]), jnp.std(data["y"]))}
    model = ev.Model("own prior", priors, lambda p, d: Normal(p["level"], 1.0).log_prob(d["y"]))
    data = [{"y": x["y"]} for x in _data([5, 9, 9, 5])]
    batch = ev.weigh_many([model], data, depth="none").table()
    for k, columns in enumerate(data):
        single = ev.approximate(model, columns, depth="none")
        assert abs(batch.laplace[k] - single.laplace) < 1e-8


@pytest.mark.slow
@pytest.mark.filterwarnings("ignore::evidence.EvidenceWarning")
def test_quick_audit_of_filled_up_data_sets_is_that_of_single_fits():
    data = problems.listed(12, lengths=(20, 14, 9))
    table = ev.weigh_many([problems.decaying()], data).table()
    for k in range(0, 12, 5):
        single = ev.approximate(problems.decaying(), data[k], depth="quick")
        assert abs(table.laplace[k] - single.laplace) < 1e-8
        allowed = 3 * np.hypot(single.standard_error, table.standard_error[k])
        assert abs(table.log_evidence[k] - single.log_evidence) < allowed


def test_a_grid_that_all_data_sets_have_is_not_filled_up():
    """The first data set has as many rows as the grid has points."""
    grid = np.linspace(0.0, 1.0, 8)

    def smooth(p, data):
        curve = p["level"] * jnp.sum(data["grid"]) / 4.0
        return Normal(curve, 0.5).log_prob(data["y"])

    model = ev.Model("smooth", {"level": LogNormal(0.0, 1.0)}, smooth)
    data = [{"grid": grid, "y": x["y"]} for x in _data([8, 5, 11])]
    batch = ev.weigh_many([model], data, depth="none").table()
    for k, columns in enumerate(data):
        assert abs(batch.laplace[k] - ev.approximate(model, columns, depth="none").laplace) < 1e-8


@pytest.mark.parametrize(
    ("length", "size"), [(1, 8), (8, 8), (9, 12), (13, 16), (17, 24), (97, 128)]
)
def test_length_classes(length, size):
    assert length_class(length) == size


def test_whole_numbers_and_others_share_a_group():
    listed = ({"y": np.array([1, 2])}, {"y": np.array([0.5, 1.5])})
    part = Part(first=0, names=(0, 1), listed=listed)
    groups, bad = group_by_shape(part, learn_schema(part, 0, 2), exact=False)
    assert not bad
    assert [g.columns["y"].dtype for g in groups] == [np.float64]


def test_filling_up_repeats_the_last_row():
    listed = tuple({"y": np.arange(1.0, n + 1)} for n in (3, 5))
    part = Part(first=0, names=(0, 1), listed=listed)
    (group,), _ = group_by_shape(part, learn_schema(part, 0, 3), exact=False)
    np.testing.assert_array_equal(group.columns["y"][0], [1, 2, 3, 3, 3, 3, 3, 3])
    np.testing.assert_array_equal(group.kept, [3, 5])
