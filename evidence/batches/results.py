"""Rows of a batch: one per data set and candidate, as columns."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from evidence.arithmetic import log_sum_exp
from evidence.batches.answers import Answers
from evidence.batches.findings import TRUST, TRUST_CODE, status_word
from evidence.comparison import JOINT_ERRORS, OUT_OF_REACH, SETTLED_LEAD, TRUSTED

__all__ = ["COLUMNS", "PartResult", "join", "settled_rows"]

COLUMNS = {
    "data_set": "what identifies the data set",
    "candidate": "name of the candidate",
    "log_evidence": "log of the probability density of the data set under the candidate, averaged "
    "over its priors; the accepted estimate [nats]",
    "standard_error": "error of the log evidence: three of them must cover the truth; empty where "
    "unchecked [nats]",
    "laplace": "plain Laplace approximation at the leading mode [nats]",
    "probability": "posterior probability of the candidate on this data set, from the log "
    "evidences and the prior probabilities; failed candidates are left out [0 to 1]",
    "trust": "sound, corrected, rough, doubtful, failed or unchecked",
    "status": "OK, or what stands against the number, in one word",
}
NUMBERS = ("log_evidence", "standard_error", "laplace")


@dataclass(frozen=True, kw_only=True)
class PartResult:
    """The answers of all K candidates on the n data sets of a part.

    Attributes
    ----------
    index, first : int, int
        Number of the part; position of its first data set.
    names : tuple
        Of the data sets.
    log_evidence, standard_error, laplace, probability : (n, K)
    trust, status : (n, K)
        Codes.
    notes : dict
        Position within the part -> why the data set could not be used.
    fingerprint : str
        Of the data that went in.
    """

    index: int
    first: int
    names: tuple[Any, ...]
    log_evidence: np.ndarray
    standard_error: np.ndarray
    laplace: np.ndarray
    probability: np.ndarray
    trust: np.ndarray
    status: np.ndarray
    notes: Mapping[int, str] = field(default_factory=dict)
    fingerprint: str = ""

    def __len__(self) -> int:
        return len(self.names)

    def columns(self, candidates: Sequence[str]) -> dict[str, Any]:
        """Columns of the table, data set by data set."""
        k = len(candidates)
        names = np.array(self.names, dtype=object)
        if all(isinstance(name, int) for name in self.names):
            names = names.astype(np.int64)
        words = np.array(TRUST, dtype=object)
        codes, inverse = np.unique(self.status.ravel(), return_inverse=True)
        statuses = np.array([status_word(int(code)) for code in codes], dtype=object)
        return {
            "data_set": np.repeat(names, k),
            "candidate": np.tile(np.array(list(candidates), dtype=object), len(self.names)),
            **{name: getattr(self, name).ravel() for name in (*NUMBERS, "probability")},
            "trust": words[self.trust.ravel()],
            "status": statuses[inverse],
        }


def join(
    index: int,
    first: int,
    names: tuple[Any, ...],
    answers: Sequence[Answers],
    notes: Mapping[int, str],
    prior_probabilities: Sequence[float],
    fingerprint: str,
) -> PartResult:
    """Put the answers of all candidates side by side and compare them on each data set."""

    def side_by_side(name: str) -> np.ndarray:
        return np.stack([getattr(a, name) for a in answers], axis=1)

    columns = {name: side_by_side(name) for name in (*NUMBERS, "trust", "status")}
    weights = columns["log_evidence"] + np.log(np.asarray(prior_probabilities))
    present = np.isfinite(weights) & (columns["trust"] != TRUST_CODE["failed"])
    weights = np.where(present, weights, -np.inf)
    total = log_sum_exp(weights, axis=1, keepdims=True)
    with np.errstate(invalid="ignore"):
        probability = np.where(present, np.exp(weights - total), np.nan)
    return PartResult(index=index, first=first, names=names, probability=probability, notes=notes,
                      fingerprint=fingerprint, **columns)  # fmt: skip


def settled_rows(part: PartResult, prior_probabilities: Sequence[float]) -> np.ndarray:
    """Whether each data set (n,) is settled, by the rule of :mod:`evidence.comparison`."""
    weights = part.log_evidence + np.log(np.asarray(prior_probabilities))
    counted = np.isfinite(weights) & (part.trust != TRUST_CODE["failed"])
    weights = np.where(counted, weights, -np.inf)
    lead = np.argmax(weights, axis=1)
    row = np.arange(len(weights))
    trusted = np.isin(part.trust, [TRUST_CODE[word] for word in TRUSTED])
    error = np.where(np.isnan(part.standard_error), np.inf, part.standard_error)
    joint = JOINT_ERRORS * np.hypot(error, error[row, lead][:, None])
    needed = np.maximum(SETTLED_LEAD, joint)
    doubtful = part.trust == TRUST_CODE["doubtful"]
    needed = np.where(doubtful, np.maximum(needed, OUT_OF_REACH + joint), needed)
    with np.errstate(invalid="ignore"):
        behind = counted & (trusted | doubtful) & (weights[row, lead][:, None] - weights > needed)
    behind[row, lead] = True
    return trusted[row, lead] & behind.all(axis=1)
