"""A rehearsal as a file: JSON with everything, CSV of the main table, Markdown with all tables."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from evidence.report.json_form import record_to_json
from evidence.report.markdown import escape_markdown
from evidence.report.rows import known_suffix, rows_to_csv
from evidence.report.wording import short_name
from evidence.report.writing import write_text

__all__ = ["FORMS", "check_suffix", "save"]

TITLES = {
    "growth": "Who led, and what was settled",
    "confusion": "Who generated and who led",
    "calibration": "Among data sets given a probability, how many were right",
    "log_bayes_factors": "Log Bayes factors of the generator against each other candidate",
    "sample_sizes": "Observations with which the question is settled for the generator",
    "failures": "Simulations left out",
}
FAILURES_SHOWN = 20


def to_csv(record: Mapping[str, Any]) -> str:
    """The main table at full precision; an open number is an empty field."""
    return rows_to_csv(list(record["columns"]["growth"]), record["growth"])


def to_markdown(record: Mapping[str, Any]) -> str:
    """Summary, every table, and what its columns mean."""
    blocks = ["# Rehearsal", f"**{escape_markdown(record['summary'])}**"]
    for name, title in TITLES.items():
        rows = record[name][: FAILURES_SHOWN if name == "failures" else None]
        if not rows:
            continue
        blocks += [f"## {title}", _table(rows)]
        if len(rows) < len(record[name]):
            blocks.append(f"and {len(record[name]) - len(rows)} more")
        if name in record["columns"]:
            told = record["columns"][name].items()
            blocks.append("\n".join(f"- `{c}`: {escape_markdown(text)}" for c, text in told))
    origin = "posteriors" if record["from_posterior"] else "priors"
    blocks.append(
        f"{record['repeats']} data sets from each candidate at each size, parameters from the "
        f"{origin}, depth {record['depth']}, seed {record['seed']}."
    )
    return "\n\n".join(blocks) + "\n"


FORMS = {".json": record_to_json, ".csv": to_csv, ".md": to_markdown}


def check_suffix(path: str | Path) -> str:
    """Return the suffix of a path in small letters.

    Raises
    ------
    DeclarationError
        No form has it.
    """
    expected = f"a rehearsal is saved by its suffix, one of {', '.join(FORMS)}"
    return known_suffix(path, expected, tuple(FORMS))


def save(record: Mapping[str, Any], path: str | Path) -> None:
    """Write the record of a rehearsal, whole or not at all.

    Raises
    ------
    DeclarationError
        No form has the suffix.
    DataError
        The path cannot be written.
    """
    write_text(path, FORMS[check_suffix(path)](record))


def _table(rows: Sequence[Mapping[str, Any]]) -> str:
    columns = list(rows[0])
    lines = [[c.replace("_", " ") for c in columns], ["---"] * len(columns)]
    lines += [[_cell(row[c]) for c in columns] for row in rows]
    return "\n".join(f"| {' | '.join(line)} |" for line in lines)


def _cell(value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.4g}" if math.isfinite(value) else "-"
    return escape_markdown(short_name(value)) if isinstance(value, str) else str(value)
