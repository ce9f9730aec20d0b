"""A result as a plain record, and back: what the report's forms take and what JSON keeps."""

from __future__ import annotations

import platform
from collections.abc import Mapping
from typing import Any

import numpy as np

from evidence.complaints import Caution
from evidence.curvature import Curvature, Direction
from evidence.estimate import Approximation
from evidence.outcome import Outcome
from evidence.posterior import RecordedPosterior

__all__ = ["candidate_record", "recorded_candidate", "versions"]

FIGURES = (
    "log_evidence",
    "standard_error",
    "laplace",
    "second_order_term",
    "bic",
    "log_posterior_at_mode",
)


def candidate_record(result: Approximation) -> dict[str, Any]:
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


def recorded_candidate(record: Mapping[str, Any], *, depth: str, seed: int) -> Approximation:
    """An Approximation from a candidate's record; it holds numbers and tables, no draws."""
    number = {key: _open(record.get(key)) for key in (*FIGURES, "fit", "well_determined")}
    modes = record.get("modes") or [{}]
    return Approximation(
        name=record["candidate"],
        log_evidence=number["log_evidence"],
        standard_error=number["standard_error"],
        laplace=number["laplace"],
        laplace_all_modes=np.nan,
        second_order_term=number["second_order_term"],
        cubic_part=np.nan,
        quartic_part=np.nan,
        mode={k: np.asarray(v, float) for k, v in (modes[0].get("mode") or {}).items()},
        log_posterior_at_mode=number["log_posterior_at_mode"],
        log_likelihood_at_mode=number["fit"],
        bic=number["bic"],
        curvature=_recorded_curvature(record.get("curvature") or {}, number["well_determined"]),
        posterior=RecordedPosterior(record["posterior"]) if record["posterior"] else None,
        modes=(),
        audit=None,
        trust=record["trust"],
        warnings=tuple(Caution(w["sentence"], w.get("remedy", "")) for w in record["warnings"]),
        status=Outcome[record["status"]],
        dimension=int(record.get("dimension") or 0),
        terms=record.get("terms"),
        depth=depth,
        seed=seed,
        starts=int(record.get("starts") or 0),
        seconds=_open(record.get("seconds")),
        recorded=record,
    )


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


def _recorded_curvature(record: Mapping[str, Any], determined: float) -> Curvature | None:
    if not record:
        return None
    directions = tuple(
        Direction(
            combination=x["combination"],
            sd=_open(x["sd"]),
            share_from_data=_open(x["share_from_data"]),
        )
        for x in record.get("directions", ())
    )
    return Curvature(
        hessian=np.zeros((0, 0)),
        scaled_condition=_open(record.get("scaled_condition")),
        half_log_det=np.nan,
        well_determined=determined,
        directions=directions,
        from_prior=(),
    )


def _prior_texts(model: Any) -> dict[str, str]:
    if model.bare:
        return {name: f"in the log posterior, on {model.supports[name]!r}" for name in model.start}
    texts = {}
    for name, prior in model.priors.items():
        is_function = not hasattr(prior, "log_prob")
        texts[name] = "a function of earlier parameters" if is_function else repr(prior)
    return texts


def _open(value: Any) -> float:
    return np.nan if value is None else float(value)
