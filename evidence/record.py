"""A result as a plain record: what the report's forms take and what JSON keeps."""

from __future__ import annotations

import platform
from typing import Any

import numpy as np

from evidence.curvature import Curvature

__all__ = ["FIGURES", "candidate_record", "versions"]

FIGURES = (
    "log_evidence",
    "standard_error",
    "laplace",
    "second_order_term",
    "bic",
    "log_posterior_at_mode",
)


def candidate_record(result: Any) -> dict[str, Any]:
    """Everything about one candidate that does not depend on the others."""
    model = None if result.problem is None else result.problem.model
    return {
        "candidate": result.name,
        **{name: float(getattr(result, name)) for name in FIGURES},
        "fit": float(result.log_likelihood_at_mode),
        "occam_factor": float(result.log_occam_factor),
        "well_determined": float(result.well_determined),
        "trust": result.trust,
        "status": result.status.name,
        "status_sentence": result.status.sentence,
        "warnings": [caution._asdict() for caution in result.warnings],
        "dimension": result.dimension,
        "terms": result.terms,
        "starts": result.starts,
        "seconds": result.seconds,
        "modes": [_mode_record(mode) for mode in result.modes],
        "curvature": _curvature_record(result.curvature),
        "posterior": [] if result.posterior is None else result.posterior.rows(),
        "audit": result.story(),
        "priors": {} if model is None else _prior_texts(model),
        "notes": {} if model is None else dict(model.notes),
        "units": {} if model is None else dict(model.units),
    }


def versions() -> dict[str, str]:
    """Versions that the numbers may depend on."""
    import jax

    from evidence import __version__

    return {
        "evidence": __version__,
        "jax": jax.__version__,
        "numpy": np.__version__,
        "python": platform.python_version(),
    }


def _mode_record(mode: Any) -> dict[str, Any]:
    return {
        "log_density": float(mode.log_density),
        "laplace": float(mode.laplace),
        "second_order_term": float(mode.second_order_term),
        "starts": mode.hits,
        "mode": {name: np.asarray(value).tolist() for name, value in mode.mode.items()},
    }


def _curvature_record(curvature: Curvature | None) -> dict[str, Any]:
    if curvature is None:
        return {}
    return {
        "scaled_condition": float(curvature.scaled_condition),
        "directions": [
            {
                "combination": x.combination,
                "sd": float(x.sd),
                "share_from_data": float(x.share_from_data),
            }
            for x in curvature.directions[:10]
        ],
    }


def _prior_texts(model: Any) -> dict[str, str]:
    if model.bare:
        return {name: f"in the log posterior, on {model.supports[name]!r}" for name in model.start}
    texts = {}
    for name, prior in model.priors.items():
        is_function = not hasattr(prior, "log_prob")
        texts[name] = "a function of earlier parameters" if is_function else repr(prior)
    return texts
