"""What each observation does to one candidate's log evidence.

Two different questions. The pull is the derivative of the log evidence in the weight of the
observation's term: log likelihood of the term at the mode, corrected for the width of the
posterior and for the mode's own movement. Leaving the observation out is a finite change:
log Z without i minus log Z = log E[1 / likelihood of i], the mean over the posterior (Gelfand,
Dey & Chang 1992, in Bayesian Statistics 4), by re-weighting accepted draws; or recomputed.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Sequence
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from evidence.arithmetic import log_sum_exp
from evidence.curvature import whitened_axes
from evidence.estimate import Approximation
from evidence.laplace import LOG_2PI, STEP, Mode, expand
from evidence.mode import MATTERS, gather, search_numpy
from evidence.problem import Density, Evaluation, Problem
from evidence.rungs.pareto import pareto_k
from evidence.stress.recomputing import Recomputed

__all__ = ["Reweighed", "left_out_by_draws", "pulls", "recomputed_without"]

GAUSSIAN_DRAWS = 4000
MOST_TERMS = 20_000_000  # draws x observations held at once
ROWS = 64
SHAPES_FOR = 5000  # observations for which the Pareto shape is fitted


class Reweighed(Problem):
    """A problem whose log-likelihood terms carry weights (n,): the same programs but one."""

    def __init__(self, problem: Problem, weights: np.ndarray) -> None:
        self.__dict__.update(copy.copy(problem.__dict__))
        self.weights = weights

    def evaluate(self, z: np.ndarray) -> Evaluation:
        """Log density and derivatives at z (d,), as NumPy arrays."""
        d = self.dim
        packed = np.asarray(self.program("evaluate_weighted", _weighted)(z, self.weights))
        return Evaluation(packed[0], packed[1 : d + 1], packed[d + 1 :].reshape(d, d))


def _weighted(density: Density) -> Callable[..., Any]:
    def evidence_weighted(z: Any, weights: Any, hyper: Any, data: Any) -> Any:
        here = density.evaluate(z, hyper, data, weights)
        return jnp.concatenate([here.log_density[None], here.gradient, here.hessian.ravel()])

    return evidence_weighted


def recomputed_without(recomputed: Recomputed, chosen: Sequence[int]) -> float:
    """Change of the log evidence when some observations are left out, recomputed [nats].

    Laplace's method with its second-order term from the known modes, at the weights 1 and at 0
    for the chosen observations.
    """
    problem = recomputed.problem
    weights = np.ones(problem.terms or 0)
    weights[list(chosen)] = 0.0
    return _sum(recomputed, weights) - recomputed.value([], [])


def _sum(recomputed: Recomputed, weights: np.ndarray) -> float:
    problem = Reweighed(recomputed.problem, weights)
    if problem.dim == 0:
        return float(problem.evaluate(np.zeros(0)).log_density)
    peaks = gather(search_numpy(problem, recomputed.starts)).peaks
    if not peaks:
        return np.nan
    kept = [p for p in peaks if p.laplace > peaks[0].laplace - MATTERS]
    terms = [
        expand(problem.hessian, p.z, p.hessian, problem.spread).total
        if recomputed.with_term
        else 0.0
        for p in kept
    ]
    return float(log_sum_exp([p.laplace + c for p, c in zip(kept, terms, strict=True)]))


def pulls(result: Approximation) -> np.ndarray:
    """Derivative of the Laplace log evidence in each observation's weight: (n,) [nats].

    l_i(m) + 1/2 sum_k D2 l_i[s_k, s_k] - D l_i[u] with H^-1 = sum_k s_k s_k' and u = H^-1 times
    half the derivative of log det H: the last term is the movement of the mode. Over modes, their
    mean by share.
    """
    problem = result.problem
    assert problem is not None
    if problem.dim == 0:
        nothing = np.zeros((0, 0)), np.zeros(0)
        return np.asarray(problem.program("pulls", _pulls)(np.zeros(0), *nothing))
    smooth = [m for m in result.modes if np.isfinite(m.laplace)]
    laplace = np.array([m.laplace for m in smooth])
    shares = np.exp(laplace - log_sum_exp(laplace))
    total = np.zeros(problem.terms or 0)
    for mode, share in zip(smooth, shares, strict=True):
        if share > 1e-12:
            total += share * _pulls_at(problem, mode)
    return total


def _pulls_at(problem: Problem, mode: Mode) -> np.ndarray:
    axes = whitened_axes(mode.hessian, problem.spread).directions
    traces = []
    for column in axes.T:
        change = problem.hessian(mode.z + STEP * column) - problem.hessian(mode.z - STEP * column)
        traces.append(np.einsum("ik,ij,jk->", axes, change, axes) / (2 * STEP))
    moving = 0.5 * axes @ np.array(traces)
    return np.asarray(problem.program("pulls", _pulls)(mode.z, axes, moving))


def _pulls(density: Density) -> Callable[..., Any]:
    def evidence_pulls(z: Any, axes: Any, moving: Any, hyper: Any, data: Any) -> Any:
        def terms(z: Any) -> Any:
            return density.terms(z, hyper, data)

        def along(place: Any, direction: Any) -> Any:
            return jax.jvp(terms, (place,), (direction,))[1]

        def second(total: Any, column: Any) -> tuple[Any, None]:
            curved = jax.jvp(lambda place: along(place, column), (z,), (column,))[1]
            return total + 0.5 * curved, None

        start = terms(z)
        width = jax.lax.scan(second, jnp.zeros_like(start), axes.T)[0]
        return start + width - along(z, moving)

    return evidence_pulls


def left_out_by_draws(result: Approximation) -> tuple[np.ndarray, np.ndarray]:
    """Change of the log evidence without each observation: (n,) [nats], and its Pareto k (n,).

    Accepted draws of the audit are re-weighted, or draws of the Gaussian where there are none.
    """
    problem = result.problem
    assert problem is not None
    z, log_weights = _draws(result, problem)
    log_weights = log_weights - log_sum_exp(log_weights)
    terms = _terms_at(problem, z)
    with np.errstate(invalid="ignore", over="ignore"):
        ratios = np.where(np.isfinite(log_weights)[:, None], log_weights[:, None] - terms, -np.inf)
    ratios = np.where(np.isnan(ratios), -np.inf, ratios)
    change = np.asarray(log_sum_exp(ratios, axis=0))
    shapes = np.full(terms.shape[1], np.nan)
    strongest = np.argsort(-np.abs(change - np.median(change)), kind="stable")[:SHAPES_FOR]
    for index in strongest:
        shapes[index] = pareto_k(ratios[:, index])
    return change, shapes


def _draws(result: Approximation, problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    """Draws (m, d) with log weights (m,) towards the posterior."""
    if problem.dim == 0:
        return np.zeros((1, 0)), np.zeros(1)
    most = max(200, MOST_TERMS // max(problem.terms or 1, 1))
    weighted = getattr(result.posterior, "weighted", None)
    if weighted is not None:
        z, log_weights = weighted.z, weighted.log_weights
        if len(z) > most:
            rng = np.random.default_rng([result.seed, 0x0B5])
            chosen = rng.choice(len(z), size=most, replace=False)
            z, log_weights = z[chosen], log_weights[chosen]
        return z, log_weights
    z = result.posterior.draws_z(min(GAUSSIAN_DRAWS, most))
    return z, problem.batch(z) - _gaussian(result, z)


def _gaussian(result: Approximation, z: np.ndarray) -> np.ndarray:
    """Log density (m,) of the mixture of Gaussians at the modes, not normalised."""
    parts = []
    for mode in result.posterior.modes:
        away = z - mode.z
        half = 0.5 * np.einsum("md,de,me->m", away, mode.hessian, away)
        log_det = np.linalg.slogdet(mode.hessian)[1]
        parts.append(mode.laplace + 0.5 * log_det - 0.5 * z.shape[1] * LOG_2PI - half)
    return np.asarray(log_sum_exp(np.stack(parts), axis=0))


def _terms_at(problem: Problem, z: np.ndarray) -> np.ndarray:
    """Log-likelihood terms at draws (m, d): (m, n) [nats], a few rows at a time."""
    program = problem.program("terms_batch", _terms_batch)
    rows = min(ROWS, max(1, len(z)))
    pieces = []
    for first in range(0, len(z), rows):
        piece = z[first : first + rows]
        padded = np.concatenate([piece, np.repeat(piece[-1:], rows - len(piece), axis=0)])
        pieces.append(np.asarray(program(padded))[: len(piece)])
    return np.concatenate(pieces)


def _terms_batch(density: Density) -> Callable[..., Any]:
    def evidence_terms(z: Any, hyper: Any, data: Any) -> Any:
        return jax.vmap(lambda point: density.terms(point, hyper, data))(z)

    return evidence_terms
