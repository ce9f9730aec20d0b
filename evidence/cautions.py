"""What the reader must be told about the modes and the Hessian, in the user's words."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from evidence.complaints import Caution
from evidence.curvature import Curvature, measure_curvature, whitened_axes
from evidence.laplace import UNKNOWN_ABOVE, Mode
from evidence.mode import Findings, Peak
from evidence.outcome import Outcome
from evidence.problem import Problem

__all__ = ["after_audit", "find_cautions"]

NOTICEABLE = 0.25  # second-order term above which plain Laplace is said to be off [nats]
ALARM = "the second-order term is"
HELD = "is held by the prior alone"
HELD_SEEN = "only the prior holds"  # the same, as the audit tells it by widths alone


def find_cautions(
    problem: Problem,
    findings: Findings,
    blamed: Peak | None,
    leading: Mode | None,
    curvature: Curvature | None,
) -> tuple[Caution, ...]:
    """Everything that the reader must be told, the gravest first.

    Parameters
    ----------
    problem : Problem
    findings : Findings
    blamed : Peak or None
        The search that found no peak and for which the candidate failed.
    leading : Mode or None
    curvature : Curvature or None
        At the leading mode.
    """
    found: list[Caution] = []
    status = Outcome.OK
    if blamed is not None:
        status = blamed.outcome
        found.append(Caution(status.sentence + _where(problem, blamed), status.remedy))
    elif leading is not None and leading.status is not Outcome.OK:
        status = leading.status
        found.append(Caution(status.sentence + _direction(problem, leading), status.remedy))
    found += _unseen(problem, findings, blamed)
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
        term = leading.second_order_term
        says = f"{term:+.2f} nats: plain Laplace is off by about as much"
        if abs(term) > UNKNOWN_ABOVE:
            says = f"{term:+.2g} nats: plain Laplace is off by an unknown amount"
        found.append(Caution(f"{ALARM} {says}", 'Audit it with depth="standard"'))
    return tuple(found)


def after_audit(
    told: Sequence[Caution],
    before: Sequence[tuple[str, str]],
    found: Sequence[tuple[str, str]],
) -> tuple[Caution, ...]:
    """Join what was told with what an audit found, without saying a thing twice.

    Parameters
    ----------
    told : sequence of Caution
        So far.
    before, found : sequence of (sentence, remedy)
        Of an earlier audit, which the new one replaces, and of the new one.
    """
    earlier = {words for words, _ in before}
    # an audit answers the alarm about the second-order term
    kept = [c for c in told if c.sentence not in earlier and not c.sentence.startswith(ALARM)]
    said = {c.sentence for c in kept}
    shares_known = any(HELD in c.sentence for c in kept)
    new = [
        Caution(words, remedy)
        for words, remedy in found
        if words not in said and not (shares_known and words.startswith(HELD_SEEN))
    ]
    return (*kept, *new)


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
                f"{direction.combination} {HELD} "
                f"({100 * direction.share_from_data:.1f} % of its curvature comes from the data)",
                "The evidence depends directly on this prior: justify it, or drop the parameter",
            )
        )
    flat = [] if leading is None else np.flatnonzero(leading.capped[: len(curvature.directions)])
    if len(flat):
        found.append(
            Caution(
                "along some direction the posterior is flatter than three prior sd: "
                + "; ".join(curvature.directions[i].combination for i in flat[:3]),
                "The Gaussian picture fails there; rely on the audit's estimate",
            )
        )
    return found


def _unseen(problem: Problem, findings: Findings, blamed: Peak | None) -> list[Caution]:
    """Where the density is finite and the search is blind: mass there is not counted."""
    kind = Outcome.NAN_DERIVATIVE
    blind = [end for end in findings.failures if end.outcome is kind]
    if not blind or (blamed is not None and blamed.outcome is kind):
        return []
    return [
        Caution(
            f"from {len(blind)} of {findings.starts} starts {kind.sentence}"
            f"{_where(problem, blind[0])}",
            kind.remedy,
        )
    ]


def _where(problem: Problem, end: Peak) -> str:
    """Which parameters are meant, where that can be said."""
    if end.outcome is Outcome.NAN_DERIVATIVE:
        here = problem.evaluate(end.z)
        bad = ~np.isfinite(here.gradient) | ~np.isfinite(np.diagonal(here.hessian))
        return _named(" (with respect to {})", problem, bad)
    if end.outcome is Outcome.NO_PROGRESS:
        slope = np.abs(end.gradient) * problem.spread
        return _named(" (along {})", problem, slope > 0.1 * slope.max())
    if end.outcome is Outcome.RUNAWAY:
        distance = np.abs(end.z - problem.centre) / problem.spread
        return _named(" (along {})", problem, distance > 0.1 * distance.max())
    if end.outcome in (Outcome.FLAT, Outcome.INDEFINITE):
        return _direction(problem, end)
    return ""


def _named(text: str, problem: Problem, chosen: np.ndarray) -> str:
    names = [name for name, is_meant in zip(problem.names, chosen, strict=True) if is_meant]
    more = f" and {len(names) - 4} more" if len(names) > 4 else ""
    return text.format(", ".join(names[:4]) + more) if names else ""


def _direction(problem: Problem, peak: Peak | Mode) -> str:
    axes = whitened_axes(peak.hessian, problem.spread)
    curvature = measure_curvature(peak.hessian, None, axes, problem.names)
    return f": {curvature.directions[0].combination}"
