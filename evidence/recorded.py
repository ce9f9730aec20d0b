"""A result read back from its record: numbers and tables, no draws."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from evidence.complaints import Caution
from evidence.curvature import Curvature, Direction
from evidence.estimate import Approximation
from evidence.outcome import Outcome
from evidence.posterior import RecordedPosterior
from evidence.record import FIGURES

__all__ = ["recorded_candidate"]


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


def _open(value: Any) -> float:
    return np.nan if value is None else float(value)
