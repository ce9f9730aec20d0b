"""The two kinds of mistake, the one kind of warning, and how each is worded.

A mistake of the user's raises at once and says what was expected, what came and what to type.
Mathematics that does not work out is not a mistake: it is a result with an outcome
(:mod:`evidence.outcome`).
"""

from __future__ import annotations

import difflib
import importlib
import types
from collections.abc import Iterable
from typing import NamedTuple

__all__ = [
    "Caution",
    "DataError",
    "DeclarationError",
    "EvidenceWarning",
    "load_optional",
    "near_name",
    "sentence",
]

DISTRIBUTION_NAME = "laplace-model-evidence"


class DeclarationError(ValueError):
    """A candidate, a prior, an option or a study file is declared wrongly."""


class DataError(ValueError):
    """The data cannot be used as they are: missing, not numbers, of uneven length."""


class EvidenceWarning(UserWarning):
    """A computed number must be read with care; the text says why and what to do."""


class Caution(NamedTuple):
    """Why a number must be read with care, and what to do about it."""

    sentence: str
    remedy: str = ""

    def __str__(self) -> str:
        remedy = self.remedy[:1].upper() + self.remedy[1:]
        return f"{self.sentence}. {remedy}" if remedy else self.sentence


def sentence(expected: str, got: str | None = None, remedy: str | None = None) -> str:
    """Word a complaint: what was expected, what came, what to type.

    Parameters
    ----------
    expected : str
        What is wrong or what was expected, without the full stop.
    got : str, optional
        The offending value as the user would recognise it.
    remedy : str, optional
        What to type or do.
    """
    parts = [expected.rstrip(".")]
    if got is not None:
        parts.append(f"got {got}".rstrip("."))
    text = "; ".join(parts) + "."
    return text if remedy is None else f"{text} {remedy.rstrip('.')}."


def near_name(name: str, known: Iterable[str]) -> str:
    """Return " Did you mean 'x'?" for the nearest known name, or an empty string."""
    nearest = difflib.get_close_matches(str(name), [str(k) for k in known], n=1, cutoff=0.6)
    return f" Did you mean {nearest[0]!r}?" if nearest else ""


def load_optional(module: str, extra: str) -> types.ModuleType:
    """Import a module that belongs to an optional extra.

    Raises
    ------
    ImportError
        With the exact command that installs the extra.
    """
    try:
        return importlib.import_module(module)
    except ModuleNotFoundError as missing:
        if missing.name is None or missing.name.split(".")[0] != module.split(".")[0]:
            raise
        raise ImportError(
            f"{module.split('.')[0]} is needed here and is not installed. "
            f"Type: pip install '{DISTRIBUTION_NAME}[{extra}]'"
        ) from missing
