"""What the pictures need: densities along directions, and how a result carries them."""

from __future__ import annotations

import json
import warnings

import jax.numpy as jnp
import numpy as np
import pytest
from matplotlib.figure import Figure

import evidence as ev
from evidence.complaints import DeclarationError
from evidence.distributions import HalfNormal, LogNormal, Normal, positive
from evidence.portrait import paint
from evidence.report.figures.gallery import CANDIDATE, WEIGHING


def approximate(model, data=None):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(model, data, depth="none")


def density(f, start, **options):
    return approximate(ev.Model.from_log_posterior("bare", f, start, **options))


def arrays(profile):
    return (np.array(profile[key], dtype=float) for key in ("steps", "log_density", "gaussian"))


def test_of_a_gaussian_the_lines_coincide():
    result = density(
        lambda p: -0.5 * (p["a"] ** 2 + 4.0 * (p["b"] - p["a"]) ** 2),
        {"a": 0.3, "b": 0.1},
        spread={"a": 3.0, "b": 3.0},
    )
    loosest, other = result.portrait["profiles"]
    assert (loosest["mode"], loosest["kind"]) == (1, "loosest, most skewed")
    for profile in (loosest, other):
        steps, true, gaussian = arrays(profile)
        assert true == pytest.approx(gaussian, abs=1e-4)
        assert gaussian == pytest.approx(-0.5 * steps**2, abs=1e-4)
    assert "a" in loosest["direction"]
    assert "b" in loosest["direction"]


def test_of_a_gamma_density_the_line_is_the_closed_form():
    # density of log x for Gamma(shape k, rate 1): k z - exp(z), mode log k, curvature k (by hand)
    k = 4.0
    result = density(
        lambda p: (k - 1.0) * jnp.log(p["x"]) - p["x"],
        {"x": 3.0},
        spread={"x": 1.0},
        support={"x": positive},
    )
    (profile,) = result.portrait["profiles"]
    steps, true, _ = arrays(profile)
    z = np.log(k) + steps / np.sqrt(k)
    assert true == pytest.approx(k * (z - np.log(k)) - np.exp(z) + k, rel=1e-5, abs=1e-5)
    assert (profile["kind"], profile["direction"]) == ("the only direction", "log x")


def test_the_most_skewed_direction_is_found_and_zero_density_is_none():
    def f(p):
        wall = jnp.where(p["b"] > -1.0, jnp.log1p(jnp.maximum(p["b"], -0.999999)), -jnp.inf)
        return -0.5 * (p["a"] / 3.0) ** 2 + 2.0 * wall - 2.0 * p["b"]

    result = density(f, {"a": 0.0, "b": 0.2}, spread={"a": 4.0, "b": 2.0})
    skewed, other = sorted(
        result.portrait["profiles"], key=lambda p: "most skewed" not in p["kind"]
    )
    assert (skewed["direction"], other["direction"]) == ("b", "a")
    assert None in skewed["log_density"]
    assert None not in other["log_density"]


def test_each_of_several_modes_has_its_lines():
    result = density(
        lambda p: jnp.logaddexp(-0.5 * (p["a"] + 3.0) ** 2, -2.0 * (p["a"] - 3.0) ** 2),
        {"a": -2.0},
        spread={"a": 4.0},
    )
    assert [p["mode"] for p in result.portrait["profiles"]] == [1, 2]


@pytest.fixture(scope="module")
def weighing():
    def model(name, curve):
        return ev.Model(
            name,
            {"mass": LogNormal(2.0, 0.5), "noise": HalfNormal(1.0)},
            lambda p, data: Normal(curve(p, data), p["noise"]).log_prob(data["y"]),
            predict=lambda p, data: {"y": curve(p, data)},
            simulate=lambda key, p, data: {"y": Normal(curve(p, data), p["noise"]).sample(key)},
            units={"y": "g"},
        )

    x = np.linspace(0.0, 5.0, 30)
    y = 8.0 * np.exp(-0.3 * x) + np.random.default_rng(3).normal(0.0, 0.3, 30)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.weigh(
            [
                model("decay", lambda p, data: p["mass"] * jnp.exp(-0.3 * data["x"])),
                model("flat", lambda p, data: p["mass"] + 0.0 * data["x"]),
            ],
            {"x": x, "y": y},
            depth="quick",
        )


