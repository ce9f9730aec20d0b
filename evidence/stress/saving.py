"""A stress result as a table and as a file."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from evidence.complaints import DeclarationError, near_name, sentence
from evidence.report.json_form import record_to_json
from evidence.report.wording import short_name, visible
from evidence.report.writing import write_text

__all__ = ["SUFFIXES", "check_suffix", "frame", "rows_to_csv", "save"]

SUFFIXES = (".json", ".csv")
_FORMULA_SIGNS = ("=", "+", "-", "@")  # a spreadsheet would run a text that begins so


def frame(rows: Sequence[Mapping[str, Any]], columns: Mapping[str, str]) -> Any:
    """A pandas table whose ``attrs["columns"]`` explains each column."""
    import pandas as pd

    table = pd.DataFrame(list(rows), columns=list(columns))
    table.attrs["columns"] = dict(columns)
    return table


def check_suffix(path: str | Path) -> str:
    """Return the suffix of a path in small letters.

    Raises
    ------
    DeclarationError
        It is neither .json nor .csv.
    """
    suffix = Path(path).suffix.lower()
    if suffix in SUFFIXES:
        return suffix
    raise DeclarationError(
        sentence(
            f"a stress result is saved as {' or '.join(SUFFIXES)}",
            short_name(repr(str(path)), 400),
        )
        + near_name(suffix, SUFFIXES)
    )


def save(record: Mapping[str, Any], path: str | Path) -> None:
    """Write a record to a .json or .csv file, whole or not at all.

    Raises
    ------
    DeclarationError
        Another suffix.
    DataError
        The path cannot be written.
    """
    suffix = check_suffix(path)
    write_text(path, record_to_json(record) if suffix == ".json" else rows_to_csv(record))


def rows_to_csv(record: Mapping[str, Any]) -> str:
    """The rows of a record as CSV, at full precision; an open number is an empty field."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    columns = list(record["columns"])
    writer.writerow(columns)
    writer.writerows([_field(row[column]) for column in columns] for row in record["rows"])
    return text.getvalue()


def _field(value: Any) -> str:
    if isinstance(value, str):
        word = visible(value)
        return f"'{word}" if word.startswith(_FORMULA_SIGNS) else word
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else ""
    return "" if value is None else str(value)
