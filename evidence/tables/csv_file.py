"""CSV files, read by the standard library: exact numbers, and complaints that name the line.

A table reader would cost half a second of import and hide the lines; Python's own ``float`` gives
the nearest float64 to what is written. Rows are converted in blocks, so that a file of ten million
rows never lies in memory as text.
"""

from __future__ import annotations

import csv
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np

from evidence.complaints import DataError, near_name, sentence
from evidence.tables.columns import encode
from evidence.tables.flaws import MOST_SHOWN, Flaws

__all__ = ["read_csv"]

BLOCK = 20_000
MISSING = frozenset({"", "na", "n/a", "#n/a", "nan", "-nan", "null"})
TRUTH = {"True": True, "TRUE": True, "true": True, "False": False, "FALSE": False, "false": False}
INT64 = np.iinfo(np.int64)


def read_csv(
    path: Path, categories: Sequence[str], flaws: Flaws
) -> tuple[dict[str, np.ndarray], dict[str, tuple[str, ...]]]:
    """Read a CSV file with a header line into columns.

    Parameters
    ----------
    path : Path
        A UTF-8 file, separated by commas.
    categories : sequence of str
        Columns read as labels and turned into codes.
    flaws : Flaws
        Where unusable values are noted, by line.

    Returns
    -------
    arrays, labels
        Column name -> array [rows]; column name -> labels of the codes.

    Raises
    ------
    DataError
        If the file is not UTF-8, not regular, has no header, no rows, or unusable values.
    """
    try:
        with path.open(newline="", encoding="utf-8-sig") as file:
            rows = csv.reader(file, skipinitialspace=True, strict=True)
            return _read_rows(rows, categories, flaws)
    except UnicodeDecodeError as error:
        message = f"{flaws.source} is not UTF-8 text"
        raise DataError(sentence(message, str(error.reason), "Save it as CSV UTF-8")) from error
    except csv.Error as error:
        message = f"{flaws.source} cannot be read near line {rows.line_num}: {error}"
        raise DataError(sentence(message, remedy="Look for an unclosed quotation mark")) from error


def _read_rows(
    rows: Iterator[list[str]], categories: Sequence[str], flaws: Flaws
) -> tuple[dict[str, np.ndarray], dict[str, tuple[str, ...]]]:
    header = _read_header(rows, flaws)
    for name in categories:
        if name not in header:
            known = ", ".join(header)
            message = f"categories names {name!r}, and {flaws.source} has the columns {known}"
            raise DataError(f"{message}.{near_name(name, header)}")
    columns = [_Labels(name) if name in categories else _Numbers(name) for name in header]
    for lines, block in _blocks(rows, len(header), flaws):
        for column, texts in zip(columns, zip(*block, strict=True), strict=True):
            column.take(texts, lines)
    if not columns[0].rows:
        raise DataError(f"{flaws.source} has a header and no rows.")
    arrays = {column.name: column.finish(flaws) for column in columns}
    flaws.speak()
    return arrays, {c.name: c.labels for c in columns if isinstance(c, _Labels)}


def _read_header(rows: Iterator[list[str]], flaws: Flaws) -> list[str]:
    header = next((row for row in rows if "".join(row).strip()), None)
    if header is None:
        raise DataError(f"{flaws.source} is empty. Its first line must name the columns.")
    header = [name.strip() for name in header]
    if len(header) == 1 and (";" in header[0] or "\t" in header[0]):
        raise DataError(
            sentence(f"{flaws.source} must be separated by commas", repr(header[0]), "Save it so")
        )
    if "" in header:
        raise DataError(
            f"column {header.index('') + 1} of {flaws.source} has no name. Name it in the first "
            "line; a file written by pandas needs frame.to_csv(path, index=False)."
        )
    for name in header:
        if header.count(name) > 1:
            raise DataError(f"{flaws.source} has two columns named {name!r}. Rename one.")
    if all(_number(name) is not None for name in header):
        message = f"the first line of {flaws.source} must name the columns"
        raise DataError(sentence(message, ",".join(header), "Put the names above the numbers"))
    return header


