"""Weighing candidates: what goes in, what comes out, and what is refused before any fit."""

from __future__ import annotations

import json
import warnings

import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats as st

import evidence as ev
from evidence import weighing as room
from evidence.distributions import HalfNormal, Normal
from evidence.weighing import COLUMNS, Weighing

DATA = {"days": np.arange(6.0), "grams": np.array([10.2, 8.9, 8.3, 7.1, 6.4, 5.2])}  # invented


def flat_terms(p, data):
    return Normal(p["mass"], p["noise"]).log_prob(data["grams"])


def slope_terms(p, data):
    return Normal(p["mass"] + p["slope"] * data["days"], p["noise"]).log_prob(data["grams"])


MASS, NOISE = Normal(8.0, 3.0), HalfNormal(1.0)
FLAT = ev.Model("flat", {"mass": MASS, "noise": NOISE}, flat_terms, units={"mass": "g"})
SLOPE = ev.Model("slope", {"mass": MASS, "slope": Normal(0.0, 1.0), "noise": NOISE}, slope_terms)
IMPOSSIBLE = ev.Model(
    "impossible", {"mass": MASS}, lambda p, data: -jnp.inf * jnp.ones(6) + p["mass"]
)


def weigh(models, data=DATA, **options):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.weigh(models, data, **{"depth": "none", **options})


@pytest.fixture(scope="module")
def weighing():
    return weigh([FLAT, SLOPE])


@pytest.fixture(scope="module")
def with_failed():
    return weigh([FLAT, IMPOSSIBLE, SLOPE], prior_probabilities=[1, 2, 1])


def test_it_is_a_mapping_in_the_order_given(weighing):
    assert list(weighing) == ["flat", "slope"]
    assert len(weighing) == 2
    assert isinstance(weighing["flat"], ev.Approximation)
    assert dict(weighing.items())["slope"] is weighing["slope"]
    with pytest.raises(KeyError, match=r"no candidate is named 'slop'.*flat, slope.*'slope'"):
        weighing["slop"]


def test_each_candidate_is_what_approximate_gives(weighing):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        alone = ev.approximate(SLOPE, DATA, depth="none")
    assert weighing["slope"].log_evidence == pytest.approx(alone.log_evidence, abs=1e-9)


def test_bayes_factors_against_the_leader_or_any_other(weighing):
    gap = weighing["slope"].log_evidence - weighing["flat"].log_evidence
    assert gap > 1
    assert weighing.leader == "slope"
    assert weighing.log_bayes_factors() == {"flat": pytest.approx(-gap), "slope": 0.0}
    assert weighing.log_bayes_factors(against="flat") == {"flat": 0.0, "slope": pytest.approx(gap)}
    with pytest.raises(KeyError, match=r"no candidate is named 'flta'.*Did you mean 'flat'"):
        weighing.log_bayes_factors(against="flta")
    odds = weighing.probabilities["slope"] / weighing.probabilities["flat"]
    assert np.log(odds) == pytest.approx(gap, abs=1e-9)


def test_the_table_has_its_columns_in_the_order_given(weighing):
    table = weighing.table()
    expected = [
        "candidate",
        "log_evidence",
        "standard_error",
        "log_bayes_factor",
        "probability",
        "fit",
        "occam_factor",
        "well_determined",
        "bic",
        "trust",
    ]
    assert list(table) == expected == list(table.attrs["columns"]) == list(COLUMNS)
    assert table["candidate"].tolist() == ["slope", "flat"]  # by log evidence
    total = table["fit"] + table["occam_factor"]
    assert total.tolist() == pytest.approx(table["log_evidence"].tolist())
    assert table["trust"].tolist() == ["unchecked"] * 2
    assert table["standard_error"].isna().all()
    units = {name: text for name, text in COLUMNS.items() if "nats]" in text}
    assert set(units) == {"log_evidence", "standard_error", "log_bayes_factor", "fit", "bic",
                          "occam_factor"}  # fmt: skip
    assert "MacKay (1992)" in COLUMNS["well_determined"]


