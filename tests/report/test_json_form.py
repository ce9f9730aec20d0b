"""The JSON form: what is written comes back, what is not ours is refused."""

import json
import math

import numpy as np
import pytest

from evidence.complaints import DataError
from evidence.report.json_form import VERSION, read_record, record_from_json, record_to_json
from evidence.report.text import CandidateView, WeighingView, plain_text
from tests.records import HOSTILE_NAMES, hostile_record, make_candidate, make_record


def _without_nan(value):
    if isinstance(value, dict):
        return {key: _without_nan(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_without_nan(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def test_a_record_comes_back_with_null_for_what_is_open():
    record = make_record()
    text = record_to_json(record)
    assert record_from_json(text) == _without_nan(record)
    assert "NaN" not in text
    assert '"standard_error": null' in text


def test_what_comes_back_is_shown_the_same():
    record = make_record()
    again = record_from_json(record_to_json(record))
    assert plain_text(WeighingView(again)) == plain_text(WeighingView(record))
    views = [CandidateView(r["candidates"][3]) for r in (again, record)]
    assert plain_text(views[0]) == plain_text(views[1])


@pytest.mark.parametrize("name", HOSTILE_NAMES)
def test_names_come_back_exactly(name):
    text = record_to_json(hostile_record(name))
    assert text.isascii()
    assert record_from_json(text)["candidates"][0]["candidate"] == name


def test_numpy_values_and_infinities():
    candidate = make_candidate(
        log_evidence=np.float64(-1.5),
        fit=-math.inf,
        dimension=np.int64(3),
        probability_interval=np.array([0.25, np.nan]),
    )
    back = record_from_json(record_to_json(make_record(candidate)))["candidates"][0]
    assert back["log_evidence"] == -1.5
    assert back["fit"] is None
    assert back["dimension"] == 3
    assert back["probability_interval"] == [0.25, None]


def _changed(**changes):
    return json.dumps(_without_nan(make_record(**changes)))


def _candidate_changed(**changes):
    return json.dumps(_without_nan(make_record(make_candidate(**changes))))


def _lacking(*path):
    record = _without_nan(make_record())
    inner = record
    for key in path[:-1]:
        inner = inner[key]
    del inner[path[-1]]
    return json.dumps(record)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", r"x\.json is not JSON"),
        ("{'a': 1}", r"x\.json is not JSON"),
        ("[" * 100_000, r"x\.json is not JSON"),
        ("1" * 10_000, r"x\.json is not JSON"),
        ("[]", r"not the result of a weighing .*got no format"),
        (
            '{"format": "other", "version": 1}',
            r"expected format 'evidence weighing'\); got .*other",
        ),
        (_changed(version=VERSION + 1), r"newer version.*got version 2.*pip install --upgrade"),
        (_changed(version="1"), r"its version is '1'"),
        (_changed(version=True), r"its version is True"),
        (_lacking("verdict"), r"the result lacks 'verdict'"),
        (_lacking("candidates", 1, "trust"), r"candidate 2 lacks 'trust'"),
        (_changed(candidates=[]), r"list of candidates is empty"),
        (_changed(candidates=["x"]), r"candidate 1 is not an object"),
        (_changed(settled=1), r"'settled' of the result cannot be 1"),
        (
            _candidate_changed(log_evidence="high"),
            r"'log_evidence' of candidate 1 cannot be 'high'",
        ),
        (_candidate_changed(fit=True), r"'fit' of candidate 1 cannot be True"),
        (_candidate_changed(warnings=["x"]), r"candidate 1 has an entry in 'warnings'"),
        (_candidate_changed(posterior=[{}]), r"candidate 1 has an entry in 'posterior'"),
        (_candidate_changed(curvature={"directions": [3]}), r"a direction of curvature"),
    ],
)
def test_what_is_not_a_whole_result_is_refused(text, said):
    with pytest.raises(DataError, match=said):
        record_from_json(text, source="x.json")


def test_the_not_a_number_of_other_writers_is_read_as_open():
    text = record_to_json(make_record()).replace('"standard_error": null', '"standard_error": NaN')
    assert "NaN" in text
    assert record_from_json(text)["candidates"][1]["standard_error"] is None


def test_a_file_that_cannot_be_read(tmp_path):
    with pytest.raises(DataError, match=r"none\.json cannot be read: No such file"):
        read_record(tmp_path / "none.json")
    with pytest.raises(DataError, match="cannot be read: Is a directory"):
        read_record(tmp_path)
    (tmp_path / "binary.json").write_bytes(b"{\xff\xfe")
    with pytest.raises(DataError, match=r"binary\.json is not JSON \(not UTF-8 text at byte 1\)"):
        read_record(tmp_path / "binary.json")
