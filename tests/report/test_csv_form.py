"""The CSV form, read back."""

import csv
import io

import numpy as np
import pytest

from evidence.report.content import COLUMNS
from evidence.report.csv_form import record_to_csv
from evidence.report.wording import visible
from tests.records import HOSTILE_NAMES, hostile_record, make_candidate, make_record


def _rows(text):
    return list(csv.DictReader(io.StringIO(text, newline="")))


def test_all_columns_at_full_precision_by_log_evidence():
    rows = _rows(record_to_csv(make_record()))
    assert tuple(rows[0]) == COLUMNS
    assert [row["candidate"] for row in rows] == ["one pool", "two pools", "power law", "no loss"]
    assert float(rows[0]["log_evidence"]) == -41.2134
    assert float(rows[2]["probability"]) == 2e-9
    assert rows[2]["standard_error"] == ""
    assert [row["trust"] for row in rows] == ["sound", "doubtful", "unchecked", "failed"]


def test_numpy_numbers_are_written_as_numbers():
    text = record_to_csv(make_record(make_candidate(log_evidence=np.float64(-41.25))))
    assert _rows(text)[0]["log_evidence"] == "-41.25"


@pytest.mark.parametrize("name", HOSTILE_NAMES)
def test_hostile_names_are_text(name):
    text = record_to_csv(hostile_record(name))
    assert text.count("\n") == 3
    shown = _rows(text)[0]["candidate"]
    assert shown.removeprefix("'") == visible(name)
    assert shown[0] not in "=+-@"


def test_a_name_that_begins_as_a_formula_is_marked():
    assert _rows(record_to_csv(make_record(make_candidate("=1+1"))))[0]["candidate"] == "'=1+1"
