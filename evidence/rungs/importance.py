"""Importance sampling from the modes' mixture with a part on the prior's scale (rungs 1 and 2)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from evidence.rungs.pareto import pareto_k
from evidence.rungs.probes import Probes
from evidence.rungs.proposal import Component, Mixture, component
from evidence.rungs.record import Mode, Target
from evidence.rungs.weights import log_mean_exp, relative_error

__all__ = ["Sample", "mode_mixture", "sample_mixture", "summarise", "with_peaks"]

BROAD_SHARE = 0.1
SMALLEST_SHARE = 0.03
MOST_LATER = 0.6  # share of peaks that the mode search missed
REPLICATES = 8


@dataclass(frozen=True, kw_only=True)
class Sample:
    """Draws of a mixture with their importance weights.

    Attributes
    ----------
    draws : [n, d] unconstrained coordinates
    log_density : [n] of the target [nats]
    log_weights : [n] target minus mixture [nats]
    estimate : () log evidence [nats]
    standard_error : () larger of scramble error and weight error [nats]
    scramble_error : () from the scatter of the replicates alone [nats]
    pareto_k : () shape of the largest weights
    share : () effective share of the draws
    """

    draws: np.ndarray
    log_density: np.ndarray
    log_weights: np.ndarray
    estimate: float
    standard_error: float
    scramble_error: float
    pareto_k: float
    share: float


def mode_mixture(
    modes: Sequence[Mode],
    probes: Sequence[Probes],
    target: Target,
) -> Mixture:
    """Build the proposal: a split Student-t for each mode, and ten per cent on the prior's scale.

    References
    ----------
    Geweke (1989), Econometrica 57: split Student-t. Hesterberg (1995), Technometrics 37:
    defensive mixture.
    """
    parts = [_around(m, p) for m, p in zip(modes, probes, strict=True)]
    heights = np.array([m.log_density - p.log_norm for m, p in zip(modes, parts, strict=True)])
    peaks = np.array([np.isfinite(m.laplace) for m in modes])
    if peaks.any():  # a search that ran off must not draw the mixture after it
        heights = np.where(peaks, heights, -np.inf)
    shares = np.exp(heights - heights.max())
    shares = np.maximum(shares / shares.sum(), SMALLEST_SHARE)
    local = Mixture.of(parts, shares)
    broad = Mixture.of([component(target.centre, np.diag(target.spread))], [1.0], [True])
    return local.joined(broad, BROAD_SHARE)


def _around(mode: Mode, probes: Probes) -> Component:
    return component(mode.z, mode.axes, below=probes.below, above=probes.above)


def with_peaks(mixture: Mixture, peaks: Sequence[Component], target: Target) -> Mixture:
    """Give peaks found later their share of the mixture, by their height and volume."""
    if not peaks:
        return mixture
    centres = np.array([p.centre for p in peaks])
    heights = target.batch(centres) - np.array([p.log_norm for p in peaks])
    local = [c for c, b in zip(mixture.components, mixture.broad, strict=True) if not b]
    known = target.batch(np.array([c.centre for c in local]))
    known = known - np.array([c.log_norm for c in local])
    part = np.exp(heights - max(heights.max(), known.max()))
    rest = np.exp(known - max(heights.max(), known.max())).sum()
    share = np.clip(part.sum() / (part.sum() + rest), SMALLEST_SHARE * len(peaks), MOST_LATER)
    part = np.maximum(part / part.sum(), SMALLEST_SHARE)
    return mixture.joined(Mixture.of(peaks, part), float(share))


def sample_mixture(
    target: Target,
    mixture: Mixture,
    n: int,
    rng: np.random.Generator,
    *,
    replicates: int = REPLICATES,
) -> Sample:
    """Estimate the log evidence from n stratified quasi-random draws of a mixture.

    Parameters
    ----------
    target : Target
        The log density.
    mixture : Mixture
        The proposal; every draw is weighted by the whole mixture (Hesterberg 1995).
    n : int
        Number of draws over all replicates.
    rng : numpy.random.Generator
        Source of the scrambles.
    replicates : int
        Independent randomisations, whose scatter gives the scramble error.

    Returns
    -------
    Sample
        The draws, the estimate and its error.
    """
    counts = mixture.counts(n // replicates)
    drawn = mixture.draw(counts, rng, replicates)
    z = drawn.reshape(-1, target.dim)
    log_density = target.batch(z)
    log_weights = log_density - mixture.at_counts(counts).log_density(z)
    return summarise(z, log_density, log_weights, replicates)


def summarise(
    z: np.ndarray, log_density: np.ndarray, log_weights: np.ndarray, replicates: int
) -> Sample:
    """Turn weighted draws [n, d], replicate by replicate, into an estimate with its error."""
    infinite = not np.isfinite(log_weights).any() or np.isposinf(log_weights).any()
    if infinite:
        values = (float(np.max(log_weights)), float("inf"), float("inf"), float("inf"), 0.0)
    else:
        values = _estimate(log_weights, replicates)
    estimate, error, scramble, k, share = values
    return Sample(
        draws=z,
        log_density=log_density,
        log_weights=log_weights,
        estimate=estimate,
        standard_error=error,
        scramble_error=scramble,
        pareto_k=k,
        share=share,
    )


def _estimate(log_weights: np.ndarray, replicates: int) -> tuple[float, ...]:
    estimate = log_mean_exp(log_weights)
    scaled = np.exp(log_weights.reshape(replicates, -1) - estimate).mean(axis=1)
    scramble = float(np.std(scaled, ddof=1) / np.sqrt(replicates)) if replicates > 1 else np.nan
    weights = np.exp(log_weights - np.max(log_weights))
    share = float(weights.sum() ** 2 / np.sum(weights**2) / len(weights))
    error = float(np.nanmax([scramble, relative_error(log_weights)]))
    return estimate, error, scramble, pareto_k(log_weights), share
