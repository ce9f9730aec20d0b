"""What many data sets say together: the same candidate for all, or a share for each.

*Fixed effects*: one candidate made all data sets; log evidences add up, and a single data set may
decide. *Random effects*: each data set was made by a candidate of its own, drawn with unknown
frequencies that have a flat Dirichlet prior (Stephan, Penny, Daunizeau, Moran & Friston 2009,
NeuroImage 46:1004). The protected exceedance probability allows for the null that all candidates
are equally frequent (Rigoux, Stephan, Friston & Daunizeau 2014, NeuroImage 84:971).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from typing import Any

import numpy as np
from scipy.special import betainc, digamma, gammaln, logsumexp
from scipy.stats import gamma

__all__ = ["GroupSummary", "random_effects", "summarise_groups"]

TOLERANCE = 1e-10
MOST_ROUNDS = 10_000
NODES = 400

COLUMNS = {
    "candidate": "name of the candidate",
    "summed_log_evidence": "fixed effects: log evidence summed over data sets; assumes that one "
    "candidate made all of them [nats]",
    "expected_frequency": "random effects: expected share of data sets that the candidate made",
    "exceedance": "random effects: probability that the candidate is the most frequent one",
    "protected_exceedance": "the same, allowing for the null of equal frequencies",
}


@dataclasses.dataclass(frozen=True, kw_only=True)
class GroupSummary:
    """Candidates over a group of data sets.

    Attributes
    ----------
    candidates : tuple of str
    data_sets, left_out : int, int
        How many were used; how many lack the log evidence of a candidate.
    summed_log_evidence : (K,)
        Fixed effects [nats].
    concentration : (K,)
        Of the Dirichlet posterior of the frequencies.
    expected_frequency, exceedance, protected_exceedance : (K,)
        Random effects.
    null_probability : ()
        Posterior probability that all candidates are equally frequent.
    """

    candidates: tuple[str, ...]
    data_sets: int
    left_out: int
    summed_log_evidence: np.ndarray
    concentration: np.ndarray
    expected_frequency: np.ndarray
    exceedance: np.ndarray
    protected_exceedance: np.ndarray
    null_probability: float

    def table(self) -> Any:
        """One row per candidate as a pandas table."""
        import pandas as pd

        columns = {name: getattr(self, name) for name in list(COLUMNS)[1:]}
        frame = pd.DataFrame({"candidate": list(self.candidates), **columns})
        frame.attrs["columns"] = dict(COLUMNS)
        return frame

    @property
    def summary(self) -> str:
        """One sentence."""
        best = int(np.argmax(self.expected_frequency))
        left = f" ({self.left_out} left out)" if self.left_out else ""
        return (
            f"over {self.data_sets} data sets{left}, {self.candidates[best]} has the largest "
            f"expected frequency, {self.expected_frequency[best]:.3f}, and is the most frequent "
            f"with protected exceedance probability {self.protected_exceedance[best]:.3f}"
        )


def summarise_groups(log_evidence: np.ndarray, candidates: Sequence[str]) -> GroupSummary:
    """Fixed and random effects from log evidences (N, K) [nats]; rows with nan are left out."""
    whole = np.isfinite(log_evidence).all(axis=1)
    values = log_evidence[whole]
    concentration, responsibility = random_effects(values)
    chance = _exceedance(concentration)
    null = _null_probability(values, concentration, responsibility)
    k = values.shape[1]
    return GroupSummary(
        candidates=tuple(candidates),
        data_sets=len(values),
        left_out=int((~whole).sum()),
        summed_log_evidence=values.sum(axis=0),
        concentration=concentration,
        expected_frequency=concentration / concentration.sum(),
        exceedance=chance,
        protected_exceedance=(1.0 - null) * chance + null / k,
        null_probability=null,
    )


def random_effects(log_evidence: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Dirichlet concentration (K,) and responsibilities (N, K) by variational Bayes.

    From a concentration of one for each candidate: g_nk in proportion to
    exp(log Z_nk + digamma(alpha_k)), alpha_k = 1 + sum_n g_nk, until nothing moves.
    """
    alpha = np.ones(log_evidence.shape[1])
    for _ in range(MOST_ROUNDS):
        weights = log_evidence + digamma(alpha)
        share = np.exp(weights - logsumexp(weights, axis=1, keepdims=True))
        new = 1.0 + share.sum(axis=0)
        moved = np.max(np.abs(new - alpha)) / new.sum()
        alpha = new
        if moved < TOLERANCE:
            break
    return alpha, share


def _exceedance(alpha: np.ndarray) -> np.ndarray:
    """P(frequency k is the largest) under a Dirichlet: a one-dimensional integral for each."""
    k = len(alpha)
    if k == 1:
        return np.ones(1)
    if k == 2:
        first = float(1.0 - betainc(alpha[0], alpha[1], 0.5))
        return np.array([first, 1.0 - first])
    # frequencies are gamma variables over their sum: compare those, at quantiles of the k-th
    nodes, weights = np.polynomial.legendre.leggauss(NODES)
    levels = 0.5 * (nodes + 1.0)
    chances = np.array(
        [
            0.5 * np.sum(weights * np.prod(
                [gamma.cdf(gamma.ppf(levels, alpha[i]), alpha[j]) for j in range(k) if j != i],
                axis=0,
            ))
            for i in range(k)
        ]
    )  # fmt: skip
    return chances / chances.sum()


def _null_probability(log_evidence: np.ndarray, alpha: np.ndarray, share: np.ndarray) -> float:
    """Posterior probability of equal frequencies against the Dirichlet prior."""
    k = log_evidence.shape[1]
    if k == 1:
        return 0.0
    null = float(np.sum(logsumexp(log_evidence - np.log(k), axis=1)))
    odds = _free_energy(log_evidence, alpha, share) - null
    return float(1.0 / (1.0 + np.exp(np.clip(odds, -700, 700))))


def _free_energy(log_evidence: np.ndarray, alpha: np.ndarray, share: np.ndarray) -> float:
    """Lower bound on the log evidence of the random-effects model [nats]."""
    k = len(alpha)
    log_frequency = digamma(alpha) - digamma(alpha.sum())
    with np.errstate(divide="ignore", invalid="ignore"):
        entropy = -np.nansum(np.where(share > 0, share * np.log(share), 0.0))
    joint = gammaln(k) + np.sum(share * (log_evidence + log_frequency))
    dirichlet = np.sum(gammaln(alpha)) - gammaln(alpha.sum())
    return float(joint + dirichlet - np.sum((alpha - 1.0) * log_frequency) + entropy)
