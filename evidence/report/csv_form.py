"""The comparison table as CSV, at full precision: the form for the next program."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Mapping
from typing import Any

from evidence.report.content import COLUMNS, by_log_evidence
from evidence.report.wording import number, visible

__all__ = ["record_to_csv"]

_WORDS = ("candidate", "trust")
# a spreadsheet takes a cell that begins so for a formula and runs it
_FORMULA_SIGNS = ("=", "+", "-", "@")


def record_to_csv(record: Mapping[str, Any]) -> str:
    """Write the comparison table of a record as CSV, highest log evidence first.

    Numbers have all their digits, in nats where they have a unit; an open number is an empty
    field. A name that a spreadsheet would run as a formula gets an apostrophe in front.
    """
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(COLUMNS)
    writer.writerows([_field(c, column) for column in COLUMNS] for c in by_log_evidence(record))
    return text.getvalue()


def _field(candidate: Mapping[str, Any], column: str) -> str:
    value = candidate.get(column)
    if column not in _WORDS:
        x = number(value)
        return "" if math.isnan(x) else repr(x)
    word = visible(value or "unchecked")
    return f"'{word}" if word.startswith(_FORMULA_SIGNS) else word
