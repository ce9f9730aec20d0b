"""How numbers and names are worded."""

import math

import pytest

from evidence.report.wording import (
    error_nats,
    in_words,
    interval,
    nats,
    nats_decimals,
    number,
    probability,
    quantity,
    short_name,
    visible,
)


@pytest.mark.parametrize(
    ("standard_error", "decimals"),
    [
        (math.nan, 2),
        (None, 2),
        (0.0, 2),
        (0.3, 2),
        (0.01, 2),
        (0.0096, 3),
        (0.0004, 4),
        (1e-9, 4),
        (1.5, 1),
        (12.0, 0),
        (math.inf, 2),
    ],
)
def test_decimals_follow_the_standard_error(standard_error, decimals):
    assert nats_decimals(standard_error) == decimals


@pytest.mark.parametrize(
    ("value", "decimals", "text"),
    [
        (-41.2134, 2, "-41.21"),
        (-0.001, 2, "0.00"),
        (-0.0, 0, "0"),
        (math.nan, 2, "-"),
        (None, 2, "-"),
        (-math.inf, 2, "-inf"),
        (1e300, 2, "1e+300"),
        (-1234567.891, 1, "-1234567.9"),
    ],
)
def test_nats(value, decimals, text):
    assert nats(value, decimals) == text


def test_a_tiny_error_is_a_bound_and_not_zero():
    assert error_nats(1e-9) == "<0.0001"
    assert error_nats(0.0004) == "0.0004"
    assert error_nats(0.0) == "0.00"
    assert error_nats(math.nan) == "-"


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.957, "0.957"),
        (2e-9, "<0.001"),
        (0.0, "<0.001"),
        (0.99999, ">0.999"),
        (1.0, "1.000"),
        (0.9994, "0.999"),
        (None, "-"),
    ],
)
def test_probability(value, text):
    assert probability(value) == text


def test_interval():
    assert interval(0.957, [0.953, 0.961]) == "0.957 (0.953 to 0.961)"
    assert interval(0.9999, [0.998, 0.99999]) == ">0.999 (0.998 to >0.999)"
    assert interval(0.957, [None, math.nan]) == "0.957"
    assert interval(math.nan, [0.1, 0.2]) == "-"


@pytest.mark.parametrize(
    ("value", "sd", "text"),
    [
        (9.8712, 0.1123, "9.871"),
        (1234.56789, 0.012, "1234.568"),
        (0.000214, None, "0.0002140"),
        (12345.0, None, "1.234e+04"),
        (0.0, 1.0, "0"),
        (math.nan, 1.0, "-"),
        (math.inf, 1.0, "inf"),
    ],
)
def test_quantity_shows_what_the_sd_justifies(value, sd, text):
    assert quantity(value, sd) == text


def test_number_takes_what_a_record_may_hold():
    assert number(3) == 3.0
    assert math.isnan(number("3"))
    assert math.isnan(number([1, 2]))
    assert math.isnan(number(10**400))


def test_unprintable_signs_become_escapes():
    shown = visible("a\nb\x1b[0m\u202ec\U000e0041\ud800")
    assert shown == "a\\nb\\x1b[0m\\u202ec\\U000e0041\\ud800"
    assert visible("modèle שלום 模型") == "modèle שלום 模型"


def test_a_long_name_keeps_its_beginning_and_its_end():
    shown = short_name("start" + "x" * 10_000 + "end")
    assert shown.startswith("start")
    assert shown.endswith("end")
    assert len(shown) <= 72
    assert "more" in shown
    assert short_name("x" * 72) == "x" * 72


def test_a_long_name_is_shortened_inside_a_sentence():
    name = "long " * 2000
    said = in_words(f"{name} leads\nby far.", [name, "short"])
    assert len(said) < 120
    assert said.endswith("leads by far.")