def test_pictures_are_made_when_asked_for_and_only_then(weighing):
    assert all("pictures" not in c for c in weighing.to_dict()["candidates"])
    illustrated = weighing.to_dict(pictures=True)
    pictures = illustrated["candidates"][0]["pictures"]
    assert set(pictures) == {
        "profiles", "marginals", "source", "predictions", "checks", "trouble",
    }  # fmt: skip
    assert pictures["source"] == "refined"
    assert len(json.dumps(pictures)) < 60_000
    assert weighing["decay"].portrait is weighing["decay"].portrait
    assert all("pictures" not in c for c in weighing.to_dict()["candidates"])


def test_a_bad_candidate_fails_its_checks_and_a_good_one_does_not(weighing):
    failed = {
        name: [c["check"] for c in result.portrait["checks"] if c["failed"]]
        for name, result in weighing.items()
    }
    assert failed["decay"] == []
    assert "correlation of neighbouring residuals" in failed["flat"]


def test_the_page_of_a_saved_result_is_the_page_of_the_live_one(weighing, tmp_path):
    for name in ("live.json", "live.html"):
        weighing.report(tmp_path / name)
    back = ev.Weighing.from_json(tmp_path / "live.json")
    back.report(tmp_path / "back.html")
    assert (tmp_path / "back.html").read_bytes() == (tmp_path / "live.html").read_bytes()
    assert (tmp_path / "live.html").stat().st_size < 1_000_000
    assert back["decay"].portrait == weighing.to_dict(pictures=True)["candidates"][0]["pictures"]


def test_a_result_saved_without_pictures_has_none(weighing, tmp_path):
    from evidence.report.json_form import record_to_json

    (tmp_path / "numbers.json").write_text(record_to_json(weighing.to_dict()))
    back = ev.Weighing.from_json(tmp_path / "numbers.json")
    assert back["decay"].portrait == {}
    assert back.to_dict(pictures=True) == back.to_dict()
    back.report(tmp_path / "numbers.html")
    assert "none were saved" in (tmp_path / "numbers.html").read_text()


@pytest.mark.parametrize("picture", WEIGHING)
def test_plots_of_a_weighing(weighing, picture):
    assert isinstance(weighing.plot(picture), Figure)


@pytest.mark.parametrize("picture", CANDIDATE)
@pytest.mark.parametrize("saved", [False, True])
def test_plots_of_a_candidate(weighing, picture, saved, tmp_path):
    result = weighing["decay"]
    if saved:
        weighing.report(tmp_path / "r.json")
        result = ev.Weighing.from_json(tmp_path / "r.json")["decay"]
    figure = result.plot(picture)
    assert isinstance(figure, Figure)
    assert figure.axes[0].axison


def test_plots_of_the_parts(weighing):
    assert isinstance(weighing["decay"].posterior.plot(), Figure)
    assert isinstance(weighing["decay"].curvature.plot(), Figure)
    with pytest.raises(DeclarationError, match=r"knows the pictures overview, .*; got 'x'"):
        weighing.plot("x")
    with pytest.raises(DeclarationError, match=r"knows the pictures predictions, .*; got 'x'"):
        weighing["decay"].plot("x")


def test_trouble_in_the_users_functions_is_told_and_stops_nothing():
    model = ev.Model(
        "broken",
        {"a": Normal(0.0, 1.0)},
        lambda p, data: Normal(p["a"], 1.0).log_prob(data["y"]),
        predict=lambda p, data: {"y": p["b"]},
    )
    portrait = approximate(model, {"y": np.array([0.1, -0.2])}).portrait
    assert "asks for 'b'" in portrait["trouble"]
    assert (portrait["predictions"], portrait["checks"]) == ([], [])
    assert len(portrait["profiles"]) == 1


def test_a_candidate_without_parameters_or_without_a_peak():
    fixed = approximate(ev.Model("fixed", {}, lambda p, data: -jnp.sum(data["y"])), {"y": [1.0]})
    assert fixed.portrait["profiles"] == fixed.portrait["marginals"] == []
    flat = density(lambda p: 0.0 * p["a"], {"a": 1.0}, spread={"a": 1.0})
    assert flat.trust == "failed"
    assert flat.portrait["marginals"] == []
    assert isinstance(flat.plot(), Figure)
    assert paint(None, (), None) == {}
