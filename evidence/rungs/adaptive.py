"""Importance sampling from a mixture that learns the posterior's shape (rungs 3 and 4)."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from evidence.rungs.importance import Sample, sample_mixture
from evidence.rungs.proposal import Component, Mixture, component
from evidence.rungs.record import Target
from evidence.rungs.weights import log_sum_exp, truncated_share

__all__ = ["learn_mixture", "mixture_from_draws", "refit", "sample_adapted"]

ROUNDS = 4
STEPS_PER_ROUND = 3
KEPT_OF_START = 0.2
WHOLE_SHARE, WHOLE_STRETCH, WHOLE_DEGREES = 0.1, 3.0**0.5, 2.0
COMPONENTS, FEW_COMPONENTS = 8, 2
MANY_UP_TO_DIM = 15
SMALLEST_SHARE = 1e-3
SMALLEST_SUPPORT = 3.0  # effective draws below which a component is dropped
SINGULAR = 1e-8


def sample_adapted(
    target: Target,
    start: Mixture,
    rng: np.random.Generator,
    *,
    draws_per_round: int,
    final_draws: int,
    size: int = COMPONENTS,
) -> Sample:
    """Adapt a Student-t mixture to the target over a few rounds, then sample from it.

    Parameters
    ----------
    target : Target
        The log density.
    start : Mixture
        First proposal; it stays in as a defensive part of 20 %.
    rng : numpy.random.Generator
        Source of all draws.
    draws_per_round, final_draws : int
        Draws of each adapting round, and of the estimate; the latter are fresh.
    size : int
        Number of components to learn (two where there are more than 15 dimensions).

    Returns
    -------
    Sample
        Independent of the adapting draws, hence unbiased.

    References
    ----------
    Cappe, Douc, Guillin, Marin & Robert (2008), Stat. Comput. 18: adaptive mixtures.
    Ionides (2008), J. Comput. Graph. Stat. 17: truncated weights.
    """
    mixture = learn_mixture(target, start, rng, draws_per_round=draws_per_round, size=size)
    return sample_mixture(target, mixture, final_draws, rng)


def learn_mixture(
    target: Target,
    start: Mixture,
    rng: np.random.Generator,
    *,
    draws_per_round: int,
    size: int = COMPONENTS,
) -> Mixture:
    """Return the mixture learned from weighted draws, with 20 % of the start in it."""
    current, learned = start, None
    for _ in range(ROUNDS):
        sample = sample_mixture(target, current, draws_per_round, rng, replicates=1)
        if not np.isfinite(sample.estimate):
            break
        weights = truncated_share(sample.log_weights)
        if learned is None:
            learned = _first_guess(sample.draws, weights, start, size, rng)
        learned = refit(learned, sample.draws, weights)
        whole = _around_all(sample.draws, weights, start)
        current = learned.joined(whole, WHOLE_SHARE).joined(start, KEPT_OF_START)
    return current


def _around_all(draws: np.ndarray, weights: np.ndarray, start: Mixture) -> Mixture:
    """One wide component over everything seen, for the tails between and beyond the others."""
    mean = weights @ draws
    spread = _covariance(draws, weights, mean)
    axes = _root(spread, spread + 1e-9 * _start_covariance(start))
    return Mixture.of([component(mean, WHOLE_STRETCH * axes, degrees=WHOLE_DEGREES)], np.ones(1))


def _start_covariance(start: Mixture) -> np.ndarray:
    return start.components[0].axes @ start.components[0].axes.T


def _first_guess(
    draws: np.ndarray, weights: np.ndarray, start: Mixture, size: int, rng: np.random.Generator
) -> Mixture:
    """Place components on draws taken by weight, with most of the whole covariance each."""
    few = draws.shape[1] > MANY_UP_TO_DIM
    size = FEW_COMPONENTS if few else size
    mean = weights @ draws
    spread = _covariance(draws, weights, mean)
    floor = _start_covariance(start)
    axes = _root(spread + (0.5 if few else 1e-6) * floor, spread + 1e-9 * floor)
    chosen = rng.choice(len(draws), size=size, p=weights)
    scale = 1.0 if few else 0.6
    return Mixture.of([component(draws[i], scale * axes) for i in chosen], np.ones(size))


def refit(mixture: Mixture, draws: np.ndarray, weights: np.ndarray) -> Mixture:
    """Take a few expectation-maximisation steps on draws [n, d] with weights [n]."""
    for _ in range(STEPS_PER_ROUND):
        parts = mixture.log_parts(draws)
        membership = np.exp(parts - log_sum_exp(parts, axis=0)) * weights
        fitted = [
            _fit_one(part, draws, w) for part, w in zip(mixture.components, membership, strict=True)
        ]
        kept = [(part, w.sum()) for part, w in zip(fitted, membership, strict=True) if part]
        if not kept:
            return mixture
        mixture = Mixture.of([part for part, _ in kept], [share for _, share in kept])
    return mixture


def _fit_one(part: Component, draws: np.ndarray, weights: np.ndarray) -> Component | None:
    """Refit one Student-t to weighted draws (Peel & McLachlan 2000); None where too few."""
    d = draws.shape[1]
    total = weights.sum()
    support = total**2 / max(np.sum(weights**2), 1e-300)
    if total < SMALLEST_SHARE or support < SMALLEST_SUPPORT:
        return None
    u = (draws - part.centre) @ part.inverse.T
    damped = weights * (part.degrees + d) / (part.degrees + np.einsum("nd,nd->n", u, u))
    centre = damped @ draws / damped.sum()
    fitted = _covariance(draws, damped, centre) / total
    held = 1.0 / (1.0 + support / (2.0 * d))  # few draws: hold on to the old shape
    old = part.axes @ part.axes.T
    return component(centre, _root((1.0 - held) * fitted + held * old, old))


def _covariance(draws: np.ndarray, weights: np.ndarray, centre: np.ndarray) -> np.ndarray:
    away = draws - centre
    return (away * weights[:, None]).T @ away


def _root(covariance: np.ndarray, reference: np.ndarray) -> np.ndarray:
    """Return a root [d, d] of a covariance, its smallest eigenvalues lifted.

    Eigenvalues are taken in units of the reference, so that unequal scales do no harm.
    """
    scale = np.sqrt(np.diag(reference))
    values, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
    values = np.maximum(values, SINGULAR * max(values.max(), 1e-300) + 1e-12)
    return scale[:, None] * vectors * np.sqrt(values)


def mixture_from_draws(
    draws: np.ndarray, size: int, rng: np.random.Generator, *, cycles: int = 5
) -> Mixture:
    """Fit a mixture to equally weighted draws [n, d]."""
    weights = np.full(len(draws), 1.0 / len(draws))
    covariance = _covariance(draws, weights, weights @ draws)
    axes = _root(covariance, covariance + 1e-12 * np.eye(draws.shape[1]))
    chosen: Sequence[int] = rng.choice(len(draws), size=size, replace=False)
    mixture = Mixture.of([component(draws[i], 0.6 * axes) for i in chosen], np.ones(size))
    for _ in range(cycles):
        mixture = refit(mixture, draws, weights)
    return mixture
