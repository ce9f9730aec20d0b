"""What the reader must be told about the modes and the Hessian, in the user's words."""

from __future__ import annotations

import numpy as np

from evidence.complaints import Caution
from evidence.curvature import Curvature, measure_curvature, whitened_axes
from evidence.laplace import Mode
from evidence.outcome import Outcome
from evidence.problem import Problem

__all__ = ["find_cautions", "without_alarm"]

NOTICEABLE = 0.25  # second-order term above which plain Laplace is said to be off [nats]
ALARM = "the second-order term is"


def find_cautions(
    problem: Problem, status: Outcome, leading: Mode | None, curvature: Curvature | None
) -> tuple[Caution, ...]:
    found: list[Caution] = []
    if status is not Outcome.OK:
        found.append(Caution(status.sentence + _where(problem, status, leading), status.remedy))
    if problem.float32:
        found.append(
            Caution(
                f"{', '.join(problem.float32[:3])} is float32, which keeps 7 of 16 digits",
                "Make it with NumPy, or inside the function, so that it is float64",
            )
        )
    if curvature is not None and status is Outcome.OK:
        found += _curvature_cautions(curvature, leading)
    if leading is not None and abs(leading.second_order_term) > NOTICEABLE:
        found.append(
            Caution(
                f"{ALARM} {leading.second_order_term:+.2f} nats: plain Laplace is off by about "
                "as much",
                'Audit it with depth="standard"',
            )
        )
    return tuple(found)


def without_alarm(cautions: tuple[Caution, ...]) -> tuple[Caution, ...]:
    """An audit answers the alarm about the second-order term."""
    return tuple(c for c in cautions if not c.sentence.startswith(ALARM))


def _curvature_cautions(curvature: Curvature, leading: Mode | None) -> list[Caution]:
    found = []
    if curvature.badly_conditioned:
        loosest = curvature.directions[0]
        found.append(
            Caution(
                f"the Hessian is badly conditioned (scaled condition number "
                f"{curvature.scaled_condition:.1e}); the loosest direction is "
                f"{loosest.combination}",
                "Fix or combine these parameters, or give them tighter priors",
            )
        )
    for direction in curvature.held_by_prior[:3]:
        found.append(
            Caution(
                f"{direction.combination} is held by the prior alone "
                f"({100 * direction.share_from_data:.1f} % of its curvature comes from the data)",
                "The evidence depends directly on this prior: justify it, or drop the parameter",
            )
        )
    if leading is not None and np.any(leading.capped):
        found.append(
            Caution(
                "along some direction the posterior is flatter than three prior sd: "
                f"{curvature.directions[0].combination}",
                "The Gaussian picture fails there; rely on the audit's estimate",
            )
        )
    return found


def _where(problem: Problem, status: Outcome, leading: Mode | None) -> str:
    """Which parameter is meant, where that can be said."""
    if status is Outcome.NAN_DERIVATIVE and leading is not None:
        here = problem.evaluate(leading.z)
        bad = ~np.isfinite(here.gradient) | ~np.isfinite(here.hessian).all(axis=0)
        names = [name for name, is_bad in zip(problem.names, bad, strict=True) if is_bad]
        return f" (with respect to {', '.join(names[:4])})" if names else ""
    if status in (Outcome.FLAT, Outcome.INDEFINITE) and leading is not None:
        axes = whitened_axes(leading.hessian, problem.spread)
        curvature = measure_curvature(leading.hessian, None, axes, problem.names)
        return f": {curvature.directions[0].combination}"
    return ""
