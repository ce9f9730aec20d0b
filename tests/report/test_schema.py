"""The JSON Schema in the package says what is written."""

import copy
import importlib.resources
import json
import warnings

import jsonschema
import pytest

import evidence as ev
from evidence.distributions import HalfNormal, Normal
from evidence.report.json_form import VERSION, record_to_json
from tests.records import HOSTILE_NAMES, illustrated, illustrated_hostile, make_record

SCHEMA = json.loads(
    importlib.resources.files("evidence.report").joinpath("weighing.schema.json").read_text()
)
CHECK = jsonschema.Draft202012Validator(SCHEMA)


def as_written(record):
    return json.loads(record_to_json(record))


def test_the_schema_is_one_and_of_the_version_written():
    jsonschema.Draft202012Validator.check_schema(SCHEMA)
    assert SCHEMA["properties"]["version"] == {"const": VERSION}


@pytest.mark.parametrize("pictures", [False, True])
def test_a_real_result(pictures):
    def line(p, data):
        return Normal(p["slope"] * data["x"], p["noise"]).log_prob(data["y"])

    data = {"x": [0.0, 1.0, 2.0, 3.0], "y": [0.1, 0.9, 2.2, 2.8]}
    priors = {"slope": Normal(0.0, 2.0), "noise": HalfNormal(1.0)}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        models = [ev.Model("line", priors, line), ev.Model("again", priors, line)]
        weighing = ev.weigh(models, data, depth="none")
    written = as_written(weighing.to_dict(pictures=pictures))
    assert [e.message for e in CHECK.iter_errors(written)] == []
    assert all(("pictures" in c) == pictures for c in written["candidates"])
    # every key that is written is described
    described = SCHEMA["$defs"]["candidate"]["properties"]
    assert {key for c in written["candidates"] for key in c} <= set(described)
    assert set(written) <= set(SCHEMA["properties"])


@pytest.mark.parametrize("name", HOSTILE_NAMES)
def test_any_name(name):
    assert CHECK.is_valid(as_written(illustrated_hostile(name)))


@pytest.mark.parametrize(
    "spoil",
    [
        lambda r: r.pop("verdict"),
        lambda r: r.update(version=2),
        lambda r: r.update(candidates=[]),
        lambda r: r["candidates"][0].update(log_evidence="-41"),
        lambda r: r["candidates"][0].update(trust="fine"),
        lambda r: r["candidates"][0].update(probability_interval=[0.1]),
        lambda r: r["candidates"][0]["pictures"]["checks"][0].pop("p_value"),
        lambda r: r["candidates"][0]["pictures"].update(marginals={}),
    ],
)
def test_what_is_no_result_is_refused(spoil):
    record = as_written(illustrated(make_record()))
    assert CHECK.is_valid(record)
    spoilt = copy.deepcopy(record)
    spoil(spoilt)
    assert not CHECK.is_valid(spoilt)
