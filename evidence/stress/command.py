"""What the command line does with a stress: which parts, in which file, in which words."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any

from evidence.complaints import DeclarationError, sentence
from evidence.report.json_form import record_to_json
from evidence.report.rows import rows_to_csv
from evidence.report.writing import check_writable, write_text
from evidence.stress.observations import stress_observations
from evidence.stress.priors import stress_priors
from evidence.stress.saving import check_suffix
from evidence.weighing import Weighing

__all__ = ["PARTS", "Stress", "check_paths", "save_stress", "stress_parts"]

PARTS = ("priors", "observations")


class Stress:
    """The parts that could be computed, by name, and a sentence for each that could not."""

    def __init__(self, parts: dict[str, Any], refused: list[str]) -> None:
        self.parts, self.refused = parts, refused

    def to_dict(self) -> dict[str, Any]:
        """Everything as plain numbers and texts."""
        parts = {name: part.to_dict() for name, part in self.parts.items()}
        return {"format": "evidence stress", "version": 1, **parts, "refused": self.refused}

    def to_json(self) -> str:
        """The same as JSON text."""
        return record_to_json(self.to_dict())

    def __repr__(self) -> str:
        return "\n\n".join([*(repr(part) for part in self.parts.values()), *self.refused])


def check_paths(paths: Iterable[str], part: str) -> None:
    """Find out before the calculation whether its result can be kept.

    Raises
    ------
    DeclarationError
        A suffix that is neither .json nor .csv, or .csv for two tables at once.
    DataError
        A path that cannot be written.
    """
    for path in paths:
        if check_suffix(path) == ".csv" and part == "both":
            raise DeclarationError(
                sentence(
                    "a .csv file holds one table, of the priors or of the observations",
                    path,
                    "Add --part priors, or --part observations",
                )
            )
        check_writable(path)


def stress_parts(weighing: Weighing, part: str, progress: Callable[[str], None]) -> Stress:
    """Compute the part asked for, or both; of both, one that is refused is told and left out.

    Raises
    ------
    DeclarationError
        The part asked for cannot be computed, or neither of both.
    """
    run: dict[str, Callable[..., Any]] = {
        "priors": stress_priors,
        "observations": stress_observations,
    }
    if part != "both":
        return Stress({part: run[part](weighing, progress=progress)}, [])
    parts: dict[str, Any] = {}
    refused: list[str] = []
    for name in PARTS:
        try:
            parts[name] = run[name](weighing, progress=progress)
        except DeclarationError as error:
            refused.append(str(error))
    if not parts:
        raise DeclarationError(" ".join(refused))
    return Stress(parts, refused)


def save_stress(stress: Stress, paths: Iterable[str]) -> None:
    """Write a stress to files, each whole or not at all.

    Raises
    ------
    DeclarationError
        Another suffix.
    DataError
        A path that cannot be written.
    """
    for path in paths:
        if check_suffix(path) == ".json":
            write_text(path, stress.to_json())
        else:
            (only,) = stress.parts.values()
            record = only.to_dict()
            write_text(path, rows_to_csv(list(record["columns"]), record["rows"]))
