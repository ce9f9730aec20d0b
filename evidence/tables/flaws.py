"""What is wrong with one source of data, gathered first and then said in one sentence."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable
from typing import NoReturn

from evidence.complaints import DataError, sentence

__all__ = ["Flaws"]

MOST_SHOWN = 3
DATE = re.compile(r"\d{4}-\d\d-\d\d|\d{1,2}[./]\d{1,2}[./]\d{2,4}")


class Flaws:
    """A list of complaints about one source.

    Parameters
    ----------
    source : str
        How the user knows the source: a file name, "the data".
    to_categories : callable
        Names of text columns -> the exact line to type that makes codes of them.
    """

    def __init__(self, source: str, to_categories: Callable[[list[str]], str]) -> None:
        self.source = source
        self.to_categories = to_categories
        self._values: list[str] = []
        self._count = 0
        self._text: dict[str, str] = {}

    def values(self, column: str, count: int, first: Iterable[tuple[str, str]]) -> None:
        """Note ``count`` unusable values of a column; ``first`` are the first few.

        Parameters
        ----------
        column : str
            The name of the column.
        count : int
            How many values are unusable.
        first : iterable of (place, what)
            Such as ``("in line 5", "missing")``; only a few are looked at.
        """
        self._count += count
        for place, what in first:
            if len(self._values) >= MOST_SHOWN:
                return
            where = f" {place}" if place else ""
            self._values.append(f"{column!r}{where} is {what}")

    def text(self, column: str, example: str) -> None:
        """Note that a whole column is text."""
        self._text[column] = example

    def refuse(self, column: str, what: str, remedy: str) -> NoReturn:
        """Refuse a column of a kind that no log-likelihood can use.

        Raises
        ------
        DataError
            Always.
        """
        message = f"column {column!r} of {self.source} must hold numbers"
        raise DataError(sentence(message, what, remedy))

    def speak(self) -> None:
        """Raise when anything was noted.

        Raises
        ------
        DataError
            Text columns first, with the line to type; then the unusable values by place.
        """
        if self._text:
            raise DataError(self._about_text())
        if self._count:
            raise DataError(self._about_values())

    def _about_text(self) -> str:
        names, examples = list(self._text), list(self._text.values())
        many = len(names) > 1
        listed = ", ".join(map(repr, names))
        opening = f"{'columns' if many else 'column'} {listed} of {self.source}"
        got = ", ".join(map(repr, examples[:MOST_SHOWN]))
        if all(DATE.match(example) for example in examples):
            remedy = "Write days since the first date instead, as numbers"
            return sentence(f"{opening} {'hold' if many else 'holds'} dates", got, remedy)
        remedy = f"Type: {self.to_categories(names)}"
        verb = "are" if many else "is"
        return sentence(f"{opening} {verb} text, and a calculation needs numbers", got, remedy)

    def _about_values(self) -> str:
        more = self._count - len(self._values)
        tail = f" (and {more} more)" if more else ""
        subject = "a value" if self._count == 1 else f"{self._count} values"
        return (
            f"{self.source} has {subject} that cannot be used: {', '.join(self._values)}{tail}. "
            "Correct them, or leave those rows out: none is dropped or filled in silently."
        )
