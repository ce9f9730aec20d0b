"""The terminal form, looked at as its lines."""

import io
import re
import subprocess
import sys

import pytest
from rich.cells import cell_len

from evidence.report.text import CandidateView, WeighingView, plain_text, short_text, show
from evidence.report.wording import short_name
from tests.records import HOSTILE_NAMES, hostile_record, make_candidate, make_record

NUMBERS = ("-41.213", "0.957", "0.953", "0.961", "-33.12", "75.31", "2.93", "-3.10", "-20.19")


def _squeezed(text):
    return re.sub(r"\s+", "", text)


@pytest.mark.parametrize("width", [24, 40, 60, 80, 100, 120, 200])
def test_no_line_is_wider_than_the_terminal_and_no_number_is_cut(width):
    text = plain_text(WeighingView(make_record()), width=width)
    assert max(map(cell_len, text.splitlines())) <= width
    for number in NUMBERS:
        assert re.search(rf"(?<![\d.]){re.escape(number)}(?!\d)", text), number
    for name in ("one pool", "two pools", "power law", "no loss"):
        assert name in text
    assert "…" not in text


def test_the_verdict_comes_first_then_candidates_by_log_evidence():
    lines = plain_text(WeighingView(make_record()), width=120).splitlines()
    assert lines[0].startswith("One pool leads two pools")
    order = [
        line[:9] for line in lines if re.match(r"(one pool|two pools|power law|no loss) ", line)
    ]
    assert order == ["one pool ", "two pools", "power law", "no loss  "]


def test_columns_keep_their_order_where_the_table_is_whole():
    lines = plain_text(WeighingView(make_record()), width=120).splitlines()
    heading = next(line for line in lines if line.startswith("candidate"))
    words = ["evidence", "error", "factor", "probability", "fit", "factor", "determined", "BIC"]
    assert re.search(r".*".join([*words, "trust"]), heading)


def test_at_eighty_columns_trust_stands_beside_the_log_evidence():
    lines = plain_text(WeighingView(make_record()), width=80).splitlines()
    row = next(line for line in lines if line.startswith("two pools "))
    assert re.search(r"-44\.31 +0\.21 +-3\.10 +0\.043 \(0\.039 to 0\.047\) +doubtful$", row)


def test_decimal_points_stand_above_each_other():
    lines = plain_text(WeighingView(make_record()), width=120).splitlines()
    rows = [line for line in lines if re.match(r"(one pool|two pools|power law) ", line)]
    assert len(rows) == 3
    assert len({line.index(".") for line in rows}) == 1


def test_an_open_number_is_a_dash_with_the_word_unchecked():
    candidate = make_candidate(standard_error=None, probability_interval=[None, None], trust=None)
    lines = plain_text(WeighingView(make_record(candidate)), width=80).splitlines()
    row = next(line for line in lines if line.startswith("one pool "))
    assert re.search(r"-41\.21 +- +0\.00 +0\.957 +unchecked$", row)


def test_warnings_follow_with_their_remedies_and_a_failure_with_its_reason():
    text = plain_text(WeighingView(make_record()), width=80)
    table, _, rest = text.partition("BIC")
    assert "held by the prior alone" not in table
    assert rest.index("held by the prior alone") < rest.index("Give rate_2 a narrower prior")
    assert "No peak was found from any start." in rest


def test_a_candidate_shows_its_posterior_audit_and_curvature():
    text = plain_text(CandidateView(make_candidate()), width=80)
    assert text.startswith("one pool: log evidence -41.213 +- 0.004 nats (sound)")
    assert re.search(r"rate +1/day +0\.006132 +0\.006141", text)
    assert re.search(r"importance draws +-41\.213 +0\.004 +yes +Pareto k 0\.12", text)
    assert "0.71 log rate - 0.70 log mass" in text
    assert "0.98 of it from the data" in text


def test_notes_that_leave_no_room_follow_the_table():
    posterior = make_candidate()["posterior"]
    posterior[1] |= {"note": "share that is lost in a day; prior: litter halves within a year"}
    view = CandidateView(make_candidate(posterior=posterior))
    narrow, wide = (plain_text(view, width=width).splitlines() for width in (70, 120))
    assert any(line.startswith("rate: share that is lost in a day;") for line in narrow)
    assert any(line.startswith("rate       1/day  0.006132") for line in narrow)
    assert any(line.startswith("rate       1/day  0.006132") and "share" in line for line in wide)


def test_a_title_that_asks_keeps_its_question_mark():
    text = plain_text(WeighingView(make_record(title="How fast?")), width=80)
    assert "How fast? Data from" in text


def test_a_long_posterior_says_how_much_is_left_out():
    row = make_candidate()["posterior"][0]
    posterior = [row | {"parameter": f"site[{j}]"} for j in range(500)]
    text = plain_text(CandidateView(make_candidate(posterior=posterior)), width=80)
    assert "site[59]" in text
    assert "site[60]" not in text
    assert "and 440 more parameters" in text


@pytest.mark.parametrize("name", HOSTILE_NAMES)
@pytest.mark.parametrize("width", [40, 80, 120])
def test_hostile_names_are_text(name, width):
    record = hostile_record(name)
    for view in (WeighingView(record), CandidateView(record["candidates"][0])):
        text = plain_text(view, width=width)
        assert max(map(cell_len, text.splitlines())) <= width
        assert not re.search(r"[\x00-\x09\x0b-\x1f\x7f\u200f\u202e\ud800]", text)
    # the table may fold the name over lines; the list of warnings has it in one piece
    assert _squeezed(short_name(name)) in _squeezed(plain_text(WeighingView(record), 200))


@pytest.mark.parametrize("many", [1, 4, 30])
def test_the_short_form_has_at_most_twelve_lines(many):
    candidates = [make_candidate(f"candidate {j}", log_evidence=-float(j)) for j in range(many)]
    text = short_text(make_record(*candidates, verdict="A word. " * 300))
    lines = text.splitlines()
    assert len(lines) <= 12
    assert lines[0].startswith("A word.")
    assert "candidate 0: 0.000 +- 0.004 nats" in text
    assert ("more: see .table()" in text) == (many == 30)


def test_show_prints_plain_text_to_a_file():
    file = io.StringIO()
    show(WeighingView(make_record()), file=file, width=80)
    assert file.getvalue().startswith("One pool leads")
    assert "\x1b" not in file.getvalue()


def test_rich_is_loaded_only_when_something_is_shown():
    program = "import sys, evidence.report.text; print('rich' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True)
    assert done.stdout.strip() == "False", done.stderr
