"""From the rungs climbed to one estimate, its error and a word of trust."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from evidence.rungs.importance import Sample
from evidence.rungs.record import Rung

__all__ = ["Attempt", "Verdict", "best_available", "trust_word"]

SOUND_BAR = 0.1  # nats: three standard errors, and distance of plain Laplace
TRUSTED_K, USABLE_K, WORST_K = 0.5, 0.7, 5.0
COMPARABLE = 0.1


@dataclass(frozen=True, kw_only=True)
class Attempt:
    """A rung, whether the climb may stop on it, and the draws behind it.

    Attributes
    ----------
    rung : what is told
    accepted : whether its tests passed
    kind : "expansion", "draws" or "path"; two kinds are independent of one another
    pareto_k : () of the weights; nan where there are none
    sample : the weighted draws, or None
    """

    rung: Rung
    accepted: bool
    kind: str
    pareto_k: float = np.nan
    sample: Sample | None = None

    @property
    def cautious_error(self) -> float:
        """Standard error [nats] enlarged where the weights are known to mislead."""
        error = self.rung.standard_error
        if self.accepted or not self.pareto_k > TRUSTED_K:
            return error
        if self.pareto_k <= USABLE_K:
            return 2.0 * error
        return max(3.0 * error, 0.1 + 0.5 * (min(self.pareto_k, WORST_K) - USABLE_K))


@dataclass(frozen=True, kw_only=True)
class Verdict:
    """The number to stand by.

    Attributes
    ----------
    estimate, standard_error : (), () [nats]
    agreed : whether a second, independent estimate agrees
    sample : weighted draws behind it, or None
    """

    estimate: float
    standard_error: float
    agreed: bool
    sample: Sample | None


def best_available(attempts: Sequence[Attempt]) -> Verdict:
    """Choose among attempts: the last accepted one, else the one with the least cautious error.

    Without an accepted rung the error covers, within three of it, the distance to the next best
    estimate of another kind.
    """
    for attempt in reversed(attempts):
        if attempt.accepted:
            rung = attempt.rung
            return Verdict(
                estimate=rung.estimate,
                standard_error=rung.standard_error,
                agreed=True,
                sample=attempt.sample,
            )
    finite = [a for a in attempts if np.isfinite(a.rung.estimate + a.cautious_error)]
    if not finite:
        return Verdict(estimate=np.nan, standard_error=np.nan, agreed=False, sample=None)
    return _least_bad(sorted(finite, key=lambda a: a.cautious_error))


def _least_bad(ordered: list[Attempt]) -> Verdict:
    best = ordered[0]
    error = best.cautious_error
    others = [a for a in ordered[1:] if a.kind != best.kind or a.rung.name != best.rung.name]
    agreed = False
    for other in others:
        distance = abs(other.rung.estimate - best.rung.estimate)
        joint = np.hypot(error, other.cautious_error)
        agreed = agreed or distance <= max(COMPARABLE, 3.0 * joint)
    if others:
        distance = abs(others[0].rung.estimate - best.rung.estimate)
        error = max(error, 0.5 * distance)
    return Verdict(
        estimate=best.rung.estimate, standard_error=error, agreed=agreed, sample=best.sample
    )


def trust_word(verdict: Verdict, accepted: bool, doubts: bool, plain: float) -> str:
    """Return the word of trust: sound, corrected, rough, doubtful or failed."""
    if not np.isfinite(verdict.estimate):
        return "failed"
    if doubts or not verdict.agreed:
        return "doubtful"
    if not accepted or 3.0 * verdict.standard_error > SOUND_BAR:
        return "rough"
    return "sound" if abs(plain - verdict.estimate) <= SOUND_BAR else "corrected"