def test_a_failed_candidate_has_no_number(with_failed):
    failed = with_failed["impossible"]
    assert (failed.trust, np.isnan(failed.log_evidence)) == ("failed", True)
    assert np.isnan(with_failed.probabilities["impossible"])
    assert sum(with_failed.probabilities[k] for k in ("flat", "slope")) == pytest.approx(1.0)
    assert not with_failed.settled
    assert "leaving out impossible, which failed" in with_failed.verdict
    assert with_failed.prior_probabilities == {"flat": 0.25, "impossible": 0.5, "slope": 0.25}
    assert with_failed.table()["candidate"].tolist()[-1] == "impossible"
    assert np.isnan(with_failed.log_bayes_factors("impossible")["flat"])


def test_unchecked_numbers_settle_nothing(weighing):
    assert not weighing.settled
    assert weighing.verdict.startswith("Not settled: slope leads with probability")
    assert weighing.verdict.endswith("The log evidences are unchecked.")
    assert weighing.summary == weighing.verdict
    assert all(np.isnan(weighing.probability_intervals[k]).all() for k in weighing)


def test_prior_probabilities_are_made_to_add_up(weighing):
    assert weighing.prior_probabilities == {"flat": 0.5, "slope": 0.5}
    for given in ([3, 1], {"slope": 0.1, "flat": 0.3}, np.array([0.6, 0.2])):
        found = weigh([FLAT, SLOPE], prior_probabilities=given)
        assert found.prior_probabilities == pytest.approx({"flat": 0.75, "slope": 0.25})
    log_odds = np.log(found.probabilities["flat"] / found.probabilities["slope"])
    factor = found["flat"].log_evidence - found["slope"].log_evidence
    assert log_odds == pytest.approx(factor + np.log(3.0), abs=1e-9)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ([1.0], "prior_probabilities needs 2 numbers; got 1"),
        (0.5, "prior_probabilities needs 2 numbers"),
        ("ab", "prior_probabilities needs 2 numbers; got 1"),
        ([1.0, 0.0], "must be positive numbers"),
        ([1.0, -1.0], "must be positive numbers"),
        ([1.0, np.nan], "must be positive numbers"),
        (["half", "half"], "must be positive numbers; got .*half"),
        ({"flat": 1.0}, "each candidate once: flat, slope; 'slope' is missing"),
        ({"flat": 1.0, "slop": 1.0}, "'slop' is unknown.*Did you mean 'slope'"),
    ],
)
def test_prior_probabilities_that_are_none(given, words):
    with pytest.raises(ev.DeclarationError, match=words):
        ev.weigh([FLAT, SLOPE], DATA, prior_probabilities=given, depth="none")


@pytest.mark.parametrize(
    ("models", "words"),
    [
        ([], r"needs a list of candidates.*Type: ev.weigh\("),
        ([FLAT, "slope"], "needs a list of candidates made with evidence.Model; got str"),
        (3, "needs a list of candidates.*got 3"),
        ([FLAT, FLAT], "different names; got 'flat' twice"),
    ],
)
def test_candidates_that_are_none(models, words):
    with pytest.raises(ev.DeclarationError, match=words):
        ev.weigh(models, DATA, depth="none")


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"depth": "deep"}, "depth must be one of none, quick, standard, thorough; got 'deep'"),
        ({"depth": "standart"}, "Did you mean 'standard'"),
        ({"depth": None}, "depth must be one of"),
        ({"seed": -1}, "seed must be a whole number from 0 on; got -1"),
        ({"seed": 1.5}, "seed must be a whole number"),
        ({"seed": True}, "seed must be a whole number"),
    ],
)
def test_options_that_are_none(options, words):
    with pytest.raises(ev.DeclarationError, match=words):
        ev.weigh([FLAT], DATA, **options)
    with pytest.raises(ev.DeclarationError, match=words):
        ev.approximate(FLAT, DATA, **options)


