"""Conditioning, directions in the user's words, what the data determine and what the prior."""

from __future__ import annotations

import warnings

import jax.numpy as jnp
import numpy as np
import pytest

import evidence as ev
from evidence.curvature import combination, measure_curvature, whitened_axes
from evidence.distributions import Normal

NAMES = ("log rate_1", "log rate_2", "mass")


def measure(hessian, likelihood=None, spread=1e3, names=NAMES):
    hessian = np.asarray(hessian, float)
    d = len(hessian)
    axes = whitened_axes(hessian, np.full(d, spread))
    return axes, measure_curvature(hessian, likelihood, axes, names[:d])


def random_hessian(seed, d=3):
    root = np.random.default_rng(seed).normal(size=(d, d))
    return root @ root.T + 0.1 * np.eye(d)


@pytest.mark.parametrize("seed", range(5))
def test_axes_whiten_and_give_the_determinant(seed):
    hessian = random_hessian(seed)
    axes, curvature = measure(hessian)
    assert axes.directions.T @ hessian @ axes.directions == pytest.approx(np.eye(3), abs=1e-12)
    assert axes.columns @ axes.columns.T == pytest.approx(np.linalg.inv(hessian), abs=1e-12)
    half = 0.5 * np.linalg.slogdet(hessian)[1]
    assert axes.half_log_det == curvature.half_log_det == pytest.approx(half, abs=1e-13)
    assert axes.positive
    assert not axes.capped.any()


def test_units_do_not_count_in_the_scaled_condition():
    """A raw condition number of 1e10 is 3 after scaling to a unit diagonal."""
    tame = np.array([[1.0, 0.5], [0.5, 1.0]])
    units = np.diag([1.0, 1e-5])
    hessian = units @ tame @ units
    assert np.linalg.cond(hessian) > 1e9
    axes, curvature = measure(hessian, spread=1e7)
    assert curvature.scaled_condition == pytest.approx(3.0, rel=1e-9)
    assert not curvature.badly_conditioned
    assert axes.half_log_det == pytest.approx(0.5 * np.log(0.75) + np.log(1e-5), abs=1e-12)


def test_a_bad_scaled_condition_is_called_so():
    hessian = np.array([[1.0, 1.0 - 1e-7], [1.0 - 1e-7, 1.0]])
    _, curvature = measure(hessian)
    assert curvature.scaled_condition == pytest.approx(2e7, rel=1e-6)
    assert curvature.badly_conditioned
    assert curvature.directions[0].combination == "0.71 log rate_1 - 0.71 log rate_2"
    assert curvature.directions[0].sd == pytest.approx(1e7**0.5, rel=1e-6)


@pytest.mark.parametrize(
    "hessian", [[[1.0, 0.0], [0.0, 0.0]], [[1.0, 0.0], [0.0, -1.0]], [[1.0, 1.0], [1.0, 1.0]]]
)
def test_nothing_is_repaired_where_there_is_no_peak(hessian):
    axes, curvature = measure(hessian, likelihood=np.asarray(hessian))
    assert not axes.positive
    assert np.isnan(axes.half_log_det)
    assert np.isnan(curvature.half_log_det)
    assert np.isnan(curvature.well_determined)
    assert curvature.from_prior == ()


def test_axes_are_at_most_three_prior_sd_long():
    axes, _ = measure(np.diag([1.0, 1e-4]), spread=2.0)
    (long,) = np.flatnonzero(axes.capped)
    assert np.abs(axes.columns[:, long]) == pytest.approx([0.0, 6.0], abs=1e-12)
    assert np.abs(axes.directions[:, long]) == pytest.approx([0.0, 100.0], abs=1e-10)
    assert np.abs(axes.columns[:, 1 - long]) == pytest.approx([1.0, 0.0], abs=1e-12)


@pytest.mark.parametrize(
    ("unit", "words"),
    [
        ([0.71, -0.70, 0.0], "0.71 log rate_1 - 0.70 log rate_2"),
        ([-0.71, 0.70, 0.0], "0.71 log rate_1 - 0.70 log rate_2"),
        ([-0.6, -0.8, 0.0], "0.80 log rate_2 + 0.60 log rate_1"),
        ([0.0, 0.0, -1.0], "mass"),
        ([0.99, 0.1, 0.0], "log rate_1"),
    ],
)
def test_a_direction_in_words(unit, words):
    assert combination(np.array(unit), NAMES) == words


def test_a_long_direction_is_cut():
    unit = np.full(9, 1 / 3)
    text = combination(unit, [f"a{k}" for k in range(9)])
    assert text == "0.33 a0 + 0.33 a1 + 0.33 a2 + 0.33 a3 and 5 more"


def test_shares_of_the_data_and_of_the_prior():
    """Diagonal parts: each direction's share is its own ratio, by hand."""
    likelihood, prior = np.diag([9.0, 1.0, 0.01]), np.diag([1.0, 1.0, 1.0])
    _, curvature = measure(likelihood + prior, likelihood)
    expected = [0.01 / 1.01, 0.5, 0.9]
    assert [x.share_from_data for x in curvature.from_prior] == pytest.approx(expected, abs=1e-12)
    assert [x.combination for x in curvature.from_prior] == ["mass", "log rate_2", "log rate_1"]
    assert [x.sd for x in curvature.from_prior] == pytest.approx(np.array([1.01, 2, 10]) ** -0.5)
    assert curvature.well_determined == pytest.approx(sum(expected), abs=1e-12)
    assert [x.combination for x in curvature.held_by_prior] == ["mass"]
    assert repr(curvature).splitlines()[1] == "  well-determined parameters 1.41 of 3"


