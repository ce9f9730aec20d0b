"""What a run has in common, and what comes out for each data set."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np

from evidence.batches.findings import TRUST_CODE, Finding
from evidence.batches.parts import Schema

__all__ = ["Answers", "Settings"]


@dataclasses.dataclass(frozen=True, kw_only=True)
class Settings:
    """What all parts of a run have in common.

    Attributes
    ----------
    depth, seed : str, int
    block : int
        Rows of one call of a program.
    schema : Schema
    shared, template : dict
        Columns common to all data sets; the own columns of the first good one.
    starts : dict
        Name of the candidate -> (M, d) starts.
    """

    depth: str
    seed: int
    block: int
    schema: Schema
    shared: dict[str, np.ndarray]
    template: dict[str, np.ndarray]
    starts: dict[str, np.ndarray]


@dataclasses.dataclass(frozen=True, kw_only=True)
class Answers:
    """What came out for each data set (n,): numbers in nats, codes of trust and status."""

    log_evidence: np.ndarray
    standard_error: np.ndarray
    laplace: np.ndarray
    trust: np.ndarray
    status: np.ndarray

    @classmethod
    def empty(cls, n: int) -> Answers:
        """No number anywhere, and every data set bad."""
        nothing = [np.full(n, np.nan) for _ in range(3)]
        codes = [np.full(n, code, np.int16) for code in (TRUST_CODE["failed"], Finding.BAD_DATA)]
        return cls(**dict(zip([f.name for f in dataclasses.fields(cls)], nothing + codes,
                              strict=True)))  # fmt: skip

    def put(self, places: Any, **columns: Any) -> None:
        """Write columns at some places."""
        for name, values in columns.items():
            getattr(self, name)[places] = values