def test_candidates_must_weigh_the_same_observations(monkeypatch):
    """Refused before the first fit, however long that takes."""
    fitted = []
    monkeypatch.setattr(room, "fit", lambda *a, **k: fitted.append(a))
    lagged = ev.Model(
        "lagged", {"mass": MASS}, lambda p, d: Normal(p["mass"], 1.0).log_prob(d["grams"][1:])
    )
    words = "different numbers of log-likelihood terms.*got 'flat' 6, 'lagged' 5.*every observation"
    with pytest.raises(ev.DeclarationError, match=words):
        ev.weigh([FLAT, lagged], DATA, depth="none")
    assert fitted == []


def test_a_scalar_beside_terms_is_allowed():
    scalar = ev.Model(
        "summed", {"mass": MASS, "noise": NOISE}, lambda p, d: jnp.sum(flat_terms(p, d))
    )
    found = weigh([FLAT, scalar])
    assert found["summed"].log_evidence == pytest.approx(found["flat"].log_evidence, abs=1e-9)
    assert found["summed"].terms is None
    assert np.isnan(found["summed"].bic)
    assert found.to_dict()["data"]["terms"] == 6


def test_one_model_alone_and_without_data():
    model = ev.Model("alone", {"a": Normal(0.0, 1.0)}, lambda p: Normal(p["a"], 1.0).log_prob(2.0))
    found = weigh(model, None)
    assert found["alone"].log_evidence == pytest.approx(st.norm(0, 2**0.5).logpdf(2.0), abs=1e-10)
    assert "alone is the only candidate" in found.verdict
    assert found.probabilities == {"alone": 1.0}


def test_warnings_name_the_candidate_and_the_callers_line():
    with pytest.warns(ev.EvidenceWarning, match="impossible: the log density is nan or") as caught:
        ev.weigh([IMPOSSIBLE], DATA, depth="none")
    with pytest.warns(ev.EvidenceWarning) as alone:
        ev.approximate(IMPOSSIBLE, DATA, depth="none")
    assert [w.filename for w in (*caught, *alone)] == [__file__, __file__]


def test_progress_is_told_by_candidate():
    told = []
    weigh([FLAT, SLOPE], progress=told.append)
    assert told[0] == "flat: mode search from 8 starts"
    assert any(words.startswith("slope: ") for words in told)


def test_the_same_seed_gives_the_same_record():
    def timeless(found):
        record = json.loads(json.dumps(found.to_dict()))
        for key in ("created", "run_seconds"):
            del record[key]
        for candidate in record["candidates"]:
            del candidate["seconds"]
        return json.dumps(record)

    again = [weigh([FLAT, SLOPE], seed=5) for _ in range(3)]
    assert timeless(again[1]) == timeless(again[2])  # the first of all fits has another driver


# what is saved


def _same(one, other):
    """Equal, with nan and None taken for the same."""
    if isinstance(one, dict):
        return one.keys() == other.keys() and all(_same(one[k], other[k]) for k in one)
    if isinstance(one, (list, tuple)):
        return len(one) == len(other) and all(map(_same, one, other))
    if isinstance(one, float) and np.isnan(one):
        return other is None or np.isnan(other)
    return one == other


def test_the_comparison_of_records_can_fail():
    assert _same({"a": [np.nan, 1.0]}, {"a": [None, 1.0]})
    assert not _same({"a": [np.nan, 1.0]}, {"a": [None, 1.1]})
    assert not _same({"a": 1}, {"a": 1, "b": 2})


@pytest.mark.parametrize("which", ["weighing", "with_failed"])
def test_json_there_and_back(which, request, tmp_path):
    weighing = request.getfixturevalue(which)
    weighing.report(tmp_path / "one.json")
    back = Weighing.from_json(tmp_path / "one.json")
    assert _same(weighing.to_dict(pictures=True), back.to_dict(pictures=True))
    assert list(back) == list(weighing)
    assert (back.verdict, back.leader, back.settled) == (
        weighing.verdict,
        weighing.leader,
        weighing.settled,
    )
    assert back.table().equals(weighing.table())
    assert _same(back.probabilities, weighing.probabilities)
    assert back.log_bayes_factors("flat") == pytest.approx(
        weighing.log_bayes_factors("flat"), nan_ok=True
    )
    assert repr(back) == repr(weighing)
    assert back["slope"].posterior.table().equals(weighing["slope"].posterior.table())
    assert back["slope"].curvature.summary == weighing["slope"].curvature.summary
    assert back["slope"].status is weighing["slope"].status
    back.report(tmp_path / "two.json")
    assert (tmp_path / "two.json").read_bytes() == (tmp_path / "one.json").read_bytes()