@pytest.mark.parametrize("seed", range(4))
def test_well_determined_is_the_trace(seed):
    """tr(H^-1 H_likelihood), MacKay (1992), in any coordinates."""
    likelihood = random_hessian(seed)
    hessian = likelihood + np.diag([1.0, 0.2, 3.0])
    _, curvature = measure(hessian, likelihood)
    trace = np.trace(np.linalg.solve(hessian, likelihood))
    assert curvature.well_determined == pytest.approx(trace, abs=1e-12)
    change = np.random.default_rng(seed + 50).normal(size=(3, 3))
    _, other = measure(change.T @ hessian @ change, change.T @ likelihood @ change)
    assert other.well_determined == pytest.approx(trace, abs=1e-9)
    smallest = [c.from_prior[0].share_from_data for c in (curvature, other)]
    assert smallest[0] == pytest.approx(smallest[1], abs=1e-9)


def test_shares_outside_zero_to_one_are_shown_as_they_are():
    """A Cauchy prior in its tail curves the other way."""
    likelihood, prior = np.diag([2.0, 1.0]), np.diag([-0.1, 1.0])
    _, curvature = measure(likelihood + prior, likelihood)
    assert curvature.from_prior[-1].share_from_data == pytest.approx(2.0 / 1.9)


def test_table_and_texts():
    _, curvature = measure(random_hessian(1), random_hessian(1) * 0.5)
    table = curvature.table()
    assert list(table) == list(table.attrs["columns"]) == ["combination", "sd", "share_from_data"]
    assert table["share_from_data"].tolist() == pytest.approx([0.5] * 3)
    assert table["sd"].tolist() == [x.sd for x in curvature.directions]
    assert repr(curvature).startswith("Curvature: scaled condition number ")
    wide = np.eye(40)
    _, many = measure(wide, wide, names=[f"a{k}" for k in range(40)])
    assert len(repr(many).splitlines()) <= 12


# through approximate


def regression(design, prior_sd, noise):
    d = design.shape[1]
    return ev.Model(
        "regression",
        {"b": Normal(0.0, prior_sd, shape=(d,))},
        lambda p, data: Normal(data["design"] @ p["b"], noise).log_prob(data["y"]),
    )


def test_well_determined_of_a_linear_regression():
    """Closed form: sum of s^2 / (s^2 + noise^2 / prior^2) over the singular values."""
    rng = np.random.default_rng(0)
    design = rng.normal(size=(15, 3)) * [3.0, 0.9, 0.3]
    data = {"design": design, "y": rng.normal(size=15)}
    result = ev.approximate(regression(design, 0.7, 1.3), data, depth="none")
    values = np.linalg.svd(design, compute_uv=False) ** 2
    expected = np.sum(values / (values + 1.3**2 / 0.7**2))
    assert result.well_determined == pytest.approx(expected, abs=1e-10)
    assert result.curvature.hessian == pytest.approx(
        design.T @ design / 1.3**2 + np.eye(3) / 0.7**2, abs=1e-10
    )


def test_a_parameter_held_by_the_prior_is_told():
    """The likelihood never reads one of two parameters."""
    model = ev.Model(
        "idle",
        {"read": Normal(0.0, 1.0), "idle": Normal(0.0, 1.0)},
        lambda p, data: Normal(p["read"], 1.0).log_prob(data["y"]),
    )
    with pytest.warns(ev.EvidenceWarning, match=r"idle is held by the prior alone \(0\.0 %"):
        result = ev.approximate(model, {"y": np.arange(8.0)}, depth="none")
    assert result.well_determined == pytest.approx(8 / 9, abs=1e-10)
    assert [x.combination for x in result.curvature.held_by_prior] == ["idle"]


def test_a_badly_conditioned_fit_is_told_with_the_direction():
    """Only the sum of two parameters is measured, and it very well."""
    model = ev.Model(
        "sum",
        {"one": Normal(0.0, 1.0), "two": Normal(0.0, 1.0)},
        lambda p, data: Normal(p["one"] + p["two"], 1e-4).log_prob(data["y"]),
    )
    with pytest.warns(ev.EvidenceWarning, match="badly conditioned.*0.71 one - 0.71 two"):
        result = ev.approximate(model, {"y": np.full(3, 1.0)}, depth="none")
    assert result.curvature.badly_conditioned


def test_the_jacobian_counts_with_the_prior():
    """log-normal in z is Gaussian: its share is its precision's, whatever the Jacobian adds."""
    model = ev.Model(
        "rate",
        {"rate": ev.distributions.LogNormal(0.0, 0.5)},
        lambda p, data: Normal(jnp.log(p["rate"]), 0.25).log_prob(data["y"]),
    )
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        result = ev.approximate(model, {"y": np.array([0.3])}, depth="none")
    assert result.well_determined == pytest.approx(16 / (16 + 4), abs=1e-12)
    assert result.curvature.directions[0].combination == "log rate"


def test_a_bare_log_posterior_has_no_shares():
    model = ev.Model.from_log_posterior("bare", lambda p: -0.5 * p["a"] ** 2, {"a": 1.0})
    result = ev.approximate(model, depth="none")
    assert np.isnan(result.well_determined)
    assert np.isnan(result.curvature.directions[0].share_from_data)
    assert np.isnan(result.log_occam_factor)
    assert np.isnan(result.bic)
