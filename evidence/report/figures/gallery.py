"""Which pictures there are, by name, with the words that stand for each where it cannot be seen."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from evidence.complaints import DeclarationError, near_name, sentence
from evidence.report.figures import comparison
from evidence.report.figures.marginals import marginals
from evidence.report.figures.prediction import predictions
from evidence.report.figures.profiles import profiles
from evidence.report.figures.rungs import rungs
from evidence.report.figures.spectrum import spectrum

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["CANDIDATE", "WEIGHING", "draw_candidate", "draw_weighing"]

Record = Mapping[str, Any]

WEIGHING: dict[str, Callable[[Record], Figure]] = {
    "overview": comparison.overview,
    "probabilities": comparison.probabilities,
    "split": comparison.split,
}
CANDIDATE: dict[str, Callable[[Record], Figure]] = {
    "predictions": lambda c: predictions(_part(c, "predictions"), c.get("units") or {}),
    "profiles": lambda c: profiles(_part(c, "profiles")),
    "marginals": lambda c: marginals(_part(c, "marginals")),
    "curvature": lambda c: spectrum((c.get("curvature") or {}).get("directions") or []),
    "audit": rungs,
}


def draw_weighing(record: Record, picture: str) -> Figure:
    """Draw one picture of a weighing by its name.

    Raises
    ------
    DeclarationError
        There is no such picture.
    """
    return _chosen(WEIGHING, picture)(record)


def draw_candidate(candidate: Record, picture: str) -> Figure:
    """Draw one picture of a candidate by its name.

    Raises
    ------
    DeclarationError
        There is no such picture.
    """
    return _chosen(CANDIDATE, picture)(candidate)


def _part(candidate: Record, part: str) -> list[Record]:
    return (candidate.get("pictures") or {}).get(part) or []


def _chosen(known: Mapping[str, Any], picture: Any) -> Any:
    if picture in known:
        return known[picture]
    raise DeclarationError(
        sentence(f"plot() knows the pictures {', '.join(known)}", repr(picture)[:80])
        + near_name(str(picture), known)
    )
