"""Who leads whom by how much, and how that moves with the numbers of the declarations."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from evidence.complaints import DeclarationError, sentence
from evidence.stress.changes import JointChange
from evidence.stress.levers import Lever
from evidence.stress.recomputing import Recomputed
from evidence.weighing import Weighing

__all__ = ["Standing", "stand"]

SLOPE_STEP = 0.02


@dataclasses.dataclass(frozen=True, kw_only=True, eq=False)
class Standing:
    """A weighing whose candidates can be computed again.

    Attributes
    ----------
    weighing : Weighing
    leader, runner_up : str, str or None
    recomputed : mapping of str to Recomputed
        The candidates that have a log evidence.
    left_out : tuple of str
        Sentences on the others.
    """

    weighing: Weighing
    leader: str
    runner_up: str | None
    recomputed: Mapping[str, Recomputed]
    left_out: tuple[str, ...]

    def log_evidence(self, name: str) -> float:
        """The accepted one [nats]."""
        return self.weighing[name].log_evidence

    def parameters(self, name: str) -> tuple[str, ...]:
        """Names of a candidate's parameters."""
        return self.recomputed[name].problem.model.parameters

    def lead(self, rival: str) -> float:
        """Log posterior odds of the leader against another candidate [nats]."""
        chances = self.weighing.prior_probabilities
        odds = np.log(chances[self.leader]) - np.log(chances[rival])
        return float(self.log_evidence(self.leader) - self.log_evidence(rival) + odds)

    def lead_at(self, rival: str, levers: Sequence[Lever], steps: Sequence[float]) -> float:
        """The lead with numbers of either candidate moved, gaps held [nats]."""
        lead = self.lead(rival)
        for name, sign in ((self.leader, 1.0), (rival, -1.0)):
            one = self.recomputed[name]
            lead += sign * (one.value(*_own(name, levers, steps)) - one.value([], []))
        return float(lead)

    def slopes_at(self, rival: str, levers: Sequence[Lever], steps: Any) -> np.ndarray:
        """Derivatives of the lead (k,) [nats per step], by central differences."""
        slopes = np.empty(len(levers))
        for index, lever in enumerate(levers):
            one, sign = self.recomputed[lever.candidate], 1.0
            if lever.candidate == rival:
                sign = -1.0
            own, at = _own(lever.candidate, levers, steps)
            place = own.index(lever)
            ends = []
            for move in (SLOPE_STEP, -SLOPE_STEP):
                there = list(at)
                there[place] += move
                ends.append(one.value(own, there))
            slopes[index] = sign * (ends[0] - ends[1]) / (2 * SLOPE_STEP)
        return slopes

    def change(
        self, rival: str, levers: tuple[Lever, ...], steps: tuple[float, ...], audit: bool
    ) -> JointChange:
        """A change at which two candidates are even, audited once where asked."""
        audited, error = np.nan, np.nan
        if audit and self.weighing[self.leader].depth != "none":
            audited, error = self._audited(rival, levers, steps)
        return JointChange(
            levers=levers,
            steps=steps,
            difference=self.lead_at(rival, levers, steps),
            audited=audited,
            audited_error=error,
        )

    def _audited(
        self, rival: str, levers: Sequence[Lever], steps: Sequence[float]
    ) -> tuple[float, float]:
        values, errors = {}, {}
        for name in (self.leader, rival):
            own, at = _own(name, levers, steps)
            result = self.weighing[name]
            values[name], errors[name] = result.log_evidence, result.standard_error
            if own:
                values[name], errors[name] = self.recomputed[name].audited(own, at)
        change = values[self.leader] - self.log_evidence(self.leader)
        change -= values[rival] - self.log_evidence(rival)
        joint = float(np.hypot(errors[self.leader], errors[rival]))
        return self.lead(rival) + float(change), joint


def _own(
    name: str, levers: Sequence[Lever], steps: Sequence[float]
) -> tuple[list[Lever], list[float]]:
    """Those levers and steps that belong to one candidate."""
    pairs = [(x, float(s)) for x, s in zip(levers, steps, strict=True) if x.candidate == name]
    return [x for x, _ in pairs], [s for _, s in pairs]


def stand(weighing: Any, asked: str) -> Standing:
    """Prepare the candidates of a weighing for being computed again.

    Raises
    ------
    DeclarationError
        No weighing, a saved one, or one in which no candidate has a log evidence.
    """
    if not isinstance(weighing, Weighing):
        raise DeclarationError(
            sentence(
                f"{asked} needs what evidence.weigh returns",
                type(weighing).__name__,
                f"Type: ev.{asked}(ev.weigh(models, data))",
            )
        )
    if any(result.problem is None for result in weighing.values()):
        raise DeclarationError(
            sentence(
                f"{asked} computes evidences again, and a saved result holds no candidates",
                remedy="Weigh the study again: ev.weigh(ev.read_study(path))",
            )
        )
    if weighing.leader is None:
        raise DeclarationError(
            f"{asked} has no verdict to overturn: no candidate has a log evidence. "
            f"{weighing.verdict}"
        )
    recomputed, left_out = {}, []
    for name, result in weighing.items():
        if np.isfinite(result.log_evidence) and (result.dimension == 0 or result.posterior):
            recomputed[name] = Recomputed(result)
        else:
            left_out.append(f"{name} has no log evidence at a smooth peak and is left as it is")
    runner_up = weighing.comparison.runner_up
    usable = runner_up if runner_up in recomputed else None
    if weighing.leader not in recomputed:
        raise DeclarationError(
            f"{asked} follows peaks of the posterior, and {weighing.leader} has no smooth one."
        )
    return Standing(
        weighing=weighing,
        leader=weighing.leader,
        runner_up=usable,
        recomputed=recomputed,
        left_out=tuple(left_out),
    )
