"""What is compared: candidates, their prior probabilities, and that they weigh the same data."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from evidence.complaints import DeclarationError, near_name, sentence
from evidence.model import Model
from evidence.study import Study

__all__ = ["candidates_of", "chances_of", "check_same_terms"]


def candidates_of(models: Any) -> list[Model]:
    """The candidates of a study, a sequence or a single one.

    Raises
    ------
    DeclarationError
        There are none, something else is among them, or two have one name.
    """
    if isinstance(models, Study):
        models = models.models
    if isinstance(models, Model):
        models = [models]
    candidates = list(models) if isinstance(models, Sequence) else []
    wrong = [m for m in candidates if not isinstance(m, Model)]
    if not candidates or wrong:
        raise DeclarationError(
            sentence(
                "weigh needs a list of candidates made with evidence.Model",
                type(wrong[0]).__name__ if wrong else repr(models)[:80],
                "Type: ev.weigh([ev.Model(...), ev.Model(...)], data)",
            )
        )
    names = [m.name for m in candidates]
    if twice := [name for name in names if names.count(name) > 1]:
        raise DeclarationError(
            sentence("candidates must have different names", f"{twice[0]!r} twice")
        )
    return candidates


def chances_of(models: Sequence[Model], given: Any) -> dict[str, float]:
    """Prior probabilities by name, which add up to 1; equal where none are given.

    Raises
    ------
    DeclarationError
        Not one positive number for each candidate.
    """
    names = [m.name for m in models]
    if given is None:
        return dict.fromkeys(names, 1.0 / len(names))
    if not isinstance(given, Mapping):
        values = list(given) if np.iterable(given) and not isinstance(given, str) else [given]
        if len(values) != len(names):
            raise DeclarationError(
                sentence(f"prior_probabilities needs {len(names)} numbers", f"{len(values)}")
            )
        given = dict(zip(names, values, strict=True))
    for name in (*given, *names):
        if name not in names or name not in given:
            raise DeclarationError(
                f"prior_probabilities must name each candidate once: {', '.join(names)}; "
                f"{name!r} is {'unknown' if name not in names else 'missing'}."
                f"{near_name(name, names)}"
            )
    try:
        weights = np.array([given[name] for name in names], dtype=float)
    except (TypeError, ValueError):
        weights = np.array([np.nan])
    if not np.all(np.isfinite(weights)) or np.any(weights <= 0):
        raise DeclarationError(
            sentence("prior_probabilities must be positive numbers", str(dict(given)))
        )
    return dict(zip(names, (weights / weights.sum()).tolist(), strict=True))


def check_same_terms(terms: Mapping[str, int | None]) -> None:
    """Refuse candidates that do not weigh the same observations.

    Parameters
    ----------
    terms : mapping
        Name of a candidate to its number of log-likelihood terms; None for a scalar.

    Raises
    ------
    DeclarationError
        The numbers differ.
    """
    counts = {name: count for name, count in terms.items() if count is not None}
    if len(set(counts.values())) > 1:
        shown = ", ".join(f"{name!r} {count}" for name, count in counts.items())
        raise DeclarationError(
            sentence(
                "the candidates return different numbers of log-likelihood terms, so they are not "
                "weighing the same data",
                shown,
                "Let each return one term for every observation",
            )
        )
