"""Plain rows as CSV, and the suffix of a file that is to hold a result."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from evidence.complaints import DeclarationError, near_name, sentence
from evidence.report.wording import short_name, visible

__all__ = ["known_suffix", "rows_to_csv"]

_FORMULA_SIGNS = ("=", "+", "-", "@")  # a spreadsheet would run a text that begins so


def known_suffix(path: str | Path, expected: str, known: Sequence[str]) -> str:
    """Return the suffix of a path in small letters.

    Raises
    ------
    DeclarationError
        It is none of the known ones; ``expected`` says what was.
    """
    suffix = Path(path).suffix.lower()
    if suffix in known:
        return suffix
    raise DeclarationError(
        sentence(expected, short_name(repr(str(path)), 400)) + near_name(suffix, known)
    )


def rows_to_csv(columns: Sequence[str], rows: Iterable[Mapping[str, Any]]) -> str:
    """Rows as CSV, at full precision; an open number is an empty field."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows([_field(row[name]) for name in columns] for row in rows)
    return text.getvalue()


def _field(value: Any) -> str:
    if isinstance(value, str):
        word = visible(value)
        return f"'{word}" if word.startswith(_FORMULA_SIGNS) else word
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else ""
    return "" if value is None else str(value)