def _blocks(
    rows: Iterator[list[str]], width: int, flaws: Flaws
) -> Iterator[tuple[list[int], list[list[str]]]]:
    lines: list[int] = []
    block: list[list[str]] = []
    blank: list[int] = []
    before = rows.line_num
    for row in rows:
        line, before = before + 1, rows.line_num
        if len(row) != width or width == 1:
            if len(row) <= 1 and not "".join(row).strip():
                blank.append(line)
                continue
            if len(row) != width:
                message = f"line {line} of {flaws.source} must have {width} values, as the header"
                raise DataError(sentence(message, str(len(row))))
            # In a file of one column an empty line between numbers is a missing number.
            lines += blank
            block += [[""] for _ in blank]
            blank = []
        lines.append(line)
        block.append(row)
        if len(block) >= BLOCK:
            yield lines, block
            lines, block = [], []
    if block:
        yield lines, block


def _number(text: str) -> float | None:
    # float() reads the underscores of Python source, which no table means.
    try:
        return None if "_" in text else float(text)
    except ValueError:
        return None


class _Column:
    """One column of the file, taken block by block."""

    def __init__(self, name: str) -> None:
        self.name = name
        self.rows = 0
        self.bad = 0
        self.first: list[tuple[str, str]] = []

    def complain(self, line: int, what: str) -> None:
        self.bad += 1
        if len(self.first) < MOST_SHOWN:
            self.first.append((f"in line {line}", what))


class _Labels(_Column):
    """A column of labels."""

    def __init__(self, name: str) -> None:
        super().__init__(name)
        self.words: list[str] = []
        self.labels: tuple[str, ...] = ()
        self._same: dict[str, str] = {}

    def take(self, texts: Sequence[str], lines: list[int]) -> None:
        self.rows += len(texts)
        for text, line in zip(map(str.strip, texts), lines, strict=True):
            if text.lower() in MISSING:
                self.complain(line, "missing")
            # One object per distinct label keeps long files small.
            self.words.append(self._same.setdefault(text, text))

    def finish(self, flaws: Flaws) -> np.ndarray:
        flaws.values(self.name, self.bad, self.first)
        codes, self.labels = encode(self.words)
        return codes


class _Numbers(_Column):
    """A column of whole numbers, numbers or truth values."""

    def __init__(self, name: str) -> None:
        super().__init__(name)
        self.parts: list[np.ndarray] = []
        self.kinds: set[str] = set()
        self.words = 0
        self.word = ""
        self.missing = 0

    def take(self, texts: Sequence[str], lines: list[int]) -> None:
        self.rows += len(texts)
        part = _parse_block(texts)
        if part is None or (part.dtype.kind == "f" and not np.isfinite(part).all()):
            for text, line in zip(map(str.strip, texts), lines, strict=True):
                self._inspect(text, line)
        else:
            self.parts.append(part)
            self.kinds.add("truth" if part.dtype.kind == "b" else "number")

    def _inspect(self, text: str, line: int) -> None:
        value = _number(text)
        if text.lower() in MISSING:
            self.missing += 1
            self.complain(line, "missing")
        elif text in TRUTH:
            self.kinds.add("truth")
        elif value is None:
            self.words += 1
            self.word = self.word or text
            self.complain(line, repr(text))
        elif not np.isfinite(value):
            self.complain(line, text)
        elif _is_too_large(text):
            self.complain(line, f"{text}, too large for int64 (write it with a point)")
        else:
            self.kinds.add("number")

    def finish(self, flaws: Flaws) -> np.ndarray:
        if len(self.kinds) > 1:
            flaws.refuse(self.name, "truth values among numbers", "Write 0 and 1")
        if 2 * self.words > self.rows - self.missing:
            flaws.text(self.name, self.word)
        else:
            flaws.values(self.name, self.bad, self.first)
        return np.concatenate(self.parts) if self.parts else np.empty(0)


def _is_too_large(text: str) -> bool:
    return text.lstrip("+-").isdigit() and not INT64.min <= int(text) <= INT64.max


def _parse_block(texts: Sequence[str]) -> np.ndarray | None:
    """Return a block as int64, float64 or bool, or None where values must be looked at singly."""
    if "_" in "".join(texts):
        return None
    try:
        return np.fromiter(map(int, texts), np.int64, len(texts))
    except OverflowError:
        return None
    except ValueError:
        pass
    try:
        return np.fromiter(map(float, texts), np.float64, len(texts))
    except ValueError:
        truth = [TRUTH.get(text.strip()) for text in texts]
        return None if None in truth else np.array(truth)
