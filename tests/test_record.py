"""A result as a plain record: what it holds, and an Approximation made of it."""

from __future__ import annotations

import json
import warnings

import numpy as np
import pytest

import evidence as ev
from evidence.distributions import HalfNormal, LogNormal, Normal, positive
from evidence.outcome import Outcome
from evidence.record import candidate_record, versions
from evidence.recorded import recorded_candidate

KEYS = {
    "candidate", "log_evidence", "standard_error", "laplace", "second_order_term", "bic",
    "log_posterior_at_mode", "fit", "occam_factor", "well_determined", "trust", "status",
    "status_sentence", "warnings", "dimension", "terms", "starts", "seconds", "modes",
    "curvature", "posterior", "audit", "priors", "notes", "units",
}  # fmt: skip

MODEL = ev.Model(
    "decay",
    {
        "mass": LogNormal(2.0, 0.5),
        "rates": LogNormal(-1.0, 1.0, shape=(2,)),
        "noise": HalfNormal(1.0),
        "shift": lambda p: Normal(p["mass"], 1.0),
    },
    lambda p, data: Normal(
        p["mass"] * p["rates"].sum() + p["shift"] * data["x"], p["noise"]
    ).log_prob(data["y"]),
    units={"mass": "g"},
    notes={"noise": "of the balance"},
)
DATA = {"x": np.linspace(0.0, 1.0, 8), "y": np.array([3.1, 4.6, 4.2, 6.1, 6.3, 7.9, 7.7, 9.2])}


@pytest.fixture(scope="module")
def result():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(MODEL, DATA, depth="none")


@pytest.fixture(scope="module")
def record(result):
    return candidate_record(result)


def test_the_record_is_plain(record):
    assert set(record) == KEYS

    def plain(value):
        if isinstance(value, dict):
            return all(type(k) is str for k in value) and all(map(plain, value.values()))
        if isinstance(value, list):
            return all(map(plain, value))
        return type(value) in (str, int, float, bool, type(None))

    assert plain(record)
    assert json.loads(json.dumps(record)).keys() == record.keys()


def test_the_record_says_what_the_result_says(result, record):
    assert record["log_evidence"] == result.log_evidence
    assert record["fit"] + record["occam_factor"] == pytest.approx(record["log_evidence"])
    assert record["modes"][0]["mode"]["rates"] == result.mode["rates"].tolist()
    assert record["modes"][0]["starts"] == result.modes[0].hits
    assert len(record["curvature"]["directions"]) == result.dimension == 5
    assert [row["parameter"] for row in record["posterior"]][:2] == ["mass", "rates[0]"]
    assert record["priors"]["mass"] == "LogNormal(log_mean=2.0, log_sd=0.5)"
    assert record["priors"]["shift"] == "a function of earlier parameters"
    assert (record["units"], record["notes"]) == ({"mass": "g"}, {"noise": "of the balance"})
    assert (record["status"], record["terms"]) == ("OK", 8)
    assert record["audit"][0]["rung"] == "Laplace at the leading mode"


def test_there_and_back(result, record):
    written = json.loads(json.dumps(record, allow_nan=True), parse_constant=lambda _: None)
    back = recorded_candidate(written, depth="none", seed=0)
    for name in ("log_evidence", "laplace", "second_order_term", "log_posterior_at_mode", "bic",
                 "log_likelihood_at_mode", "well_determined", "log_occam_factor"):  # fmt: skip
        assert getattr(back, name) == getattr(result, name), name
    assert np.isnan(back.standard_error)
    assert back.warnings == result.warnings
    assert back.status is Outcome.OK
    assert (back.name, back.trust, back.dimension, back.terms) == ("decay", "unchecked", 5, 8)
    assert back.mode["rates"] == pytest.approx(result.mode["rates"])
    assert back.problem is None
    assert back.summary == result.summary
    assert len(repr(back).splitlines()) <= 12
    assert back.curvature.directions[0] == result.curvature.directions[0]
    assert "decay" in repr(back)


def test_a_failed_candidate_there_and_back():
    model = ev.Model.from_log_posterior(
        "wrong", lambda p: p["a"] + 0.0, {"a": 1.0}, support={"a": positive}
    )
    with pytest.warns(ev.EvidenceWarning, match=r"ran off|\+inf|nan"):
        failed = ev.approximate(model, depth="none")
    record = candidate_record(failed)
    assert np.isnan(record["log_evidence"])
    assert record["priors"] == {"a": "in the log posterior, on positive"}
    written = json.loads(json.dumps(record), parse_constant=lambda _: None)
    assert written["log_evidence"] is None
    back = recorded_candidate(written, depth="none", seed=0)
    assert np.isnan(back.log_evidence)
    assert back.status is failed.status
    assert back.trust == "failed"
    assert back.warnings == failed.warnings


def test_versions_name_what_the_numbers_depend_on():
    found = versions()
    assert set(found) == {"evidence", "jax", "numpy", "python"}
    assert found["evidence"] == ev.__version__
    assert found["numpy"] == np.__version__
