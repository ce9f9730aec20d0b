"""Decide between models: log evidence by Laplace's method, with a stated error.

Everything a user needs is named here and loaded when it is first used.
"""

from __future__ import annotations

import importlib
from typing import Any

__version__ = "0.1.0"

_PLACES = {
    "Approximation": "evidence.estimate",
    "Batch": "evidence.batches.batch",
    "DataError": "evidence.complaints",
    "DeclarationError": "evidence.complaints",
    "EvidenceWarning": "evidence.complaints",
    "Model": "evidence.model",
    "Study": "evidence.study",
    "Weighing": "evidence.weighing",
    "approximate": "evidence.approximation",
    "evidence_function": "evidence.derivatives",
    "fit_hyperparameters": "evidence.hyperfit",
    "stress_observations": "evidence.stress",
    "stress_priors": "evidence.stress",
    "audit": "evidence.approximation",
    "blend": "evidence.prediction",
    "prior_predictive": "evidence.prediction",
    "rehearse": "evidence.rehearsal",
    "read_data": "evidence.tables",
    "read_study": "evidence.study",
    "weigh": "evidence.weighing",
    "weigh_many": "evidence.batches.driver",
}

__all__ = sorted([*_PLACES, "distributions"])


def __getattr__(name: str) -> Any:
    if name in _PLACES:
        value = getattr(importlib.import_module(_PLACES[name]), name)
        globals()[name] = value
        return value
    if name == "distributions":
        return importlib.import_module("evidence.distributions")
    raise AttributeError(f"module 'evidence' has no attribute {name!r}")


def __dir__() -> list[str]:
    return [*__all__, "__version__"]
