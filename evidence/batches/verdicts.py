"""From what the compiled checks saw to one number, its error, a word of trust and a status.

The thresholds are those of a single fit's first rung (:mod:`evidence.rungs.methods`), for all rows
of a candidate at once.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from evidence.arithmetic import log_sum_exp
from evidence.batches.findings import TRUST_CODE, Finding
from evidence.outcome import Outcome
from evidence.rungs.expansion import (
    LARGEST_CANCELLATION,
    LARGEST_PER_COORDINATE,
    LARGEST_TRUSTED,
    LARGEST_USED,
    MATTERS,
    SMALL_PARTS,
)
from evidence.rungs.ladder import RISE_ALLOWED
from evidence.rungs.methods import FLOOR_DRAWS, FLOOR_EXPANSION
from evidence.rungs.pareto import pareto_k
from evidence.rungs.verdict import SOUND_BAR

__all__ = ["Drawn", "Expanded", "Rows", "judge", "judge_draws", "judge_expansion"]

FEW_ERROR, FEW_SHARE = 0.08, 0.12  # a few draws may scatter more than a single fit's 1024
FULL_ERROR, FULL_K = 0.04, 0.5
HEAVY_SHARE = 0.3
CLOSE, CLOSE_MOST = 0.03, 0.1
AXIS_LIMIT = 3.0


class Rows(NamedTuple):
    """The verdict on each row (n,): log evidence, standard error [nats], codes."""

    log_evidence: np.ndarray
    standard_error: np.ndarray
    trust: np.ndarray
    status: np.ndarray


class Expanded(NamedTuple):
    """Sum over modes with the second-order term, per row (n,), and what speaks against it."""

    plain: np.ndarray
    estimate: np.ndarray
    term: np.ndarray
    finding: np.ndarray


class Drawn(NamedTuple):
    """Estimate from draws, per row (n,), with its error, and whether the weights are steady."""

    estimate: np.ndarray
    error: np.ndarray
    heaviest: np.ndarray
    steady: np.ndarray


def judge_expansion(laplace: np.ndarray, looks: dict[str, np.ndarray], dim: int) -> Expanded:
    """Add up modes (n, M), nan where there is none, with what was seen around them (n, M)."""
    term = np.where(np.isfinite(looks["term"]), looks["term"], np.inf)
    limit = max(LARGEST_USED, LARGEST_PER_COORDINATE * dim)
    used = np.where(np.abs(term) <= limit, term, 0.0)
    value = np.where(np.isnan(laplace), -np.inf, laplace)
    plain = value.max(axis=1)
    matter = value > plain[:, None] - MATTERS
    worst = np.argmax(np.where(matter, np.abs(term), -1.0), axis=1)[:, None]
    leading = np.take_along_axis(term, worst, 1)[:, 0]
    parts = np.abs(looks["cubic"]) + np.abs(looks["quartic"])
    parts = np.take_along_axis(parts, worst, 1)[:, 0]
    large = ~(np.abs(leading) <= min(LARGEST_TRUSTED, LARGEST_PER_COORDINATE * dim))
    cancels = parts > np.maximum(LARGEST_CANCELLATION * np.abs(leading), SMALL_PARTS)
    present = np.isfinite(value)
    finding = np.zeros(len(laplace), np.int64)
    for code, met in (
        (Finding.CANCELLING_TERM, cancels),
        (Finding.LARGE_TERM, large),
        (Finding.WIDER_THAN_PRIOR, (present & (looks["widest"] > AXIS_LIMIT)).any(axis=1)),
        (Finding.HIGHER_NEARBY, looks["rise"][:, 0] > RISE_ALLOWED),
        (Finding.WALL, (present & (looks["wall"] > 0)).any(axis=1)),
        (Finding.UNBOUNDED, (looks["endless"] > 0).any(axis=1)),
    ):
        finding[met] = code
    return Expanded(plain, log_sum_exp(value + used, axis=1), leading, finding)


def judge_draws(log_weights: np.ndarray, *, full: bool) -> Drawn:
    """Estimate from log weights (n, draws); ``full`` tests them as a single fit does."""
    count = log_weights.shape[1]
    with np.errstate(invalid="ignore", over="ignore"):
        estimate = log_sum_exp(log_weights, axis=1) - np.log(count)
        weights = np.exp(log_weights - estimate[:, None])
        error = weights.std(axis=1) / np.sqrt(count)
        heaviest = weights.max(axis=1) / count
    if full:
        k = np.array([pareto_k(row) for row in log_weights])
        steady = (k < FULL_K) & (error < FULL_ERROR)
    else:
        steady = (heaviest < FEW_SHARE) & (error < FEW_ERROR)
    return Drawn(estimate, error, heaviest, steady)


def judge(expanded: Expanded, drawn: Drawn, *, spread_known: bool) -> tuple[Rows, np.ndarray]:
    """Join both; also tell which rows only the scatter of the draws leaves open."""
    gap = drawn.estimate - expanded.estimate
    with np.errstate(invalid="ignore"):
        near = np.maximum(CLOSE, np.minimum(3.0 * drawn.error, CLOSE_MOST))
        close = np.abs(gap) <= near
    believed = expanded.finding == 0
    accepted = believed & close & drawn.steady
    error = np.maximum(FLOOR_EXPANSION, np.maximum(0.5 * np.abs(gap), 0.1 * np.abs(expanded.term)))
    heavy = np.maximum(3.0 * drawn.error, np.maximum(0.5 * np.abs(gap), 0.1))
    unsure = np.where(drawn.heaviest > HEAVY_SHARE, heavy, 2.0 * drawn.error)
    unsure = np.maximum(unsure, np.maximum(FLOOR_DRAWS, np.abs(gap) / 3.0))
    estimate = np.where(accepted, expanded.estimate, drawn.estimate)
    error = np.where(accepted, error, unsure)
    distance = np.abs(expanded.plain - estimate)
    word = np.where(distance <= SOUND_BAR, TRUST_CODE["sound"], TRUST_CODE["corrected"])
    word = np.where(3.0 * error > SOUND_BAR, TRUST_CODE["rough"], word)
    trusted = accepted & spread_known
    status = np.where(believed & ~close, Finding.DRAWS_DISAGREE, expanded.finding)
    status = np.where(believed & close & ~drawn.steady, Finding.DRAWS_SCATTER, status)
    status = np.where(accepted & (not spread_known), Finding.NO_SPREAD, status)
    word = np.where(trusted, word, TRUST_CODE["doubtful"])
    infinite = np.isposinf(drawn.estimate)
    failed = infinite | (status == Finding.UNBOUNDED)
    status = np.where(infinite, int(Outcome.INFINITE), status)
    word = np.where(failed, TRUST_CODE["failed"], word)
    estimate, error = (np.where(failed, np.nan, x) for x in (estimate, error))
    return Rows(estimate, error, word, status), believed & ~accepted & ~infinite
