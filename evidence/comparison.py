"""The arithmetic of a comparison: probabilities with their errors, the verdict, what settles it."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np

from evidence.arithmetic import log_sum_exp

__all__ = ["Comparison", "Entry", "compare", "decisive_prior_probability", "grade"]

DRAWS = 4000
SETTLED_LEAD = 1.0  # nats: 2 log B = 2, the first grade of Kass & Raftery (1995)
JOINT_ERRORS = 3.0
OUT_OF_REACH = 10.0  # nats behind the leader at which a doubtful number can no longer overtake
DECISIVE = 0.95
TRUSTED = ("sound", "corrected", "rough")


@dataclasses.dataclass(frozen=True, kw_only=True)
class Entry:
    """What a comparison needs to know of a candidate.

    Attributes
    ----------
    name : str
    log_evidence, standard_error : (), ()
        [nats]; nan where unknown.
    prior_probability : ()
    trust : str
    """

    name: str
    log_evidence: float
    standard_error: float
    prior_probability: float
    trust: str

    @property
    def counted(self) -> bool:
        """Whether there is a number to compare."""
        return bool(np.isfinite(self.log_evidence)) and self.trust != "failed"


@dataclasses.dataclass(frozen=True, kw_only=True)
class Comparison:
    """Candidates side by side, in the order given.

    Attributes
    ----------
    probabilities : tuple of float
        Posterior probabilities; nan for a failed candidate, the others are conditional on
        leaving it out.
    intervals : tuple of (low, high)
        95 % intervals that carry the errors of the log evidences; nan where unknown.
    leader, runner_up : str or None
    lead : ()
        Log posterior odds of the leader against the runner-up [nats].
    settled : bool
    verdict : str
        One sentence.
    decisive_prior_probability : ()
        Smallest prior probability of the leader at which its posterior reaches 0.95.
    """

    probabilities: tuple[float, ...]
    intervals: tuple[tuple[float, float], ...]
    leader: str | None
    runner_up: str | None
    lead: float
    settled: bool
    verdict: str
    decisive_prior_probability: float


def compare(entries: Sequence[Entry], *, seed: int) -> Comparison:
    """Compare candidates by their log evidences and prior probabilities.

    Parameters
    ----------
    entries : sequence of Entry
    seed : int
        Of the draws that carry the errors into the probabilities.
    """
    counted = [e for e in entries if e.counted]
    chances = dict(zip((e.name for e in counted), _probabilities(counted), strict=True))
    ranges = dict(zip((e.name for e in counted), _intervals(counted, seed), strict=True))
    order = sorted(counted, key=lambda e: -_log_weight(e))
    leader = order[0] if order else None
    runner_up = order[1] if len(order) > 1 else None
    lead = _log_weight(leader) - _log_weight(runner_up) if runner_up else np.nan
    settled = leader is not None and _is_settled(leader, entries)
    return Comparison(
        probabilities=tuple(chances.get(e.name, np.nan) for e in entries),
        intervals=tuple(ranges.get(e.name, (np.nan, np.nan)) for e in entries),
        leader=leader.name if leader else None,
        runner_up=runner_up.name if runner_up else None,
        lead=float(lead),
        settled=settled,
        verdict=_verdict(entries, leader, runner_up, chances, ranges, settled),
        decisive_prior_probability=decisive_prior_probability(counted, leader),
    )


def decisive_prior_probability(counted: Sequence[Entry], leader: Entry | None) -> float:
    """Smallest prior probability of the leader at which its posterior is still 0.95.

    t Q / ((1 - t) Z_L + t Q), with Q the sum over the others of renormalised prior x evidence
    (asked for by Kruschke 2021, Nature Human Behaviour 5:1282).
    """
    others = [e for e in counted if leader is not None and e.name != leader.name]
    if leader is None or not others:
        return np.nan
    share = np.array([e.prior_probability for e in others])
    with np.errstate(divide="ignore"):
        log_q = log_sum_exp([e.log_evidence for e in others] + np.log(share / share.sum()))
    # in units of the leader's evidence, so that nothing overflows
    log_odds = np.log(DECISIVE) + log_q - np.log1p(-DECISIVE) - leader.log_evidence
    return float(1.0 / (1.0 + np.exp(-log_odds))) if log_odds > -700 else 0.0


def grade(lead: float) -> str:
    """Words for a log Bayes factor [nats], by Kass & Raftery (1995), 2 log B of 2, 6 and 10."""
    doubled = 2 * abs(lead)
    if doubled < 2:
        return "not worth more than a bare mention"
    if doubled < 6:
        return "positive"
    return "strong" if doubled < 10 else "very strong"


def _log_weight(entry: Entry) -> float:
    return entry.log_evidence + float(np.log(entry.prior_probability))


def _probabilities(counted: Sequence[Entry]) -> np.ndarray:
    weights = np.array([_log_weight(e) for e in counted])
    return np.exp(weights - log_sum_exp(weights)) if len(weights) else weights


def _intervals(counted: Sequence[Entry], seed: int) -> list[tuple[float, float]]:
    """95 % intervals of the probabilities, each log evidence drawn from its own error."""
    if not counted or not all(np.isfinite(e.standard_error) for e in counted):
        return [(np.nan, np.nan)] * len(counted)
    columns = [
        _log_weight(e)
        + e.standard_error * np.random.default_rng([seed, 0xC0, k]).standard_normal(DRAWS)
        for k, e in enumerate(counted)
    ]
    weights = np.stack(columns, axis=1)
    chances = np.exp(weights - log_sum_exp(weights, axis=1, keepdims=True))
    low, high = np.quantile(chances, [0.025, 0.975], axis=0)
    return list(zip(low.tolist(), high.tolist(), strict=True))


def _is_settled(leader: Entry, entries: Sequence[Entry]) -> bool:
    """Whether the leader is ahead beyond error, and nobody untrusted could overtake it."""
    if leader.trust not in TRUSTED:
        return False
    return all(_is_behind(leader, other) for other in entries if other.name != leader.name)


def _is_behind(leader: Entry, other: Entry) -> bool:
    if not other.counted or other.trust == "unchecked":
        return False
    gap = _log_weight(leader) - _log_weight(other)
    joint = float(np.hypot(leader.standard_error, other.standard_error))
    least = OUT_OF_REACH + JOINT_ERRORS * joint if other.trust == "doubtful" else SETTLED_LEAD
    # an error that is not known is none of zero: every comparison with nan is false
    return bool(gap > JOINT_ERRORS * joint and gap >= least)


def _verdict(
    entries: Sequence[Entry],
    leader: Entry | None,
    runner_up: Entry | None,
    chances: dict[str, float],
    ranges: dict[str, tuple[float, float]],
    settled: bool,
) -> str:
    failed = [e.name for e in entries if not e.counted]
    left_out = f", leaving out {_listed(failed)}, which failed" if failed else ""
    if leader is None:
        return f"No verdict: no candidate has a log evidence{left_out}."
    if runner_up is None:
        if len(entries) == 1:
            return (
                f"{leader.name} is the only candidate; its log evidence is "
                f"{leader.log_evidence:.2f} nats."
            )
        return f"Not settled: {leader.name} is the only candidate with a log evidence{left_out}."
    factor = leader.log_evidence - runner_up.log_evidence
    low, high = ranges[leader.name]
    interval = f" ({_chance(low)} to {_chance(high)})" if np.isfinite(low) else ""
    graded = f"{grade(factor)} on the scale of Kass & Raftery (1995)"
    if factor < 0:
        graded = "so that it leads by the prior probabilities alone"
    body = (
        f"{leader.name} leads with probability {_chance(chances[leader.name])}{interval}; its log "
        f"Bayes factor against {runner_up.name} is {factor:.2f} nats, {graded}{left_out}."
    )
    return body if settled else f"Not settled: {body}{_reason(leader, entries)}"


def _reason(leader: Entry, entries: Sequence[Entry]) -> str:
    """Why the comparison is not settled, in one more sentence."""
    unchecked = [e.name for e in entries if e.trust == "unchecked"]
    if unchecked:
        return " The log evidences are unchecked."
    if leader.trust not in TRUSTED:
        return f" The number of {leader.name} is {leader.trust}."
    open_ones = [e for e in entries if e.counted and e is not leader and not _is_behind(leader, e)]
    doubtful = [e.name for e in open_ones if e.trust == "doubtful"]
    if doubtful:
        return f" {_listed(doubtful)} is doubtful and could overtake."
    if open_ones:
        return f" {_listed([e.name for e in open_ones])} is within reach."
    return ""


def _chance(value: float) -> str:
    if value > 0.999:
        return ">0.999"
    return "<0.001" if value < 0.001 else f"{value:.3f}"


def _listed(names: Sequence[str]) -> str:
    return ", ".join(names)
