"""A stress result as a table and as a file."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from evidence.report.json_form import record_to_json
from evidence.report.rows import known_suffix, rows_to_csv
from evidence.report.writing import write_text

__all__ = ["SUFFIXES", "check_suffix", "frame", "save"]

SUFFIXES = (".json", ".csv")


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
    return known_suffix(path, f"a stress result is saved as {' or '.join(SUFFIXES)}", SUFFIXES)


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
    write_text(
        path,
        record_to_json(record)
        if suffix == ".json"
        else rows_to_csv(list(record["columns"]), record["rows"]),
    )
