"""Reading the reference values and data of this folder, and small helpers around a fit."""

from __future__ import annotations

import functools
import json
import warnings
from pathlib import Path

import numpy as np
import pytest

import evidence as ev

HERE = Path(__file__).parent


@functools.cache
def stored(file: str) -> dict:
    return json.loads((HERE / file).read_text())


def values(family: str) -> list[dict]:
    """The entries of one family of ``values.json``, numbers as floats."""
    return [_floats(entry) for entry in stored("values.json")[family]]


def _floats(value):
    if isinstance(value, dict):
        return {k: v if k == "data" else _floats(v) for k, v in value.items()}
    if isinstance(value, list):
        return [_floats(item) for item in value]
    return float(value)


def dataset(name: str) -> dict[str, np.ndarray]:
    """One data set as float64 columns."""
    entry = stored("datasets.json")[name]
    return dict(zip(entry["columns"], np.array(entry["data"], float).T, strict=True))


def published(key: str) -> dict:
    """Published numbers under one key, with their source and tolerance."""
    return stored("published.json")[key]


def fit(model, data, depth: str = "none"):
    """Approximate without the warnings: these are asserted where they are the subject."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ev.EvidenceWarning)
        return ev.approximate(model, data, depth=depth)


def assert_series(approximation, known: dict, laplace: float = 1e-9, term: float = 1e-4) -> None:
    """Plain Laplace and second-order term of a fit against the known ones.

    The term comes from differences of Hessians with a step of 0.01 sd: right to about 1e-4 of
    the size of its cubic and quartic parts.
    """
    assert approximation.laplace == pytest.approx(known["laplace"], rel=laplace, abs=laplace)
    size = abs(approximation.cubic_part) + abs(approximation.quartic_part)
    assert abs(approximation.second_order_term - known["second_order_term"]) <= term * (1e-3 + size)


def assert_covered(approximation, truth: float) -> None:
    """The audited estimate within three stated errors of the truth, and the error not idle."""
    error = approximation.log_evidence - truth
    assert abs(error) <= 3.0 * approximation.standard_error + 1e-7, approximation
    assert approximation.standard_error < 0.05, approximation
    assert approximation.trust in ("sound", "corrected", "rough"), approximation


def best_with_term(approximation) -> float:
    """Mode sum plus the second-order term of the leading mode [nats]."""
    return approximation.laplace_all_modes + approximation.second_order_term
