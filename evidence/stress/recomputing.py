"""The evidence of one candidate with other numbers in its declaration, computed afresh.

Laplace's method over the modes with the second-order term, plus the gap between that and the
audit's accepted value, which is held where the declaration puts it. A search goes on from the
modes known so far and, where asked, from new starts.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from evidence.approximation import fit
from evidence.arithmetic import log_sum_exp
from evidence.estimate import Approximation
from evidence.laplace import expand
from evidence.mode import LARGE, MATTERS, Findings, Peak, gather, search_numpy, starting_points
from evidence.model import Model
from evidence.outcome import Outcome
from evidence.problem import Problem
from evidence.stress.levers import Lever

__all__ = ["Recomputed", "with_hyperparameters"]

LARGEST_TERM = 0.5  # and 0.05 per coordinate: beyond it the second-order term says "unknown"
PER_COORDINATE = 0.05
EXPANDED_UP_TO = 150
FRESH_STARTS = 8


class Recomputed:
    """A candidate of a weighing whose declaration can be moved.

    Parameters
    ----------
    approximation : Approximation
        With its problem, and at least one smooth mode.

    Attributes
    ----------
    gap : ()
        Accepted log evidence minus what is recomputed at the declared numbers [nats]; held.
    with_term : bool
        Whether the second-order term is added, everywhere or nowhere.
    """

    def __init__(self, approximation: Approximation) -> None:
        assert approximation.problem is not None
        self.approximation = approximation
        self.problem = approximation.problem
        self.hyper = self.problem.model.hyperparameters()
        smooth = [m for m in approximation.modes if np.isfinite(m.laplace)]
        self.starts = np.array([m.z for m in smooth]).reshape(len(smooth), self.problem.dim)
        terms = np.array([m.second_order_term for m in smooth])
        limit = max(LARGEST_TERM, PER_COORDINATE * self.problem.dim)
        self.with_term = self.problem.dim <= EXPANDED_UP_TO and bool(np.all(np.abs(terms) <= limit))
        self._known: dict[Any, float] = {}
        self.gap = approximation.log_evidence - self.value([], [])

    def value(
        self, levers: Sequence[Lever], steps: Sequence[float], *, fresh: bool = False
    ) -> float:
        """Laplace's method with the levers moved: () [nats], without the gap; nan if it fails.

        Parameters
        ----------
        levers, steps : sequences of equal length
            What is moved, and by how many log units or prior sd.
        fresh : bool
            Whether to look for other modes as well.
        """
        key = (tuple(zip((x.name for x in levers), map(float, steps), strict=True)), fresh)
        if key not in self._known:
            problem = self.problem_at(levers, steps)
            self._known[key] = self._sum(problem, problem.hessian, self._search(problem, fresh))
        return self._known[key]

    def log_evidence(self, levers: Sequence[Lever], steps: Sequence[float], **how: Any) -> float:
        """The same with the held gap [nats]."""
        return self.value(levers, steps, **how) + self.gap

    def problem_at(self, levers: Sequence[Lever], steps: Sequence[float]) -> Problem:
        """The candidate on its data with the levers moved; it shares the compiled programs."""
        hyper = self.hyper
        for lever, step in zip(levers, steps, strict=True):
            hyper = lever.moved(hyper, float(step))
        return Problem(with_hyperparameters(self.problem.model, hyper), self.problem.arrays)

    def audited(self, levers: Sequence[Lever], steps: Sequence[float]) -> tuple[float, float]:
        """Log evidence by a full audit at a point, with its standard error [nats]."""
        problem = self.problem_at(levers, steps)
        depth = "quick" if self.approximation.depth == "quick" else "standard"
        with np.errstate(all="ignore"):
            result = fit(problem.model, problem.arrays, depth=depth, seed=self.approximation.seed)
        return result.log_evidence, result.standard_error

    def slope(self, levers: Sequence[Lever], steps: Sequence[float], index: int) -> float:
        """Derivative of the log evidence along one lever [nats per step], by differences.

        Four points: the error goes with the fourth power of the distance.
        """
        h = 0.02

        def at(distance: float) -> float:
            moved = list(steps)
            moved[index] += distance
            return self.value(levers, moved)

        return (8 * (at(h) - at(-h)) - (at(2 * h) - at(-2 * h))) / (12 * h)

    def _search(self, problem: Problem, fresh: bool) -> Findings:
        starts = self.starts
        if fresh and problem.dim <= LARGE:
            more = starting_points(problem, FRESH_STARTS, self.approximation.seed)
            starts = np.concatenate([starts, more])
        return gather(search_numpy(problem, starts))

    def _sum(
        self, problem: Problem, hessian_at: Callable[..., np.ndarray], findings: Findings
    ) -> float:
        if problem.dim == 0:
            return float(problem.evaluate(np.zeros(0)).log_density)
        peaks = findings.peaks
        if not peaks or _overtopped(findings):
            return np.nan
        kept = [p for p in peaks if p.laplace > peaks[0].laplace - MATTERS]
        terms = [
            expand(hessian_at, p.z, p.hessian, problem.spread).total if self.with_term else 0.0
            for p in kept
        ]
        return float(log_sum_exp([p.laplace + c for p, c in zip(kept, terms, strict=True)]))


def with_hyperparameters(model: Model, hyper: dict[str, Any]) -> Model:
    """The same candidate with other numbers; it shares the compiled programs of the first."""
    other = copy.copy(model)
    other.programs = model.programs
    other.priors = {name: hyper["priors"].get(name, prior) for name, prior in model.priors.items()}
    other.constants = dict(hyper["constants"])
    return other


def _overtopped(findings: Findings) -> bool:
    """Whether a search that found no peak ended above those that did."""
    top = max(p.log_density for p in findings.peaks)
    return any(_is_above(end, top) for end in findings.failures)


def _is_above(end: Peak, top: float) -> bool:
    if end.outcome is Outcome.INFINITE:
        return True
    return bool(np.isfinite(end.log_density)) and end.log_density > top + 1e-6