def test_a_result_read_back_is_no_fit(weighing, tmp_path):
    weighing.report(tmp_path / "one.json")
    back = Weighing.from_json(tmp_path / "one.json")
    with pytest.raises(ev.DeclarationError, match="saved result cannot be audited"):
        ev.audit(back["slope"], depth="quick")
    with pytest.raises(ev.DeclarationError, match="cannot be made from a saved result"):
        back["slope"].posterior.draws(10)


def test_no_file_is_half_written(weighing, tmp_path):
    with pytest.raises(ev.DeclarationError, match="xlsx"):
        weighing.report(tmp_path / "one.xlsx")
    with pytest.raises(ev.DataError, match="nowhere"):
        weighing.report(tmp_path / "nowhere" / "one.json")
    assert list(tmp_path.iterdir()) == []


# what is shown


@pytest.mark.parametrize("number", [2, 30])
def test_the_repr_leads_with_the_verdict_in_twelve_lines(number):
    names = [f"candidate {k} " + "with a long name " * 5 for k in range(number)]
    model = {"a": Normal(0.0, 1.0)}
    found = weigh([ev.Model(name, model, _level) for name in names], {"y": np.ones(3)})
    lines = repr(found).splitlines()
    assert len(lines) <= 12
    assert lines[0].startswith("Not settled: candidate 0")
    assert ("more: see .table()" in lines[-1]) == (number == 30)


def _level(p, data):
    return Normal(p["a"], 1.0).log_prob(data["y"])


def test_the_notebook_shows_names_as_text():
    name = "<script>alert(1)</script>"
    priors = {"<b>a</b>": Normal(0.0, 1.0)}
    model = ev.Model(name, priors, lambda p, d: Normal(p["<b>a</b>"], 1.0).log_prob(d["y"]))
    html = weigh([model], {"y": np.ones(3)})._repr_html_()
    assert "<script" not in html
    assert "&lt;script&gt;" in html
    assert "<b>a" not in html


def test_an_approximation_in_few_lines(weighing):
    result = weighing["slope"]
    lines = repr(result).splitlines()
    assert lines[0] == f"slope: log evidence {result.log_evidence:.4f} nats (unchecked)"
    assert "= peak" in lines[1]
    assert "volume" in lines[1]
    assert len(lines) <= 12
    assert result.require() is result
    table = result.table()
    assert list(table) == list(table.attrs["columns"])
    assert table["rung"].tolist()[0] == "Laplace at the leading mode"


# an audit where it matters (the ladder itself has its own tests)


def test_candidates_out_of_reach_are_not_climbed_further(monkeypatch):
    climbed = []
    monkeypatch.setattr(room, "audit", lambda result, **k: climbed.append(result.name) or result)

    def fake(model, arrays, *, depth, seed, progress):
        import dataclasses

        values = {"leads": (-10.0, "rough"), "near": (-12.0, "rough"), "far": (-60.0, "rough"),
                  "sound": (-11.0, "sound"), "blind": (-90.0, "doubtful")}  # fmt: skip
        log_evidence, trust = values[model.name]
        return dataclasses.replace(
            PLAIN, name=model.name, log_evidence=log_evidence, standard_error=0.1, trust=trust
        )

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        PLAIN = ev.approximate(FLAT, DATA, depth="none")
    monkeypatch.setattr(room, "fit", fake)
    names = ("leads", "near", "far", "sound", "blind")
    models = [ev.Model(name, {"mass": MASS, "noise": NOISE}, flat_terms) for name in names]
    weigh(models, depth="standard")
    assert climbed == ["leads", "near", "blind"]
